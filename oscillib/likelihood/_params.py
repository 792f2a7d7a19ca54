"""Parameters of a noisy system and of how it is read, in one tree."""

from typing import Any

import equinox as eqx
import jax
from jaxtyping import Array, Float

from .._validate import as_float, check_shape
from ..parameters import Constraint, Positive


class StateSpaceParams(eqx.Module):
    """Everything that the likelihood of a recording depends on, except the start.

    Arguments:
        dynamics: what the noisy step takes, usually `NoisyParams(field, noise)`.
        readout: what the readout takes, usually a `ReadoutParams`.
        reading_noise: standard deviation of the reading of each channel, shape `(channel,)`,
            channel units.

    Raises:
        ValueError: `reading_noise` is not `(channel,)`.

    Example:
        >>> from oscillib.fields import HopfParams
        >>> from oscillib.integrate import NoisyParams
        >>> from oscillib.likelihood import StateSpaceParams
        >>> from oscillib.observe import ReadoutParams
        >>> dynamics = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1])
        >>> StateSpaceParams(dynamics, ReadoutParams([1.0]), [0.1]).reading_noise
        Array([0.1], dtype=float64)
    """

    dynamics: Any
    readout: Any
    reading_noise: Float[Array, " channel"]

    def __init__(self, dynamics: Any, readout: Any, reading_noise: Any):
        """Convert the reading noise and check its shape."""
        self.dynamics = dynamics
        self.readout = readout
        self.reading_noise = as_float(reading_noise)
        check_shape("reading_noise", self.reading_noise, (None,), "(channel,)")

    def constraints(self) -> "StateSpaceParams":
        """Return the parts' own constraints, and a positive reading noise.

        The size of the state and the gain trade off exactly in a linear network: fix the gain or
        the noise with `eqx.tree_at` there.

        Example:
            >>> from oscillib.fields import HopfParams
            >>> from oscillib.integrate import NoisyParams
            >>> from oscillib.likelihood import StateSpaceParams
            >>> from oscillib.observe import ReadoutParams
            >>> dynamics = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1])
            >>> params = StateSpaceParams(dynamics, ReadoutParams([1.0]), [0.1])
            >>> params.constraints().reading_noise
            Positive()
        """
        leaves: list[Constraint] = [
            *jax.tree.leaves(self.dynamics.constraints()),
            *jax.tree.leaves(self.readout.constraints()),
            Positive(),
        ]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)
