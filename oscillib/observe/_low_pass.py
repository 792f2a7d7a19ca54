"""Low-pass readout: a slow sensor that follows the activity."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Fixed, Free, Positive
from ._driven import observer_rows


class LowPassParams(eqx.Module):
    """Parameters of a low-pass sensor on every node.

    Arguments:
        time: time constant `tau`, shape `(node,)`, time units.
        gain: shape `(node,)`, channel units per unit of activity; default ones.
        offset: shape `(node,)`, channel units; default zeros.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.observe import LowPassParams
        >>> LowPassParams(time=[0.5, 0.7]).gain
        Array([1., 1.], dtype=float64)
    """

    time: Float[Array, " node"]
    gain: Float[Array, " node"]
    offset: Float[Array, " node"]

    def __init__(self, time, *, gain=None, offset=None):
        """Convert every array, fill in the defaults, and check shapes and dtypes."""
        self.time = as_float(time)
        check_shape("time", self.time, (None,), "(node,)")
        self.gain = jnp.ones_like(self.time) if gain is None else as_float(gain)
        self.offset = jnp.zeros_like(self.time) if offset is None else as_float(offset)
        for name in ("gain", "offset"):
            check_shape(name, getattr(self, name), self.time.shape, "(node,)")
            check_same_dtype(name, getattr(self, name), "time", self.time)

    def constraints(self) -> "LowPassParams":
        """Return the usual constraints: time constant positive, gain fixed, offset free.

        The gain is fixed because the scale of the activity can take its place.

        Example:
            >>> from oscillib.observe import LowPassParams
            >>> LowPassParams([0.5]).constraints().time
            Positive()
        """
        leaves: list[Constraint] = [Positive(), Fixed(), Free()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def low_pass(
    t: Array | float,
    z: Float[Array, "1 node"],
    drive: Float[Array, " node"],
    params: LowPassParams,
) -> Float[Array, "1 node"]:
    """Observer that follows the activity with a lag: `dz/dt = (drive - z) / tau`.

    At angular frequency `w` it passes `1 / sqrt(1 + (w tau)^2)` of the amplitude.

    Arguments:
        t: not used.
        z: state of the sensor, units of the activity, shape `(1, node)`.
        drive: activity, shape `(node,)`.
        params: time constant.

    Returns:
        `dz/dt`, shape `(1, node)`.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import LowPassParams, low_pass
        >>> low_pass(0.0, jnp.array([[1.0]]), jnp.array([3.0]), LowPassParams([4.0]))
        Array([[0.5]], dtype=float64)

    Source: common practice, no source.
    """
    del t
    check_shape("z", z, (1, params.time.shape[0]), "(1, node)")
    check_shape("drive", drive, params.time.shape, "(node,)")
    check_same_dtype("z", z, "params.time", params.time)
    return (drive - z[0])[None] / params.time[None]


def low_pass_readout(
    y: Float[Array, "row node"], params: LowPassParams
) -> Float[Array, " channel"]:
    """Read a channel from the sensor of every node, the last row of the state.

        channel_i = gain_i z_i + offset_i

    Arguments:
        y: state of `observed(field, low_pass, rows=1)`, shape `(component + 1, node)`.
        params: gain and offset.

    Returns:
        Shape `(node,)`, channel units.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import LowPassParams, low_pass_readout
        >>> params = LowPassParams([4.0], gain=[2.0], offset=[10.0])
        >>> low_pass_readout(jnp.array([[9.0], [1.5]]), params)
        Array([13.], dtype=float64)

    Source: common practice, no source.
    """
    z = observer_rows(jnp.asarray(y), 1)[0]
    check_shape("y", y, (None, params.gain.shape[0]), "(row, node)")
    check_same_dtype("y", y, "params.gain", params.gain)
    return params.gain * z + params.offset
