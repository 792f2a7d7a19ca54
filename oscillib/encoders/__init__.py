"""Encoders: from a recording to a distribution over parameters, out of exchangeable blocks."""

from ._encoder import Encoder as Encoder, Proposal as Proposal
from ._gaussian import FreeGaussian as FreeGaussian
from ._head import GaussianHead as GaussianHead
from ._network import Network as Network, decode as decode
from ._pooling import (
    AttentionPool as AttentionPool,
    LastPool as LastPool,
    MeanPool as MeanPool,
    Pooled as Pooled,
    attention_weights as attention_weights,
)
from ._prior import Prior as Prior
from ._recurrence import Recurrence as Recurrence, recur as recur
from ._samples import SampleMap as SampleMap, extent as extent, sample_inputs as sample_inputs
