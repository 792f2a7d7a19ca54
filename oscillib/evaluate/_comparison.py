"""Two forecasts against each other: skill, and the test of equal accuracy."""

import math
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import check_count, check_floating, check_same_dtype, check_shape


def skill(
    error: Float[Array, "*shape"], reference: Float[Array, "*shape"]
) -> Float[Array, "*shape"]:
    """Compare an error with that of a reference forecast: 1 is perfect, 0 no better, below 0 worse.

    `1 - error / reference`, of the errors as they are given. Of root mean squares it is the share
    of the error removed; pass their squares for the share of the mean square removed.

    Arguments:
        error: error of the forecast, any shape, 0 or more.
        reference: error of the reference on the same targets, same shape and measure.

    Returns:
        Skill, same shape, no unit. Not finite where `reference` is 0.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import skill
        >>> skill(jnp.array([0.5, 3.0]), jnp.array([2.0, 2.0]))
        Array([ 0.75, -0.5 ], dtype=float64)

    Source:
        Common practice, no source.
    """
    check_floating("error", error)
    check_shape("reference", reference, jnp.shape(error), "that of `error`")
    check_same_dtype("reference", reference, "error", error)
    return 1 - error / reference


class DieboldMariano(NamedTuple):
    """Result of `diebold_mariano`: `statistic` and two-sided `p_value`, both scalars."""

    statistic: Array
    p_value: Array


def diebold_mariano(
    errors_a: Float[Array, " origin"], errors_b: Float[Array, " origin"], *, horizon: int
) -> DieboldMariano:
    """Test whether two forecasts have the same expected squared error.

    With `d = errors_a^2 - errors_b^2`, its mean `m` over `n` origins and its autocovariances
    `g_k = sum_t (d_t - m) (d_{t-k} - m) / n`, `h = horizon`:
    `statistic = m / sqrt((g_0 + 2 sum_{k < h} g_k) / n) * sqrt((n + 1 - 2 h + h (h - 1) / n) / n)`,
    compared with Student's t of `n - 1` degrees of freedom.

    Arguments:
        errors_a: errors of the first forecast at one horizon, shape `(origin,)`, from origins one
            step apart, with none missing.
        errors_b: errors of the second forecast from the same origins.
        horizon: steps ahead of these forecasts; errors fewer steps apart than this are correlated
            even of an ideal forecast.

    Returns:
        `DieboldMariano(statistic, p_value)`: a negative statistic favours the first forecast. NaN
        if the estimated variance is not above 0, which the method allows for `horizon > 1`: there
        is no verdict then. Few origins give little power.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or there are no more origins than `horizon`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import diebold_mariano
        >>> a, b = jnp.array([0.1, -0.3, 0.2, 0.1]), jnp.array([0.9, -0.8, 1.0, -1.1])
        >>> round(float(diebold_mariano(a, b, horizon=1).p_value), 4)
        0.0077

    Source:
        Diebold and Mariano 1995, J. Bus. Econ. Stat. 13:253; small-sample factor of Harvey,
        Leybourne and Newbold 1997, Int. J. Forecasting 13:281.
    """
    check_shape("errors_a", errors_a, (None,), "(origin,)")
    check_floating("errors_a", errors_a)
    check_shape("errors_b", errors_b, jnp.shape(errors_a), "that of `errors_a`")
    check_same_dtype("errors_b", errors_b, "errors_a", errors_a)
    h, n = check_count("horizon", horizon), errors_a.shape[0]
    if n <= h:
        raise ValueError(f"`errors_a` must have more origins than `horizon` = {h}; got {n}.")
    difference = errors_a**2 - errors_b**2
    mean = jnp.mean(difference)
    centred = difference - mean
    covariances = [jnp.sum(centred[k:] * centred[: n - k]) / n for k in range(h)]
    variance = (covariances[0] + 2 * sum(covariances[1:], jnp.zeros_like(mean))) / n
    variance = jnp.where(variance > 0, variance, jnp.nan)
    factor = math.sqrt((n + 1 - 2 * h + h * (h - 1) / n) / n)
    statistic = factor * mean / jnp.sqrt(variance)
    half = jnp.asarray(0.5, dtype=mean.dtype)
    tail = (n - 1) / (n - 1 + statistic**2)
    return DieboldMariano(statistic, jax.scipy.special.betainc((n - 1) * half, half, tail))
