"""The FitzHugh-Nagumo unit."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float
from ..parameters import Constraint, Free, Positive
from ._arrays import check_state, matching


class FitzHughNagumoParams(eqx.Module):
    """Parameters of FitzHugh-Nagumo units; the defaults are FitzHugh's.

    Arguments:
        drive: `I`, shape `(node,)`, or `()` for a single unit.
        offset: `a`, same shape; default 0.7.
        slope: `b`, same shape; default 0.8.
        slowness: `e`, same shape: how much slower recovery is than excitation; default 0.08.
        rate: `r`, same shape, per time unit: how fast excitation is; default 1.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.fields import FitzHughNagumoParams
        >>> FitzHughNagumoParams(drive=[0.5]).slope
        Array([0.8], dtype=float64)
    """

    drive: Float[Array, "*node"]
    offset: Float[Array, "*node"]
    slope: Float[Array, "*node"]
    slowness: Float[Array, "*node"]
    rate: Float[Array, "*node"]

    def __init__(self, drive, *, offset=None, slope=None, slowness=None, rate=None):
        """Convert every array and fill in the defaults."""
        self.drive = as_float(drive)
        reference = ("drive", self.drive)
        self.offset = matching("offset", offset, 0.7, reference)
        self.slope = matching("slope", slope, 0.8, reference)
        self.slowness = matching("slowness", slowness, 0.08, reference)
        self.rate = matching("rate", rate, 1.0, reference)

    def constraints(self) -> "FitzHughNagumoParams":
        """Return the usual constraints: drive and offset free, the others positive.

        Example:
            >>> from oscillib.fields import FitzHughNagumoParams
            >>> FitzHughNagumoParams([0.5]).constraints().drive
            Free()
        """
        leaves: list[Constraint] = [Free(), Free(), Positive(), Positive(), Positive()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def fitzhugh_nagumo(
    t: Array | float, y: Float[Array, "2 *node"], params: FitzHughNagumoParams
) -> Float[Array, "2 *node"]:
    """Vector field of a FitzHugh-Nagumo unit, or of several that are not coupled.

        dv/dt = r (v - v^3 / 3 - w + I),    dw/dt = r e (v + a - b w)

    where `I, a, b, e, r` are `drive, offset, slope, slowness, rate`.

    Known facts. For `b < 1` there is one fixed point; it loses stability at the two drives of
    `fitzhugh_nagumo_onset`, between which the unit fires periodically: with the defaults and
    `I = 0.5`, with period 39.4744149802.

    Arguments:
        t: not used.
        y: state `(v, w)`, excitation and recovery, shape `(2, node)`, or `(2,)` for a single unit.
        params: drive, offset, slope, slowness, rate.

    Returns:
        `dy/dt`, shape of `y`.

    Raises:
        ValueError: the state does not fit the parameters.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import FitzHughNagumoParams, fitzhugh_nagumo
        >>> fitzhugh_nagumo(0.0, jnp.array([0.0, 0.0]), FitzHughNagumoParams(drive=0.5))
        Array([0.5  , 0.056], dtype=float64)

    Source: FitzHugh 1961; Nagumo, Arimoto & Yoshizawa 1962 (from memory).
    """
    del t
    check_state(y, 2, ("drive", params.drive))
    v, w = y
    excitation = v - v**3 / 3 - w + params.drive
    recovery = params.slowness * (v + params.offset - params.slope * w)
    return params.rate[None] * jnp.stack([excitation, recovery])


def fitzhugh_nagumo_onset(
    params: FitzHughNagumoParams,
) -> tuple[Float[Array, "2 *node"], Float[Array, "*node"]]:
    """Return the drives at which the fixed point loses and regains stability.

        v = -+ sqrt(1 - b e),  I = v^3 / 3 - v + (v + a) / b,  frequency r sqrt(e - (b e)^2)

    Arguments:
        params: as for `fitzhugh_nagumo`; the drive is not used.

    Returns:
        The two drives, shape `(2, node)`, and the angular frequency at both, shape `(node,)`, rad
        per time unit. NaN where `b e > 1` (no onset) or `b^2 e > 1`.

    Example:
        >>> from oscillib.fields import FitzHughNagumoParams, fitzhugh_nagumo_onset
        >>> drives, frequency = fitzhugh_nagumo_onset(FitzHughNagumoParams(drive=0.0))
        >>> print(drives.round(6), frequency.round(6))
        [0.331281 1.418719] 0.275507

    Source: trace of the Jacobian along the fixed points; common practice, no source.
    """
    a, b, e = params.offset, params.slope, params.slowness
    v = jnp.sqrt(1 - b * e)
    v = jnp.stack([-v, v])
    drives = v**3 / 3 - v + (v + a[None]) / b[None]
    return drives, params.rate * jnp.sqrt(e - (b * e) ** 2)
