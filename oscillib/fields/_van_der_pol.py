"""The van der Pol oscillator."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float
from ..parameters import Constraint, Positive
from ._arrays import check_state, matching


class VanDerPolParams(eqx.Module):
    """Parameters of van der Pol units.

    Arguments:
        damping: `mu`, shape `(node,)`, or `()` for a single unit; no unit.
        frequency: `w`, same shape, rad per time unit: the angular frequency of the weakly damped
            unit; default 1.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.fields import VanDerPolParams
        >>> VanDerPolParams(damping=[1.0, 5.0]).frequency
        Array([1., 1.], dtype=float64)
    """

    damping: Float[Array, "*node"]
    frequency: Float[Array, "*node"]

    def __init__(self, damping, frequency=None):
        """Convert both arrays."""
        self.damping = as_float(damping)
        self.frequency = matching("frequency", frequency, 1.0, ("damping", self.damping))

    def constraints(self) -> "VanDerPolParams":
        """Return the usual constraints: both positive.

        Example:
            >>> from oscillib.fields import VanDerPolParams
            >>> VanDerPolParams([1.0]).constraints().damping
            Positive()
        """
        leaves: list[Constraint] = [Positive(), Positive()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def van_der_pol(
    t: Array | float, y: Float[Array, "2 *node"], params: VanDerPolParams
) -> Float[Array, "2 *node"]:
    """Vector field of a van der Pol unit, or of several that are not coupled.

        dx/dt = w v,    dv/dt = w (mu (1 - x^2) v - x)

    that is `x'' = mu (1 - x^2) x' - x` in units of `1/w`; `mu, w` are `damping, frequency`.

    Known facts. The only fixed point is the origin, a source for `mu > 0`; just above `mu = 0` a
    cycle of radius 2 surrounds it. Period at `w = 1`: 6.6632868593 for `mu = 1` and about
    `(3 - 2 ln 2) mu + 7.014 mu^(-1/3)` for large `mu`; for small `mu` see
    `weak_van_der_pol_frequency`.

    Arguments:
        t: not used.
        y: state `(x, v)`, shape `(2, node)`, or `(2,)` for a single unit.
        params: damping and frequency.

    Returns:
        `dy/dt`, shape of `y`.

    Raises:
        ValueError: the state does not fit the parameters.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import VanDerPolParams, van_der_pol
        >>> van_der_pol(0.0, jnp.array([2.0, 1.0]), VanDerPolParams(damping=1.0))
        Array([ 1., -5.], dtype=float64)

    Source: van der Pol 1926; periods: Hairer, Norsett & Wanner, Solving ODEs I, section I.16, and
    Dorodnitsyn 1947 (the latter from memory).
    """
    del t
    check_state(y, 2, ("damping", params.damping))
    x, v = y
    return params.frequency[None] * jnp.stack([v, params.damping * (1 - x**2) * v - x])


def weak_van_der_pol_frequency(params: VanDerPolParams) -> Float[Array, "*node"]:
    """Return the angular frequency of weakly damped van der Pol units, as a series.

        w (1 - mu^2 / 16 + 17 mu^4 / 3072 + 35 mu^6 / 884736)

    Good to 1e-8 at `mu = 0.1` and to 1e-3 at `mu = 1`.

    Arguments:
        params: damping and frequency, shape `(node,)` or `()`.

    Returns:
        Shape of the damping, rad per time unit.

    Example:
        >>> from oscillib.fields import VanDerPolParams, weak_van_der_pol_frequency
        >>> print(weak_van_der_pol_frequency(VanDerPolParams(0.1)).round(9))
        0.999375553

    Source: Andersen & Geer 1982, SIAM Journal on Applied Mathematics 42 (from memory).
    """
    m = params.damping**2
    return params.frequency * (1 - m / 16 + 17 * m**2 / 3072 + 35 * m**3 / 884736)
