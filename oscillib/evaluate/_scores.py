"""Scores of forecasts: errors and coverage by horizon, proper scores of distributions and bands."""

import math
from typing import Any, Literal

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from .._validate import check_floating, check_same_dtype, check_shape, check_values
from ._origins import check_mask


def average_by_horizon(
    score: Float[Array, "origin horizon channel"],
    mask: Bool[Array, "origin horizon channel"],
    *,
    per_channel: bool = False,
) -> Float[Array, " horizon"] | Float[Array, "horizon channel"]:
    """Average a score over the observed targets of each horizon.

    `out[h] = sum mask[:, h] score[:, h] / sum mask[:, h]`, the sums over origins and channels (over
    origins alone with `per_channel`).

    Arguments:
        score: one number per target, shape `(origin, horizon, channel)`.
        mask: True where the target was observed; the rest of `score` is never used.
        per_channel: keep the channels apart. Pooling them (the default) asks that they share a
            unit and a scale.

    Returns:
        Shape `(horizon,)`, or `(horizon, channel)` with `per_channel`. NaN where no target was
        observed.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import average_by_horizon
        >>> score = jnp.array([[[1.0], [2.0]], [[3.0], [jnp.nan]]])
        >>> average_by_horizon(score, ~jnp.isnan(score))
        Array([2., 2.], dtype=float64)
    """
    _check_cube("score", score)
    check_mask(mask, score, "score")
    axes = 0 if per_channel else (0, 2)
    count = jnp.sum(mask, axis=axes)
    safe = jnp.where(count > 0, count, 1).astype(score.dtype)
    total = jnp.sum(jnp.where(mask, score, jnp.zeros_like(score)), axis=axes)
    return jnp.where(count > 0, total / safe, jnp.nan)


def error_by_horizon(
    forecast: Float[Array, "origin horizon channel"],
    target: Float[Array, "origin horizon channel"],
    mask: Bool[Array, "origin horizon channel"],
    *,
    measure: Literal["rms", "mae"] = "rms",
    per_channel: bool = False,
) -> Float[Array, " horizon"] | Float[Array, "horizon channel"]:
    """Measure the forecast error at each horizon.

    `rms[h] = sqrt(mean (forecast[:, h] - target[:, h])^2)`, `mae[h] = mean |forecast - target|`,
    the means over the observed targets of all origins and channels (`per_channel`: origins alone).

    Arguments:
        forecast: shape `(origin, horizon, channel)`. One that is NaN at an observed target makes
            the error NaN; to leave such forecasts out, say so: `mask & ~jnp.isnan(forecast)`.
        target: what came, same shape and unit.
        mask: True where the target was observed; the rest of both is never used.
        measure: `"rms"`, root mean square (default), or `"mae"`, mean absolute.
        per_channel: keep the channels apart. Pooling them (the default) asks that they share a
            unit and a scale.

    Returns:
        Shape `(horizon,)`, or `(horizon, channel)` with `per_channel`, in the unit of the target.
        NaN where no target was observed.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or `measure` is unknown.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import error_by_horizon
        >>> target = jnp.array([[[3.0], [1.0]], [[4.0], [1.0]]])
        >>> mask = jnp.ones(target.shape, dtype=bool)
        >>> error_by_horizon(jnp.zeros_like(target), target, mask, measure="mae")
        Array([3.5, 1. ], dtype=float64)

    Source:
        Common practice, no source.
    """
    if measure not in ("rms", "mae"):
        raise ValueError(f'`measure` must be "rms" or "mae"; got {measure!r}.')
    _check_cube("target", target)
    _check_like("forecast", forecast, target)
    check_mask(mask, target, "target")
    error = _where(mask, forecast) - _where(mask, target)
    if measure == "mae":
        return average_by_horizon(jnp.abs(error), mask, per_channel=per_channel)
    square = average_by_horizon(error**2, mask, per_channel=per_channel)
    # A perfect forecast has slope 0, not the infinite slope of the root at 0.
    perfect = square == 0
    return jnp.where(perfect, 0, jnp.sqrt(jnp.where(perfect, 1, square)))


def coverage(
    lower: Float[Array, "origin horizon channel"],
    upper: Float[Array, "origin horizon channel"],
    target: Float[Array, "origin horizon channel"],
    mask: Bool[Array, "origin horizon channel"],
    *,
    per_channel: bool = False,
) -> Float[Array, " horizon"] | Float[Array, "horizon channel"]:
    """Count how often the band holds the target, at each horizon.

    `out[h] = mean 1{lower[:, h] <= target[:, h] <= upper[:, h]}` over the observed targets.

    Arguments:
        lower: lower end of the band, shape `(origin, horizon, channel)`; may be infinite.
        upper: upper end, same shape.
        target: what came, same shape and unit.
        mask: True where the target was observed; the rest of the three is never used.
        per_channel: keep the channels apart.

    Returns:
        Fraction covered, shape `(horizon,)`, or `(horizon, channel)` with `per_channel`. NaN where
        no target was observed or an end of a band is NaN.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import coverage
        >>> target = jnp.array([[[0.5]], [[2.0]]])
        >>> zero = jnp.zeros_like(target)
        >>> coverage(zero - 1.0, zero + 1.0, target, jnp.ones(target.shape, dtype=bool))
        Array([0.5], dtype=float64)

    Source:
        Common practice, no source.
    """
    _check_cube("target", target)
    _check_like("lower", lower, target)
    _check_like("upper", upper, target)
    inside = ((lower <= target) & (target <= upper)).astype(target.dtype)
    undefined = jnp.isnan(lower) | jnp.isnan(upper) | jnp.isnan(target)
    return average_by_horizon(jnp.where(undefined, jnp.nan, inside), mask, per_channel=per_channel)


