"""Vector autoregression by ridge regression: the linear forecast that a model should beat."""

from functools import partial
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float, Int

from .._validate import (
    as_float,
    check_count,
    check_same_dtype,
    check_shape,
    check_values,
    is_concrete,
)
from ._origins import check_origins, check_samples, take_samples


class Autoregression(eqx.Module):
    """A vector autoregression: `y_t = intercept + sum_k coefficients[k - 1] y_{t-k} + e_t`.

    Arguments:
        intercept: shape `(channel,)`, in the unit of the samples.
        coefficients: shape `(order, channel, channel)`; `[k - 1, i, j]` is the effect of channel
            `j`, `k` steps ago, on channel `i`.
        covariance: of the residual `e_t`, shape `(channel, channel)`.
        mean: mean of the samples, shape `(channel,)`; stands for what was before a recording.

    Raises:
        ValueError: shapes disagree.
    """

    intercept: Float[Array, " channel"] = eqx.field(converter=as_float)
    coefficients: Float[Array, "order channel channel"] = eqx.field(converter=as_float)
    covariance: Float[Array, "channel channel"] = eqx.field(converter=as_float)
    mean: Float[Array, " channel"] = eqx.field(converter=as_float)

    def __check_init__(self):
        """Refuse parts that do not fit together."""
        check_shape("intercept", self.intercept, (None,), "(channel,)")
        c = self.intercept.shape[0]
        check_shape("coefficients", self.coefficients, (None, c, c), "(order, channel, channel)")
        check_shape("covariance", self.covariance, (c, c), "(channel, channel)")
        check_shape("mean", self.mean, (c,), "(channel,)")


def fit_autoregression(
    values: Float[Array, "*recording time channel"],
    mask: Bool[Array, "*recording time channel"],
    *,
    order: int,
    ridge: float | Float[Array, ""],
) -> Autoregression:
    """Fit a vector autoregression by ridge regression on standardised lags.

    Minimises `mean_t |y_t - c - sum_k A_k y_{t-k}|^2 + ridge * sum b^2` over the `n` rows `t` used,
    with `b = A_k[i, j] * sd(y_{t-k, j})` the coefficients of lags in units of their own standard
    deviation and `c` not penalised. So `ridge` has no unit: for uncorrelated lags it shrinks every
    coefficient by `1 / (1 + ridge)`. `ridge = 0` is conditional least squares.

    A row is used where its target and all its lags are observed in every channel: lags never cross
    a gap, nor the seam between recordings. `covariance` has the divisor `n` less the effective
    number of coefficients of one channel, `1 + trace(Z (Z'Z + n ridge)^-1 Z')` for standardised
    lags `Z`, which is `1 + order * channel` at `ridge = 0`.

    Arguments:
        values: samples on a regular grid, shape `(time, channel)`, or `(recording, time, channel)`
            for one model of several recordings (pad the shorter ones and mask the padding).
        mask: True where observed; the rest of `values` is never used.
        order: number of lags.
        ridge: weight of the penalty, 0 or more.

    Returns:
        The fitted `Autoregression`. NaN where the data do not determine it: lags collinear at
        `ridge = 0`, or, under `jit`, too few rows.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, `ridge` is negative, or there are too few rows: at least 2, and
            at `ridge = 0` more than `1 + order * channel`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import fit_autoregression
        >>> values = 0.5 ** jnp.arange(6.0)[:, None] + 1.0
        >>> model = fit_autoregression(values, jnp.ones((6, 1), dtype=bool), order=1, ridge=0.0)
        >>> model.intercept.round(6), model.coefficients.round(6)
        (Array([0.5], dtype=float64), Array([[[0.5]]], dtype=float64))

    Source:
        Lütkepohl 2005, New Introduction to Multiple Time Series Analysis, section 3.2 (least
        squares); Hoerl and Kennard 1970, Technometrics 12:55 (ridge); Hastie, Tibshirani and
        Friedman 2009, The Elements of Statistical Learning, section 3.4.1 (effective number).
    """
    values, mask = check_samples(values, mask, recordings=True)
    order = check_count("order", order)
    if values.shape[-2] <= order:
        raise ValueError(
            f"`values` must have more than `order` = {order} samples; got {values.shape[-2]}."
        )
    ridge = jnp.asarray(ridge, dtype=values.dtype)
    check_shape("ridge", ridge, (), "()")
    check_values("ridge", ridge, lambda r: r >= 0, "0 or more")
    values, mask = (x.reshape(-1, *x.shape[-2:]) for x in (values, mask))
    _check_rows(mask, ridge, order)
    return _fit(values, mask, ridge, order)


