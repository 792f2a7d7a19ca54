"""How many lags an autoregression needs: information criteria on one set of rows."""

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float, Int

from .._validate import check_count
from ._autoregression import _centre, _check_rows, _dot, _lags, _standardise, _used_rows
from ._origins import check_samples


class OrderCriteria(NamedTuple):
    """Result of `order_criteria`; entry `p` of each belongs to `p` lags, shape `(order + 1,)`.

    Arguments:
        aic: criterion of Akaike.
        bic: criterion of Schwarz.
        hq: criterion of Hannan and Quinn.
        best: order with the least of each, in this order, shape `(3,)`; -1 where undefined.
    """

    aic: Float[Array, " orders"]
    bic: Float[Array, " orders"]
    hq: Float[Array, " orders"]
    best: Int[Array, "3"]


def order_criteria(
    values: Float[Array, "*recording time channel"],
    mask: Bool[Array, "*recording time channel"],
    *,
    max_order: int,
) -> OrderCriteria:
    """Compare numbers of lags of an autoregression by information criteria.

    `criterion(p) = ln det S_p + penalty * (1 + p * channel) * channel / n`, with `S_p` the mean
    square residual of least squares with intercept and `p` lags, and `penalty` 2 (AIC), `ln n`
    (BIC) or `2 ln ln n` (HQ). Every order uses the same `n` rows: those that have `max_order` lags
    observed in every channel. BIC and HQ find the order of a long recording; AIC errs to more lags
    and often forecasts as well. `choose_autoregression` asks the forecast itself.

    Arguments:
        values: samples on a regular grid, shape `(time, channel)`, or `(recording, time, channel)`
            for one model of several recordings.
        mask: True where observed; the rest of `values` is never used.
        max_order: the most lags to try.

    Returns:
        `OrderCriteria(aic, bic, hq, best)`. NaN, and `best` -1, where the data do not determine the
        largest model: collinear lags, or, under `jit`, too few rows.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or there are too few rows.

    Example:
        >>> import jax
        >>> from oscillib.evaluate import order_criteria
        >>> white = jax.random.normal(jax.random.key(0), (200, 1))
        >>> criteria = order_criteria(white, white == white, max_order=4)
        >>> criteria.aic.shape, int(criteria.best[1])
        ((5,), 0)

    Source:
        Lütkepohl 2005, New Introduction to Multiple Time Series Analysis, section 4.3.
    """
    values, mask = check_samples(values, mask, recordings=True)
    max_order = check_count("max_order", max_order)
    if values.shape[-2] <= max_order:
        raise ValueError(
            f"`values` must have more than `max_order` = {max_order} samples; "
            f"got {values.shape[-2]}."
        )
    values, mask = (x.reshape(-1, *x.shape[-2:]) for x in (values, mask))
    _check_rows(mask, 0.0, max_order)
    return _criteria(values, mask, max_order)


@partial(jax.jit, static_argnames="order")
def _criteria(values: Array, mask: Array, order: int) -> OrderCriteria:
    channels, dtype = values.shape[-1], values.dtype
    used = _used_rows(mask, order).reshape(-1, 1)
    n = jnp.sum(used).astype(dtype)
    mean, lags = _centre(_lags(values, order), used, n)
    lags, _ = _standardise(lags, mean, n)
    _, target = _centre(values[:, order:].reshape(-1, channels), used, n)
    # One factorisation serves all orders: the first columns of `q` span the first lags.
    q, r = jnp.linalg.qr(lags)
    size = jnp.abs(jnp.diagonal(r))
    full_rank = jnp.min(size) > sum(lags.shape) * jnp.finfo(dtype).eps * jnp.max(size)
    defined = full_rank & (n > order * channels + 1)
    blocks = q.reshape(q.shape[0], order, channels).transpose(1, 0, 2)

    def remove(residual, block):
        residual = residual - _dot(block, _dot(block.T, residual))
        return residual, residual

    _, residuals = jax.lax.scan(remove, target, blocks)
    residuals = jnp.concatenate([target[None], residuals])
    square = jnp.einsum("pti,ptj->pij", residuals, residuals, precision="highest") / n
    fit = jnp.where(defined, jnp.linalg.slogdet(square)[1], jnp.nan)
    weights = channels * (1 + channels * jnp.arange(order + 1)).astype(dtype) / n
    aic, bic, hq = (fit + c * weights for c in (2.0, jnp.log(n), 2 * jnp.log(jnp.log(n))))
    best = jnp.argmin(jnp.stack([aic, bic, hq]), axis=1)
    finite = jnp.all(jnp.isfinite(fit))
    return OrderCriteria(aic, bic, hq, jnp.where(finite, best, -1))