def crps_gaussian(
    mean: Float[Array, "*shape"],
    sd: Float[Array, "*shape"],
    target: Float[Array, "*shape"],
    *,
    mask: Bool[Array, "*shape"] | None = None,
) -> Float[Array, "*shape"]:
    """Score Gaussian forecasts by the continuous ranked probability score; less is better.

    `sd (z (2 Phi(z) - 1) + 2 phi(z) - 1 / sqrt(pi))`, `z = (target - mean) / sd`, with `phi` and
    `Phi` the standard normal density and distribution function.

    Arguments:
        mean: mean of the forecast, any shape.
        sd: standard deviation of the forecast, same shape; above 0.
        target: what came, same shape and unit.
        mask: True where the target was observed; without it all were.

    Returns:
        The score of each target, in its unit; 0 where masked, for `average_by_horizon`. Under
        `jit`, NaN where `sd` is not above 0.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or an observed `sd` is not above 0.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import crps_gaussian
        >>> crps_gaussian(jnp.zeros(1), jnp.ones(1), jnp.zeros(1)).round(6)
        Array([0.233695], dtype=float64)

    Source:
        Gneiting and Raftery 2007, J. Am. Stat. Assoc. 102:359, section 4.2.
    """
    mask = _check_scored(target, mask, mean=mean, sd=sd)
    sd = _where(mask, sd, 1.0)
    check_values("sd", sd, lambda s: ~(s <= 0), "above 0")
    sd = jnp.where(sd > 0, sd, jnp.nan)
    z = (_where(mask, target) - _where(mask, mean)) / sd
    normal = jax.scipy.stats.norm
    shape = z * (2 * normal.cdf(z) - 1) + 2 * normal.pdf(z) - 1 / math.sqrt(math.pi)
    return _where(mask, sd * shape)


def interval_score(
    lower: Float[Array, "*shape"],
    upper: Float[Array, "*shape"],
    target: Float[Array, "*shape"],
    *,
    level: float,
    mask: Bool[Array, "*shape"] | None = None,
) -> Float[Array, "*shape"]:
    """Score central bands: their width, plus a penalty for each target outside; less is better.

    `(u - l) + (2 / a) (l - y)_+ + (2 / a) (y - u)_+`, `a = 1 - level`, with `l`, `u`, `y` for
    `lower`, `upper`, `target`.

    Arguments:
        lower: quantile `a / 2` of the forecast, any shape.
        upper: quantile `1 - a / 2`, same shape.
        target: what came, same shape and unit.
        level: probability that the band claims to hold, strictly between 0 and 1.
        mask: True where the target was observed; without it all were.

    Returns:
        The score of each target, in its unit; 0 where masked, for `average_by_horizon`.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or `level` is not between 0 and 1.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import interval_score
        >>> interval_score(jnp.zeros(2), jnp.ones(2), jnp.array([0.5, 1.5]), level=0.5)
        Array([1., 3.], dtype=float64)

    Source:
        Gneiting and Raftery 2007, J. Am. Stat. Assoc. 102:359, section 6.2.
    """
    if not 0 < level < 1:
        raise ValueError(f"`level` must lie strictly between 0 and 1; got {level}.")
    mask = _check_scored(target, mask, lower=lower, upper=upper)
    lower, upper, target = (_where(mask, x) for x in (lower, upper, target))
    outside = jax.nn.relu(lower - target) + jax.nn.relu(target - upper)
    return upper - lower + 2 / (1 - level) * outside


def _where(mask: Array, x: Any, fill: float = 0.0) -> Array:
    # Applied before the arithmetic: a masked NaN then reaches neither value nor gradient.
    return jnp.where(mask, x, jnp.full_like(x, fill))


def _check_cube(name: str, x: Any) -> None:
    check_shape(name, x, (None, None, None), "(origin, horizon, channel)")
    check_floating(name, x)


def _check_like(name: str, x: Any, target: Any) -> None:
    check_shape(name, x, jnp.shape(target), "that of `target`")
    check_same_dtype(name, x, "target", target)


def _check_scored(target: Any, mask: Any, **others: Any) -> Array:
    check_floating("target", target)
    for name, x in others.items():
        _check_like(name, x, target)
    mask = jnp.ones(jnp.shape(target), dtype=bool) if mask is None else mask
    check_mask(mask, target, "target")
    return mask