@partial(jax.jit, static_argnames="order")
def _fit(values: Array, mask: Array, ridge: Array, order: int) -> Autoregression:
    channels = values.shape[-1]
    lags, target = _lags(values, order), values[:, order:].reshape(-1, channels)
    used = _used_rows(mask, order).reshape(-1, 1)
    count = jnp.sum(used).astype(values.dtype)
    lag_mean, lags = _centre(lags, used, count)
    mean, target = _centre(target, used, count)
    lags, scale = _standardise(lags, lag_mean, count)
    weights, freedom = _ridge(lags, target, count * ridge)
    residual = target - _dot(lags, weights)
    divisor = count - 1 - freedom
    divisor = jnp.where(divisor > 0, divisor, jnp.nan)
    weights = weights / scale[:, None]
    weights = jnp.where(divisor > 0, weights, jnp.nan)
    return Autoregression(
        intercept=mean - _dot(lag_mean, weights),
        coefficients=weights.reshape(order, channels, channels).transpose(0, 2, 1),
        covariance=_dot(residual.T, residual) / divisor,
        mean=mean,
    )


def forecast_autoregression(
    model: Autoregression,
    values: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"],
    origins: Int[Array | np.ndarray, " origin"],
    horizon: int,
) -> Float[Array, "origin horizon channel"]:
    """Forecast by iterating the autoregression from each origin.

    `out[i, h] = intercept + sum_k coefficients[k - 1] x_{o + 1 + h - k}`, `o = origins[i]`, where
    `x_t` is the sample if it was observed and `t <= o`, and otherwise the model's own forecast of
    it from `x_{t-1}, x_{t-2}, ...`; before the recording, `x_t` is `model.mean`.

    Arguments:
        model: a fitted autoregression.
        values: samples on a regular grid, shape `(time, channel)`.
        mask: True where observed; the rest of `values` is never used.
        origins: index of the last sample known, shape `(origin,)`.
        horizon: number of steps.

    Returns:
        Forecasts, shape `(origin, horizon, channel)`.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or an origin lies outside the recording.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import Autoregression, forecast_autoregression
        >>> one = jnp.ones((1, 1))
        >>> model = Autoregression(jnp.zeros(1), 0.5 * one[None], one, jnp.zeros(1))
        >>> forecast_autoregression(model, 8 * one, one == 1, jnp.array([0]), 3)[0, :, 0]
        Array([4., 2., 1.], dtype=float64)

    Source:
        Lütkepohl 2005, New Introduction to Multiple Time Series Analysis, section 2.2.2; filling of
        missing lags: common practice, no source.
    """
    values, mask = check_samples(values, mask)
    horizon = check_count("horizon", horizon)
    channels = model.intercept.shape[0]
    check_shape("values", values, (None, channels), "(time, channel of `model`)")
    check_same_dtype("values", values, "model.coefficients", model.coefficients)
    origins = check_origins(origins, values.shape[0] - 1, "inside the recording")
    return _forecast(model, values, mask, origins, horizon)


@partial(jax.jit, static_argnames="horizon")
def _forecast(
    model: Autoregression, values: Array, mask: Array, origins: Array, horizon: int
) -> Array:
    def know(history, sample):
        value, observed = sample
        history = _push(history, jnp.where(observed, value, _predict(model, history)))
        return history, history

    def forecast(history, _):
        new = _predict(model, history)
        return _push(history, new), new

    before = jnp.broadcast_to(model.mean[None], model.coefficients.shape[:2])
    histories = jax.lax.scan(know, before, (values, mask))[1]
    iterate = lambda history: jax.lax.scan(forecast, history, length=horizon)[1]
    return jax.vmap(iterate)(take_samples(histories, origins))


def forecast_covariance(
    model: Autoregression, horizon: int
) -> Float[Array, "horizon channel channel"]:
    """Compute the covariance of the forecast error at each horizon, for bands.

    `out[h] = sum_{i <= h} P_i covariance P_i'` with the moving-average matrices `P_0 = 1`,
    `P_i = sum_k coefficients[k - 1] P_{i-k}`. A central band of probability 0.9 about a forecast is
    1.645 times the root of the diagonal to each side.

    It counts the noise to come alone: neither the uncertainty of the coefficients nor lags that
    were missing at the origin, both of which widen the error.

    Arguments:
        model: a fitted autoregression.
        horizon: number of steps.

    Returns:
        Shape `(horizon, channel, channel)`; `[0]` belongs to one step ahead.

    Raises:
        TypeError: `horizon` is not an int.
        ValueError: `horizon` is below 1.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import Autoregression, forecast_covariance
        >>> one = jnp.ones((1, 1))
        >>> model = Autoregression(jnp.zeros(1), 0.5 * one[None], one, jnp.zeros(1))
        >>> forecast_covariance(model, 3)[:, 0, 0]
        Array([1.    , 1.25  , 1.3125], dtype=float64)

    Source:
        Lütkepohl 2005, New Introduction to Multiple Time Series Analysis, section 2.2.2.
    """
    return _response_sum(model, check_count("horizon", horizon))


