"""Are residuals white? The portmanteau test of their autocorrelations."""

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from .._validate import check_count
from ._origins import check_samples


class Portmanteau(NamedTuple):
    """Result of `portmanteau`, one entry a channel.

    Arguments:
        statistic: `Q`, shape `(channel,)`.
        p_value: probability of a `Q` at least as large of white residuals, shape `(channel,)`.
        defined: False where there is no verdict (`statistic` and `p_value` are NaN), `(channel,)`.
    """

    statistic: Float[Array, " channel"]
    p_value: Float[Array, " channel"]
    defined: Bool[Array, " channel"]


def portmanteau(
    residuals: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"],
    *,
    lags: int,
    fitted: int = 0,
) -> Portmanteau:
    """Test whether the residuals of each channel are uncorrelated in time (Ljung-Box).

    `Q = n (n + 2) sum_{k=1..lags} r_k^2 / n_k`, compared with chi-squared of `lags - fitted`
    degrees of freedom. `n` is the number of samples observed, `n_k` that of pairs `k` steps apart
    with both observed (`n - k` where none is missing), and
    `r_k = sum x_t x_{t-k} / sum x_t^2` of `x`, the residuals less their mean. A sound model leaves
    white residuals, so a small p-value speaks against it. Channels are tested apart: with several,
    compare the least p-value with the level divided by their number.

    Arguments:
        residuals: on a regular grid, shape `(time, channel)`, any unit; for a filter, its whitened
            `residuals` without the first ones, while a wide start is being forgotten.
        mask: True where observed; the rest of `residuals` is never used.
        lags: number of lags, in samples: a few cycles, and small beside `n`.
        fitted: number of coefficients fitted to these very residuals (`order` for an
            autoregression); 0 by default, as for a model fitted to other data.

    Returns:
        `Portmanteau(statistic, p_value, defined)`. Undefined where a lag has no observed pair, the
        residuals do not vary, or one that was observed is not finite.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or `lags` is not above `fitted` or not below the length.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import portmanteau
        >>> wave = jnp.sin(0.5 * jnp.arange(60.0))[:, None]
        >>> bool(portmanteau(wave, jnp.ones(wave.shape, dtype=bool), lags=5).p_value[0] < 1e-9)
        True

    Source:
        Ljung and Box 1978, Biometrika 65:297 (from memory); with missing samples, `n_k` in place of
        `n - k`: common practice, no source.
    """
    residuals, mask = check_samples(residuals, mask, name="residuals")
    fitted = check_count("fitted", fitted, least=0)
    lags = check_count("lags", lags)
    num = residuals.shape[0]
    if not fitted < lags < num:
        raise ValueError(
            f"`lags` must be above `fitted` = {fitted} and below the {num} samples; got {lags}."
        )
    return _test(residuals, mask, lags, fitted)


@partial(jax.jit, static_argnums=(2, 3))
def _test(residuals: Array, mask: Array, lags: int, fitted: int) -> Portmanteau:
    num, dtype = residuals.shape[0], residuals.dtype
    n = jnp.sum(mask, axis=0).astype(dtype)
    mean = jnp.sum(residuals, axis=0) / jnp.maximum(n, 1)
    x = jnp.where(mask, residuals - mean[None], 0)
    # What only rounds about its mean does not vary.
    least = num * (8 * jnp.finfo(dtype).eps * jnp.max(jnp.abs(residuals), axis=0)) ** 2
    square = jnp.sum(x**2, axis=0)

    def at_lag(k):
        inside = (jnp.arange(num) >= k)[:, None]
        pairs = jnp.sum(inside & mask & jnp.roll(mask, k, axis=0), axis=0)
        return jnp.sum(jnp.where(inside, x * jnp.roll(x, k, axis=0), 0), axis=0), pairs

    products, pairs = jax.lax.map(at_lag, jnp.arange(1, lags + 1))
    # False for NaN too.
    defined = jnp.all(pairs > 0, axis=0) & (square > least) & jnp.isfinite(square)
    correlations = products / jnp.where(defined, square, 1)[None]
    terms = correlations**2 / jnp.maximum(pairs, 1).astype(dtype)
    statistic = jnp.where(defined, n * (n + 2) * jnp.sum(terms, axis=0), jnp.nan)
    freedom = jnp.full_like(statistic, (lags - fitted) / 2)
    p_value = jax.scipy.special.gammaincc(freedom, statistic / 2)
    return Portmanteau(statistic, p_value, defined)
