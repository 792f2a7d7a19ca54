"""Wilson-Cowan populations."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_shape
from ..parameters import Constraint, Fixed, Free, Positive
from ._arrays import check_state, matching, scalar
from ._coupling import Coupling, as_coupling, coupling_constraint, received


class WilsonCowanParams(eqx.Module):
    """Parameters of Wilson-Cowan nodes; the defaults are the oscillating set of the first paper.

    All arrays but `coupling` and `gain` have shape `(node,)`.

    Arguments:
        drive_e: `P`, external drive of the excitatory population; the oscillating set has 1.25.
        drive_i: `Q`, external drive of the inhibitory population; default 0.
        ee: weight of excitatory on excitatory; default 16.
        ei: weight of inhibitory on excitatory, taken off; default 12.
        ie: weight of excitatory on inhibitory; default 15.
        ii: weight of inhibitory on inhibitory, taken off; default 3.
        slope_e: steepness of the excitatory response; default 1.3.
        threshold_e: its threshold; default 4.
        slope_i: steepness of the inhibitory response; default 2.
        threshold_i: its threshold; default 3.7.
        refractory: `r`, what part of the active fraction cannot fire; default 1.
        time_e: time constant of the excitatory population, time units; default 1.
        time_i: time constant of the inhibitory population, time units; default 1.
        coupling: `K`, a matrix `(node, node)` or `Edges`: excitatory activity of node j drives the
            excitatory population of node i; default zeros.
        gain: `g`, a scalar that multiplies `K`; default 1.

    Raises:
        ValueError: an array is not of the shape given above.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.fields import WilsonCowanParams
        >>> WilsonCowanParams(drive_e=[1.25]).threshold_i
        Array([3.7], dtype=float64)
    """

    drive_e: Float[Array, " node"]
    drive_i: Float[Array, " node"]
    ee: Float[Array, " node"]
    ei: Float[Array, " node"]
    ie: Float[Array, " node"]
    ii: Float[Array, " node"]
    slope_e: Float[Array, " node"]
    threshold_e: Float[Array, " node"]
    slope_i: Float[Array, " node"]
    threshold_i: Float[Array, " node"]
    refractory: Float[Array, " node"]
    time_e: Float[Array, " node"]
    time_i: Float[Array, " node"]
    coupling: Coupling
    gain: Float[Array, ""]

    def __init__(
        self,
        drive_e,
        *,
        drive_i=None,
        ee=None,
        ei=None,
        ie=None,
        ii=None,
        slope_e=None,
        threshold_e=None,
        slope_i=None,
        threshold_i=None,
        refractory=None,
        time_e=None,
        time_i=None,
        coupling=None,
        gain=None,
    ):
        """Convert every array, fill in the defaults, and check shapes and dtypes."""
        self.drive_e = as_float(drive_e)
        check_shape("drive_e", self.drive_e, (None,), "(node,)")
        reference = ("drive_e", self.drive_e)
        self.drive_i = matching("drive_i", drive_i, 0.0, reference)
        self.ee = matching("ee", ee, 16.0, reference)
        self.ei = matching("ei", ei, 12.0, reference)
        self.ie = matching("ie", ie, 15.0, reference)
        self.ii = matching("ii", ii, 3.0, reference)
        self.slope_e = matching("slope_e", slope_e, 1.3, reference)
        self.threshold_e = matching("threshold_e", threshold_e, 4.0, reference)
        self.slope_i = matching("slope_i", slope_i, 2.0, reference)
        self.threshold_i = matching("threshold_i", threshold_i, 3.7, reference)
        self.refractory = matching("refractory", refractory, 1.0, reference)
        self.time_e = matching("time_e", time_e, 1.0, reference)
        self.time_i = matching("time_i", time_i, 1.0, reference)
        self.coupling = as_coupling("coupling", coupling, reference)
        self.gain = scalar("gain", gain, 1.0, reference)

    def constraints(self) -> "WilsonCowanParams":
        """Return the usual constraints: drives, weights, time constants and coupling are fitted.

        Drives are free; the four weights and both time constants positive; responses, refractory
        part and gain are fixed, because the drives and weights can take their place.

        Example:
            >>> from oscillib.fields import WilsonCowanParams
            >>> WilsonCowanParams([1.25]).constraints().slope_e
            Fixed()
        """
        leaves: list[Constraint] = [
            *[Free()] * 2, *[Positive()] * 4, *[Fixed()] * 5, *[Positive()] * 2,
            coupling_constraint(self.coupling), Fixed(),
        ]  # fmt: skip
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def wilson_cowan(
    t: Array | float, y: Float[Array, "2 node"], params: WilsonCowanParams
) -> Float[Array, "2 node"]:
    """Vector field of a network of Wilson-Cowan nodes.

        time_e dE/dt = -E + (k_e - r E) S_e(ee E - ei I + P + g sum_j K_ij E_j)
        time_i dI/dt = -I + (k_i - r I) S_i(ie E - ii I + Q)
        S(x) = 1 / (1 + exp(-slope (x - threshold))) - 1 / (1 + exp(slope threshold))

    `S` is shifted so that `S(0) = 0`, and `k = S(infinity)`. Without drive the origin is therefore
    a fixed point: silence.

    Known facts. The default set with `drive_e = 1.25` oscillates with period 4.9958943 time
    constants. With `ee, ei, ie, ii = 12, 4, 13, 11`, slopes 1.2 and 1, thresholds 2.8 and 4 and no
    drive there are three fixed points: silence and a high one are stable, with a saddle between.

    Arguments:
        t: not used.
        y: state `(E, I)`, active fractions, shape `(2, node)`.
        params: see `WilsonCowanParams`.

    Returns:
        `dy/dt`, shape `(2, node)`, per time unit.

    Raises:
        ValueError: the state does not fit the parameters.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import WilsonCowanParams, wilson_cowan
        >>> wilson_cowan(0.0, jnp.zeros((2, 1)), WilsonCowanParams(drive_e=[0.0]))
        Array([[0.],
               [0.]], dtype=float64)

    Source: Wilson & Cowan 1972, Biophysical Journal 12 (from memory).
    """
    del t
    check_state(y, 2, ("drive_e", params.drive_e))
    p, (e, i) = params, y
    others = p.gain * received(p.coupling, e[None])[0]
    to_e = p.ee * e - p.ei * i + p.drive_e + others
    to_i = p.ie * e - p.ii * i + p.drive_i
    s_e, k_e = _response(to_e, p.slope_e, p.threshold_e)
    s_i, k_i = _response(to_i, p.slope_i, p.threshold_i)
    de = (-e + (k_e - p.refractory * e) * s_e) / p.time_e
    di = (-i + (k_i - p.refractory * i) * s_i) / p.time_i
    return jnp.stack([de, di])


def _response(x: Array, slope: Array, threshold: Array) -> tuple[Array, Array]:
    """Return the response and its greatest value."""
    at_zero = jax.nn.sigmoid(-slope * threshold)
    return jax.nn.sigmoid(slope * (x - threshold)) - at_zero, 1 - at_zero
