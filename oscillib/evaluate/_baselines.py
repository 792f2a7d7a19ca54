"""Forecasts from the simplest statistics: what every model must beat."""

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float, Int

from .._validate import check_count
from ._origins import check_origins, check_samples, take_samples


def time_average(
    values: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"],
    origins: Int[Array | np.ndarray, " origin"],
    horizon: int,
) -> Float[Array, "origin horizon channel"]:
    """Forecast every step by the mean of the samples observed up to the origin.

    `out[i, h] = sum_{t <= o} mask[t] values[t] / sum_{t <= o} mask[t]`, `o = origins[i]`. The mean
    grows with the origin: it uses all that a forecaster would know then, and nothing later.

    Arguments:
        values: samples on a regular grid, shape `(time, channel)`.
        mask: True where observed; the rest of `values` is never used.
        origins: index of the last sample known, shape `(origin,)`.
        horizon: number of steps.

    Returns:
        Forecasts, shape `(origin, horizon, channel)`; NaN for a channel not observed yet.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or an origin lies outside the recording.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import time_average
        >>> values = jnp.array([[1.0], [3.0], [8.0]])
        >>> time_average(values, jnp.ones((3, 1), dtype=bool), jnp.array([1, 2]), 2)[:, :, 0]
        Array([[2., 2.],
               [4., 4.]], dtype=float64)

    Source:
        Common practice, no source.
    """
    values, mask = check_samples(values, mask)
    count = jnp.cumsum(mask, axis=0)
    safe = jnp.where(count > 0, count, 1).astype(values.dtype)
    mean = jnp.where(count > 0, jnp.cumsum(values, axis=0) / safe, jnp.nan)
    return _hold(mean, origins, horizon)


def persistence(
    values: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"],
    origins: Int[Array | np.ndarray, " origin"],
    horizon: int,
) -> Float[Array, "origin horizon channel"]:
    """Forecast every step by the last sample observed up to the origin.

    `out[i, h] = values[t]` with `t` the last index up to `origins[i]` at which the channel was
    observed.

    Arguments:
        values: samples on a regular grid, shape `(time, channel)`.
        mask: True where observed; the rest of `values` is never used.
        origins: index of the last sample known, shape `(origin,)`.
        horizon: number of steps.

    Returns:
        Forecasts, shape `(origin, horizon, channel)`; NaN for a channel not observed yet.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree, or an origin lies outside the recording.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import persistence
        >>> values = jnp.array([[1.0], [3.0], [8.0]])
        >>> mask = jnp.array([[True], [True], [False]])
        >>> persistence(values, mask, jnp.array([0, 2]), 2)[:, :, 0]
        Array([[1., 1.],
               [3., 3.]], dtype=float64)

    Source:
        Common practice, no source.
    """
    values, mask = check_samples(values, mask)
    index = jnp.broadcast_to(jnp.arange(values.shape[0])[:, None], values.shape)
    last = jax.lax.cummax(jnp.where(mask, index, -1), axis=0)
    latest = jax.vmap(take_samples, in_axes=1, out_axes=1)(values, last)
    return _hold(latest, origins, horizon)


def _hold(known: Array, origins: Array | np.ndarray, horizon: int) -> Array:
    horizon = check_count("horizon", horizon)
    origins = check_origins(origins, known.shape[0] - 1, "inside the recording")
    start = take_samples(known, origins)[:, None]
    return jnp.broadcast_to(start, (start.shape[0], horizon, start.shape[2]))
