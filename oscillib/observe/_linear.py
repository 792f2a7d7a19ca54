"""Linear readout: channels from the first component of every node."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Free, Positive


class ReadoutParams(eqx.Module):
    """Gain and offset of a linear readout.

    Arguments:
        gain: channel units per unit of state. Shape `(channel,)`: channel i reads node i; or
            `(channel, node)`: a map from nodes to channels.
        offset: shape `(channel,)`, channel units; default zeros.

    Raises:
        ValueError: shapes other than these.
        TypeError: gain and offset differ in dtype.

    Example:
        >>> from oscillib.observe import ReadoutParams
        >>> ReadoutParams(gain=[2.0, 3.0]).offset
        Array([0., 0.], dtype=float64)
    """

    gain: Float[Array, "channel *node"]
    offset: Float[Array, " channel"]

    def __init__(self, gain, offset=None):
        """Convert both arrays and check that they fit."""
        self.gain = as_float(gain)
        if self.gain.ndim not in (1, 2):
            raise ValueError(
                "`gain` must have shape (channel,) or (channel, node); "
                f"got shape {self.gain.shape}."
            )
        channels = self.gain.shape[0]
        zeros = jnp.zeros(channels, self.gain.dtype)
        self.offset = zeros if offset is None else as_float(offset)
        check_shape("offset", self.offset, (channels,), "(channel,)")
        check_same_dtype("offset", self.offset, "gain", self.gain)

    def constraints(self) -> "ReadoutParams":
        """Return the usual constraints: one gain a channel is positive, a map is free.

        Example:
            >>> from oscillib.observe import ReadoutParams
            >>> ReadoutParams(gain=[2.0]).constraints().gain
            Positive()
        """
        leaves: list[Constraint] = [Positive() if self.gain.ndim == 1 else Free(), Free()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def linear_readout(
    y: Float[Array, "component node"], params: ReadoutParams
) -> Float[Array, " channel"]:
    """Read channels from the first component `x` of every node.

        channel_i = gain_i x_i + offset_i    or    channel = gain @ x + offset

    Arguments:
        y: one state, shape `(component, node)`; use `vmap` for a trajectory.
        params: gain `(channel,)` or `(channel, node)`, offset `(channel,)`.

    Returns:
        Shape `(channel,)`, in channel units.

    Raises:
        ValueError: the state is not `(component, node)`, or its nodes do not fit the gain.
        TypeError: state and gain differ in dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import ReadoutParams, linear_readout
        >>> y = jnp.array([[1.0, 2.0], [9.0, 9.0]])
        >>> linear_readout(y, ReadoutParams(gain=[[0.5, 0.5]], offset=[10.0]))
        Array([11.5], dtype=float64)
    """
    y = jnp.asarray(y)
    check_shape("y", y, (None, params.gain.shape[-1]), "(component, node)")
    check_same_dtype("y", y, "params.gain", params.gain)
    x = y[0]
    read = params.gain * x if params.gain.ndim == 1 else params.gain @ x
    return read + params.offset
