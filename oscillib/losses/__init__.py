"""Losses: reconstruction, continuity between windows, and what trains an encoder."""

from ._bound import (
    Bound as Bound,
    evidence_bound as evidence_bound,
    free_bits as free_bits,
    importance_bound as importance_bound,
)
from ._continuity import continuity as continuity
from ._reconstruction import reconstruction as reconstruction
from ._simulated import (
    Simulated as Simulated,
    posterior_loss as posterior_loss,
    simulate_pair as simulate_pair,
)
