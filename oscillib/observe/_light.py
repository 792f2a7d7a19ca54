"""Log-intensity readout: light whose logarithm follows the state, on a saturating sensor."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Fixed, Free, Positive


class LightParams(eqx.Module):
    """Parameters of a log-intensity readout.

    Arguments:
        level: shape `(channel,)`, log of the intensity at `x = 0`, intensity in channel units.
        gain: shape `(channel,)`, change of the log intensity per unit of state.
        ceiling: shape `(channel,)`, channel units: what the sensor reads of unlimited light.
        background: shape `(channel,)`, channel units, read in the dark; default zeros.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.observe import LightParams
        >>> LightParams(level=[5.0], gain=[0.3], ceiling=[4000.0]).background
        Array([0.], dtype=float64)
    """

    level: Float[Array, " channel"]
    gain: Float[Array, " channel"]
    ceiling: Float[Array, " channel"]
    background: Float[Array, " channel"]

    def __init__(self, level, gain, *, ceiling, background=None):
        """Convert every array and check shapes and dtypes."""
        self.level = as_float(level)
        check_shape("level", self.level, (None,), "(channel,)")
        self.gain, self.ceiling = as_float(gain), as_float(ceiling)
        zeros = jnp.zeros_like(self.level)
        self.background = zeros if background is None else as_float(background)
        for name in ("gain", "ceiling", "background"):
            check_shape(name, getattr(self, name), self.level.shape, "(channel,)")
            check_same_dtype(name, getattr(self, name), "level", self.level)

    def constraints(self) -> "LightParams":
        """Return the usual constraints: level free, gain positive, the sensor's own values fixed.

        Example:
            >>> from oscillib.observe import LightParams
            >>> LightParams([5.0], [0.3], ceiling=[4000.0]).constraints().ceiling
            Fixed()
        """
        leaves: list[Constraint] = [Free(), Positive(), Fixed(), Fixed()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def light_readout(
    y: Float[Array, "component node"], params: LightParams
) -> Float[Array, " channel"]:
    """Read light from the first component `x` of every node.

        L_i = exp(level_i + gain_i x_i)
        channel_i = background_i + ceiling_i L_i / (ceiling_i + L_i)

    The intensity `L` is positive and its rhythm is proportional: troughs are long and flat, peaks
    sharp, as of glowing tissue. Far below the ceiling a channel reads `background + L`, far above
    it the ceiling, as a counter with dead time does.

    Arguments:
        y: one state, shape `(component, node)`; node i is read by channel i.
        params: see `LightParams`.

    Returns:
        Shape `(channel,)`, channel units.

    Raises:
        ValueError: the state does not fit the channels.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import LightParams, light_readout
        >>> params = LightParams([0.0, 0.0], [1.0, 1.0], ceiling=[1.0, 1e9], background=[2.0, 2.0])
        >>> print(light_readout(jnp.zeros((1, 2)), params).round(6))
        [2.5 3. ]

    Source: saturation of a counter with non-paralysable dead time; common practice, no source.
    """
    y = jnp.asarray(y)
    check_shape("y", y, (None, params.level.shape[0]), "(component, node)")
    check_same_dtype("y", y, "params.level", params.level)
    log_intensity = params.level + params.gain * y[0]
    # The logistic form neither overflows nor loses the derivative, however bright the light.
    reached = jax.nn.sigmoid(log_intensity - jnp.log(params.ceiling))
    return params.background + params.ceiling * reached
