"""Standard errors and intervals from the curvature at the best fit."""

from collections.abc import Callable
from typing import Any, Literal, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import check_shape
from ._flat import (
    Leaf,
    check_entrywise,
    check_loss,
    from_flat,
    layout,
    scatter,
    slopes,
    to_flat,
)
from ._information import observed_information
from ._weak import Directions, weak_directions


class Laplace(NamedTuple):
    """What `laplace` found; trees have the structure of the parameters.

    Arguments:
        lower: lower ends of the intervals; NaN where refused, the value itself where not fitted.
        upper: upper ends.
        standard_error: in the parameters' units; infinite where refused, 0 where not fitted.
        fitted: booleans: False for what is fixed, a coupling's diagonal included.
        refused: booleans: True where a weak direction spoils the entry.
        covariance: `(free, free)` in the parameters' units, in the order of `parameter_names`; NaN
            in rows and columns of refused entries.
        information: `(free, free)` on the unconstrained scale.
        directions: from `weak_directions`; `directions.covariance` is on the unconstrained scale.
        distance: `sqrt(g' C g)`, standard errors by which the parameters are off the optimum,
            C being that covariance.
    """

    lower: Any
    upper: Any
    standard_error: Any
    fitted: Any
    refused: Any
    covariance: Float[Array, "free free"]
    information: Float[Array, "free free"]
    directions: Directions
    distance: Float[Array, ""]


def laplace(
    loss: Callable[[Any], Array],
    params: Any,
    constraints: Any,
    *,
    curvature: Literal["hessian"] | Array = "hessian",
    level: float = 0.9,
    widths: Any = None,
) -> Laplace:
    """Approximate what is known about every parameter by a normal density at the best fit.

    On the flat unconstrained vector x, with A the curvature of `loss` at `params`,

        x ~ N(x_hat, C),  C = A^-1;    covariance = D C D,  D = diag(d value / d x)
        interval = value(x_hat -+ z sqrt(C_ii)),    z the normal quantile of (1 + level) / 2

    Intervals are formed on the unconstrained scale and mapped back, so that they stay within the
    constraints: those of positive parameters are positive. Weak directions are left out of C, and
    only entries that they move are refused (see `weak_directions`); others are as they would be if
    the weak directions were known.

    Sound where the log-likelihood is close to a parabola over the width of the interval, at an
    optimum within the constraints (`distance` well below 1). Long recordings make it so. Check a
    doubtful entry with `profile`. If the model is wrong, or `loss` is not a negative
    log-likelihood (a sum of squares not divided by the noise variance), the widths mean nothing.

    Arguments:
        loss: negative log-likelihood, `loss(params) -> scalar`.
        params: best fit, such as `refine(...).params`.
        constraints: tree of constraints, each acting entry by entry.
        curvature: `"hessian"` (default), or a matrix `(free, free)` on the unconstrained scale, in
            the order of `parameter_names`: `fisher_gaussian`, or the curvature of `refine`.
        level: probability of each interval, default 0.9.
        widths: as for `weak_directions`.

    Returns:
        A `Laplace`. Works, and is quicker, inside `jit`. Curvature that is not finite refuses all.

    Raises:
        ValueError: `loss` is not a scalar, shapes do not fit, `level` is not within (0, 1), nothing
            is free, a constraint mixes entries, the trees disagree.
        TypeError: what is fitted is not of one floating dtype.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import laplace
        >>> from oscillib.parameters import Positive
        >>> samples = jnp.array([1.0, -2.0, 2.0, 3.0])
        >>> loss = lambda p: 4 * jnp.log(p["scale"]) + jnp.sum((samples / p["scale"]) ** 2) / 2
        >>> best = {"scale": jnp.sqrt(4.5)}
        >>> out = jax.jit(lambda p: laplace(loss, p, {"scale": Positive()}))(best)
        >>> print(out.standard_error["scale"].round(4), out.lower["scale"].round(4))
        0.75 1.1859

    Source: common practice, no source.
    """
    if not 0 < level < 1:
        raise ValueError(f"`level` must lie strictly between 0 and 1; got {level}.")
    check_loss(loss, params)
    params = jax.tree.map(jnp.asarray, params)
    leaves = layout(params, constraints)
    check_entrywise(leaves)
    x, to_params = to_flat(params, constraints), from_flat(params, constraints)
    if isinstance(curvature, str):
        if curvature != "hessian":
            raise ValueError(f"`curvature` must be 'hessian' or a matrix; got {curvature!r}.")
        information = observed_information(loss, params, constraints)
    else:
        information = jnp.asarray(curvature)
        check_shape("curvature", information, (x.shape[0],) * 2, "(free, free)")
    gradient = jax.grad(lambda x: loss(to_params(x)))(x)
    # A lost recording has no gradient either; its curvature refuses everything by itself.
    sure = jnp.where(jnp.isfinite(gradient), gradient, 0)
    found = weak_directions(information, params, constraints, gradient=sure, widths=widths)
    error = jnp.sqrt(jnp.diagonal(found.covariance))
    lower, upper = _intervals(leaves, to_params, x, error, found.refused, params, level)
    slope = slopes(to_params, leaves, x)
    spoilt = found.refused[:, None] | found.refused[None, :]
    covariance = slope[:, None] * found.covariance * slope[None, :]
    zeros, no = _zeros(params), [jnp.zeros(leaf.shape, bool) for leaf in leaves]
    own_error = jnp.where(found.refused, jnp.inf, jnp.abs(slope) * error)
    return Laplace(
        lower=lower,
        upper=upper,
        standard_error=scatter(leaves, own_error, params, zeros),
        fitted=scatter(leaves, jnp.ones(x.shape, bool), params, no),
        refused=scatter(leaves, found.refused, params, no),
        covariance=jnp.where(spoilt, jnp.nan, covariance),
        information=information,
        directions=found,
        distance=jnp.sqrt(jnp.maximum(gradient @ found.covariance @ gradient, 0)),
    )


def _intervals(
    leaves: list[Leaf],
    to_params: Callable[[Array], Any],
    x: Array,
    error: Array,
    refused: Array,
    params: Any,
    level: float,
) -> tuple[Any, Any]:
    """Return both ends of all intervals as trees of parameters."""
    z = normal_quantile(level, x.dtype)
    nan = jnp.where(refused, jnp.nan, 0).astype(x.dtype)
    nans = scatter(leaves, nan, params, _zeros(params))
    below, above = to_params(x - z * error), to_params(x + z * error)
    # A constraint of the user's own may be decreasing.
    lower = jax.tree.map(lambda a, b, n: jnp.minimum(a, b) + n, below, above, nans)
    upper = jax.tree.map(lambda a, b, n: jnp.maximum(a, b) + n, below, above, nans)
    return lower, upper


def normal_quantile(level: float, dtype: Any) -> Array:
    """Return the z with probability `level` between -z and z."""
    return jax.scipy.special.ndtri(jnp.asarray((1 + level) / 2, dtype))


def _zeros(params: Any) -> list[Array]:
    return [jnp.zeros_like(v) for v in jax.tree.leaves(params)]
