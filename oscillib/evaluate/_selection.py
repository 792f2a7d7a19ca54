"""Choice of order and ridge of an autoregression, on the training part alone."""

import math
from collections.abc import Sequence
from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import check_count
from ._autoregression import Autoregression, fit_autoregression, forecast_autoregression
from ._origins import check_samples, rolling_origins, targets


class AutoregressionChoice(NamedTuple):
    """Result of `choose_autoregression`.

    Arguments:
        model: the chosen autoregression, fitted to all samples given.
        order: its number of lags.
        ridge: its weight of the penalty.
        errors: error of every candidate, shape `(order, ridge)`.
    """

    model: Autoregression
    order: int
    ridge: float
    errors: np.ndarray


def choose_autoregression(
    values: Float[Array, "*recording time channel"],
    mask: Bool[Array, "*recording time channel"],
    *,
    orders: Sequence[int],
    ridges: Sequence[float],
    horizon: int,
    holdout: float = 0.25,
) -> AutoregressionChoice:
    """Choose order and ridge by rolling-origin error within the samples given. Host-side.

    The last `holdout` of the samples is set apart, every candidate is fitted to the rest and
    forecasts from every origin whose targets all lie in the part set apart. The error is the root
    mean square over origins, steps, channels and recordings, each channel in units of its standard
    deviation over the samples not set apart. The best candidate is fitted again to all samples.
    Give the training part alone: the test part must have no say in the choice.

    Arguments:
        values: samples of the training part, shape `(time, channel)` or
            `(recording, time, channel)`.
        mask: True where observed; the rest of `values` is never used.
        orders: numbers of lags to try.
        ridges: weights of the penalty to try (see `fit_autoregression`).
        horizon: number of steps forecast; choose the one that will be scored.
        holdout: fraction of the time axis set apart, strictly between 0 and 1; 0.25 by default.

    Returns:
        `AutoregressionChoice(model, order, ridge, errors)`. In the table `errors`,
        `(order, ridge)`, a candidate is infinite that the samples do not determine or whose
        forecasts overflow. Of equal candidates the first listed wins.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, there is nothing to choose from, `holdout` leaves no room for
            the horizon or no observed target, or no candidate has a finite error.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import choose_autoregression
        >>> values = jnp.cos(0.5 * jnp.arange(40.0))[:, None]
        >>> mask = jnp.ones(values.shape, dtype=bool)
        >>> choice = choose_autoregression(values, mask, orders=[1, 2], ridges=[0.0], horizon=3)
        >>> choice.order
        2

    Source:
        Tashman 2000, Int. J. Forecasting 16:437 (rolling-origin evaluation); choice by error on a
        part set apart: common practice, no source.
    """
    values, mask = check_samples(values, mask, recordings=True)
    horizon = check_count("horizon", horizon)
    if not len(orders) or not len(ridges):
        raise ValueError(
            f"`orders` and `ridges` must list at least one candidate each; got {len(orders)} and "
            f"{len(ridges)}."
        )
    split = _split(values.shape[-2], horizon, holdout)
    stacked = [x.reshape(-1, *x.shape[-2:]) for x in (values, mask)]
    if not bool(jnp.any(stacked[1][:, split:])):
        raise ValueError("`mask` must leave an observed sample in the part set apart; got none.")
    ridges = [float(r) for r in ridges]
    weights = jnp.asarray(ridges, dtype=values.dtype)
    tried = partial(_candidate_errors, *stacked, weights, split=split, horizon=horizon)
    errors = np.array([tried(order=check_count("orders", order)) for order in orders])
    errors = np.where(np.isfinite(errors), errors, np.inf)
    best, penalty = divmod(int(np.argmin(errors)), len(ridges))
    if not np.isfinite(errors[best, penalty]):
        raise ValueError(
            "`orders` and `ridges` must hold a candidate determined by the samples before the "
            "part set apart; got none. Fix: smaller orders, a positive ridge, a smaller `holdout`."
        )
    order, ridge = int(orders[best]), ridges[penalty]
    model = fit_autoregression(values, mask, order=order, ridge=ridge)
    return AutoregressionChoice(model, order, ridge, errors)


def _split(num: int, horizon: int, holdout: float) -> int:
    if not 0 < holdout < 1:
        raise ValueError(f"`holdout` must lie strictly between 0 and 1; got {holdout}.")
    apart = math.ceil(holdout * num)
    if not horizon <= apart < num:
        raise ValueError(
            f"`holdout` must set apart at least `horizon` = {horizon} and fewer than all {num} "
            f"samples; got {holdout}, which sets apart {apart}."
        )
    return num - apart


@partial(jax.jit, static_argnames=("split", "horizon", "order"))
def _candidate_errors(values, mask, ridges, *, split, horizon, order):
    """Errors of one order with every ridge, shape `(ridge,)`."""
    origins = rolling_origins(values.shape[1], first=split - 1, horizon=horizon)
    gather = jax.vmap(lambda x: targets(x, origins, horizon))
    target, observed = gather(values), gather(mask)
    scale = _scale(values[:, :split], mask[:, :split])

    def error(ridge):
        model = fit_autoregression(values[:, :split], mask[:, :split], order=order, ridge=ridge)
        forecast = jax.vmap(lambda v, m: forecast_autoregression(model, v, m, origins, horizon))(
            values, mask
        )
        miss = jnp.where(observed, (forecast - target) / scale[None, None, None], 0)
        return jnp.sqrt(jnp.mean(miss**2, where=observed))

    return jax.lax.map(error, ridges)


def _scale(values, mask):
    mean = jnp.mean(values, axis=(0, 1), where=mask)
    variance = jnp.mean((values - mean[None, None]) ** 2, axis=(0, 1), where=mask)
    return jnp.sqrt(jnp.where(variance > 0, variance, 1))  # a constant channel keeps its unit
