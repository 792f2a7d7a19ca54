"""A scalar function that is 0, with gradient 0, where it or its gradient is not finite."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from ..parameters import all_finite


def finite_or_zero(
    function: Callable[[Any], Array], x: Float[Array, "*shape"]
) -> tuple[Float[Array, ""], Bool[Array, ""]]:
    """Return `function(x)`, or 0 where it is not finite, and whether it is.

    `where(ok, value, 0)` alone would not do: the way back through the function multiplies that 0
    with derivatives which are not finite either, and NaN reaches every weight. So the gradient is
    taken on the way forward, looked at, and replaced by 0 as a whole if any of it is not finite.

    Arguments:
        function: from one array to a scalar; it may close over traced arrays.
        x: where.

    Returns:
        The value, and a boolean scalar.
    """
    # What the function closes over becomes an explicit argument and gets a gradient too.
    value, good = _finite_or_zero((eqx.filter_closure_convert(function, x), x))
    # A boolean that comes out of a custom rule has a tangent that reductions cannot take.
    return value, good > 0


@eqx.filter_custom_vjp
def _finite_or_zero(both):
    function, x = both
    value = function(x)
    good = jnp.isfinite(value)
    return jnp.where(good, value, 0), good.astype(value.dtype)


@_finite_or_zero.def_fwd
def _forward(perturbed, both):
    moved, fixed = eqx.partition(both, perturbed)
    value, slope = eqx.filter_value_and_grad(lambda m: _call(eqx.combine(m, fixed)))(moved)
    good = jnp.isfinite(value) & all_finite(slope)
    slope = jax.tree.map(lambda g: jnp.where(good, g, 0), slope)
    return (jnp.where(good, value, 0), good.astype(value.dtype)), slope


@_finite_or_zero.def_bwd
def _backward(slope, cotangent, perturbed, both):
    del perturbed, both
    by_value = cotangent[0]  # None where only the flag is used
    return jax.tree.map(lambda g: None if by_value is None else by_value * g, slope)


def _call(both):
    function, x = both
    return function(x)