@partial(jax.jit, static_argnames="horizon")
def _response_sum(model: Autoregression, horizon: int) -> Array:
    unit = jnp.eye(model.intercept.shape[0], dtype=model.coefficients.dtype)

    def respond(history, _):
        new = _einsum("kij,kjl->il", model.coefficients, history)
        return _push(history, new), history[0]

    start = jnp.zeros_like(model.coefficients).at[0].set(unit)
    responses = jax.lax.scan(respond, start, length=horizon)[1]
    return jnp.cumsum(_einsum("hij,jk,hlk->hil", responses, model.covariance, responses), axis=0)


def _einsum(subscripts: str, *arrays: Array) -> Array:
    # The fast products of some accelerators drop digits that a least-squares fit needs.
    return jnp.einsum(subscripts, *arrays, precision="highest")


def _dot(a: Array, b: Array) -> Array:
    return jnp.matmul(a, b, precision="highest")


def _predict(model: Autoregression, history: Array) -> Array:
    return model.intercept + _einsum("kij,kj->i", model.coefficients, history)


def _push(history: Array, new: Array) -> Array:
    """Put the newest first, as the coefficients are ordered."""
    return jnp.concatenate([new[None], history[:-1]])


def _lags(values: Array, order: int) -> Array:
    """Lay out `(recording, time, channel)` as the lags of each row, `(row, order * channel)`."""
    num, channels = values.shape[1:]
    lags = [values[:, order - k : num - k] for k in range(1, order + 1)]
    return jnp.stack(lags, axis=2).reshape(-1, order * channels)


def _used_rows(mask: Array, order: int) -> Array:
    """Tell which rows have their target and all lags observed, `(recording, time - order)`."""
    num, observed = mask.shape[1], mask.all(axis=-1)
    return jnp.stack([observed[:, order - k : num - k] for k in range(order + 1)]).all(axis=0)


def _check_rows(mask: Any, ridge: Any, order: int) -> None:
    if not is_concrete(mask, ridge):
        return
    columns = order * mask.shape[-1]
    least = 2 if float(ridge) > 0 else columns + 2
    count = int(_used_rows(mask, order).sum())
    if count < least:
        raise ValueError(
            f"`mask` must leave at least {least} rows with every lag observed for {columns} lagged "
            f"columns; got {count}. Fix: a smaller `order`, a positive `ridge`, or more samples."
        )


def _centre(x: Array, used: Array, count: Array) -> tuple[Array, Array]:
    """Return the mean over the used rows, and the rows less it (0 where not used)."""
    mean = jnp.sum(jnp.where(used, x, 0), axis=0) / count
    return mean, jnp.where(used, x - mean[None], 0)


def _standardise(centred: Array, mean: Array, count: Array) -> tuple[Array, Array]:
    """Divide columns by their standard deviation; one that only rounds about its mean becomes 0."""
    variance = jnp.sum(centred**2, axis=0) / count
    flat = variance <= (16 * jnp.finfo(mean.dtype).eps * mean) ** 2
    scale = jnp.sqrt(jnp.where(flat, 1, variance))
    return jnp.where(flat[None], 0, centred / scale[None]), scale


def _ridge(x: Array, y: Array, penalty: Array) -> tuple[Array, Array]:
    """Solve `(x'x + penalty) b = x'y`; return `b` and `trace(x (x'x + penalty)^-1 x')`.

    Orthogonal factors keep digits that the normal equations would lose where lags are nearly
    collinear, as those of a finely sampled oscillation are. Their solution enters as a constant;
    the exact equations for what is left of the residual carry the derivatives, so that no
    factorisation is differentiated and `penalty = 0` has a finite slope.
    """
    columns = x.shape[1]
    unit = jnp.eye(columns, dtype=x.dtype)
    fixed_x, fixed_y, fixed_penalty = jax.lax.stop_gradient((x, y, penalty))
    q, r = jnp.linalg.qr(jnp.concatenate([fixed_x, jnp.sqrt(fixed_penalty) * unit]))
    diagonal = jnp.abs(jnp.diagonal(r))
    rank_limit = sum(x.shape) * jnp.finfo(x.dtype).eps * jnp.max(diagonal)
    r = jnp.where(jnp.min(diagonal) > rank_limit, r, jnp.nan)
    triangular = jax.scipy.linalg.solve_triangular
    start = triangular(r, _dot(q[: x.shape[0]].T, fixed_y))

    def normal(b):
        return _dot(x.T, _dot(x, b)) + penalty * b

    def solve(_, right):
        return triangular(r, triangular(r, right, trans=1))

    left = _dot(x.T, y - _dot(x, start)) - penalty * start
    b = start + jax.lax.custom_linear_solve(normal, left, solve, symmetric=True)
    inverse = jax.lax.custom_linear_solve(normal, unit, solve, symmetric=True)
    return b, columns - penalty * jnp.trace(inverse)
