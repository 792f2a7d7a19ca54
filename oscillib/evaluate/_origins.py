"""Rolling origins: which samples a forecast may know, and which it must meet."""

from typing import Any

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Int, Shaped

from .._validate import check_count, check_floating, check_shape, check_values


def rolling_origins(
    num_samples: int, *, first: int, horizon: int, stride: int = 1
) -> Int[np.ndarray, " origin"]:
    """List the origins of forecasts whose whole horizon lies inside the recording. Host-side.

    `o = first, first + stride, ...` while `o + horizon <= num_samples - 1`. The origin `o` is the
    index of the last sample known; the forecast is of the samples `o + 1, ..., o + horizon`.

    Arguments:
        num_samples: number of samples on the regular grid.
        first: the first origin; 0 or more.
        horizon: number of steps forecast.
        stride: steps from one origin to the next; 1 by default.

    Returns:
        Origins, shape `(origin,)`, at least one.

    Raises:
        TypeError: an argument is not an int.
        ValueError: an argument is too small, or no origin leaves room for the horizon.

    Example:
        >>> from oscillib.evaluate import rolling_origins
        >>> rolling_origins(10, first=4, horizon=3)
        array([4, 5, 6])

    Source:
        Tashman 2000, Int. J. Forecasting 16:437 (rolling-origin evaluation).
    """
    num_samples = check_count("num_samples", num_samples)
    first = check_count("first", first, least=0)
    horizon = check_count("horizon", horizon)
    stride = check_count("stride", stride)
    if first + horizon > num_samples - 1:
        raise ValueError(
            f"`first` + `horizon` must be at most `num_samples` - 1 = {num_samples - 1} for one "
            f"origin to fit; got {first} + {horizon}. Fix: start earlier or shorten the horizon."
        )
    return np.arange(first, num_samples - horizon, stride)


def targets(
    values: Shaped[Array, "time channel"], origins: Int[Array | np.ndarray, " origin"], horizon: int
) -> Shaped[Array, "origin horizon channel"]:
    """Gather the samples that the forecasts from each origin are to meet.

    `out[i, h] = values[origins[i] + 1 + h]`, `h = 0, ..., horizon - 1`.

    Arguments:
        values: samples, or their mask, shape `(time, channel)`.
        origins: index of the last sample known, shape `(origin,)`.
        horizon: number of steps.

    Returns:
        Shape `(origin, horizon, channel)`. Under `jit`, where origins cannot be checked, a step
        beyond the recording is NaN (False in a mask).

    Raises:
        TypeError: `origins` or `horizon` are not whole numbers, or `values` are neither floating
            nor boolean.
        ValueError: a shape is wrong, or a target lies outside the recording.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import targets
        >>> targets(jnp.arange(6.0)[:, None], jnp.array([1, 3]), 2)[:, :, 0]
        Array([[2., 3.],
               [4., 5.]], dtype=float64)
    """
    check_shape("values", values, (None, None), "(time, channel)")
    if not jnp.issubdtype(jnp.asarray(values).dtype, jnp.bool_):
        check_floating("values", values)
    horizon = check_count("horizon", horizon)
    last = values.shape[0] - 1 - horizon
    origins = check_origins(origins, last, "so that the horizon ends inside the recording")
    return take_samples(values, origins[:, None] + jnp.arange(1, horizon + 1)[None])


def check_origins(origins: Any, last: int, why: str) -> Array:
    """Return the origins as ints, or raise unless they are `(origin,)` within 0 to `last`."""
    check_shape("origins", origins, (None,), "(origin,)")
    dtype = jnp.asarray(origins).dtype
    if not jnp.issubdtype(dtype, jnp.integer):
        raise TypeError(f"`origins` must hold whole numbers; got dtype {dtype}.")
    check_values(
        "origins", origins, lambda o: (o >= 0) & (o <= last), f"within 0 to {last} ({why})"
    )
    return jnp.asarray(origins, dtype=int)


def check_samples(
    values: Any, mask: Any, *, recordings: bool = False, name: str = "values"
) -> tuple[Array, Array]:
    """Return the observed samples with zeros in place of the rest, and the mask.

    Whatever stands where nothing was observed is gone before any arithmetic, so that it reaches
    neither a value nor a gradient.
    """
    if not (recordings and jnp.ndim(values) == 3):
        check_shape(name, values, (None, None), "(time, channel)")
    check_floating(name, values)
    check_mask(mask, values, name)
    values, mask = jnp.asarray(values), jnp.asarray(mask)
    return jnp.where(mask, values, jnp.zeros_like(values)), mask


def check_mask(mask: Any, values: Any, name: str) -> None:
    """Raise unless the mask is boolean and has the shape of the values."""
    dtype = jnp.asarray(mask).dtype
    if not jnp.issubdtype(dtype, jnp.bool_):
        raise TypeError(
            f"`mask` must be boolean, True where observed; got dtype {dtype}. "
            "Fix: `mask.astype(bool)`."
        )
    check_shape("mask", mask, jnp.shape(values), f"that of `{name}`")


def take_samples(samples: Array, index: Array) -> Array:
    """Gather along the first axis; an index outside gives NaN (False), where jax would clip it."""
    samples = jnp.asarray(samples)
    index = jnp.where(index < 0, samples.shape[0], index)  # a negative one would count from the end
    fill = False if jnp.issubdtype(samples.dtype, jnp.bool_) else jnp.nan
    return samples.at[index].get(mode="fill", fill_value=fill)
