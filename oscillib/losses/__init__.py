"""Losses: reconstruction of what was observed, continuity between windows."""

from ._continuity import continuity as continuity
from ._reconstruction import reconstruction as reconstruction
