"""One Hopf unit, to be coupled by the generic wrapper: sparse and delayed Hopf networks."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float
from ..parameters import Constraint, Fixed, Free, Positive
from ._arrays import check_state, matching


class HopfUnitParams(eqx.Module):
    """Parameters of Hopf units without their coupling; as in `HopfParams`.

    Arguments:
        growth: `a`, shape `(node,)`, or `()` for a single unit; per time unit.
        frequency: `w`, same shape, rad per time unit.
        shear: `c`, same shape; default 0.
        saturation: `b >= 0`, same shape; default 1.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.fields import HopfUnitParams
        >>> HopfUnitParams(growth=[0.2, -0.1], frequency=[6.0, 6.5]).shear
        Array([0., 0.], dtype=float64)
    """

    growth: Float[Array, "*node"]
    frequency: Float[Array, "*node"]
    shear: Float[Array, "*node"]
    saturation: Float[Array, "*node"]

    def __init__(self, growth, frequency, *, shear=None, saturation=None):
        """Convert every array and fill in the defaults."""
        self.growth = as_float(growth)
        reference = ("growth", self.growth)
        self.frequency = matching("frequency", frequency, 0.0, reference)
        self.shear = matching("shear", shear, 0.0, reference)
        self.saturation = matching("saturation", saturation, 1.0, reference)

    def constraints(self) -> "HopfUnitParams":
        """Return the constraints of `HopfParams`: growth free, shear fixed, the others positive.

        Example:
            >>> from oscillib.fields import HopfUnitParams
            >>> HopfUnitParams([0.2], [6.0]).constraints().shear
            Fixed()
        """
        leaves: list[Constraint] = [Free(), Positive(), Fixed(), Positive()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def hopf_unit(
    t: Array | float, y: Float[Array, "2 *node"], params: HopfUnitParams
) -> Float[Array, "2 *node"]:
    """Vector field of a Hopf normal-form unit, or of several that are not coupled.

        dz/dt = (a + i w) z - (b + i c) |z|^2 z,    z = x + i y

    The same units as in `HopfNetwork`; `coupled(hopf_unit, component=(0, 1))` with `Edges` is that
    network for couplings too large to store as a matrix, or delayed.

    Arguments:
        t: not used.
        y: state `(x, y)`, shape `(2, node)`, or `(2,)` for a single unit.
        params: growth, frequency, shear, saturation.

    Returns:
        `dy/dt`, shape of `y`.

    Raises:
        ValueError: the state does not fit the parameters.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfUnitParams, hopf_unit
        >>> hopf_unit(0.0, jnp.array([1.0, 0.0]), HopfUnitParams(1.0, 6.0))
        Array([0., 6.], dtype=float64)

    Source: normal form of the Hopf bifurcation, Kuramoto 1984 (from memory).
    """
    del t
    check_state(y, 2, ("growth", params.growth))
    r2 = jnp.sum(y**2, axis=0)
    growth = params.growth - params.saturation * r2
    turn = params.frequency - params.shear * r2
    return jnp.stack([growth * y[0] - turn * y[1], growth * y[1] + turn * y[0]])
