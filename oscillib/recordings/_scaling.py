"""Trend and scale of the channels: taken off before a fit, put back on what comes out of it."""

import math

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import check_count, check_floating, check_same_dtype, check_shape
from ._recording import Recording, check_recording, host_arrays


class Scaling(eqx.Module):
    """What `fit_scaling` found: a polynomial trend and a scale for each channel.

    With `x = (t - centre) / half_span` the trend of a channel is `sum_k trend[channel, k] P_k(x)`,
    `P_k` the Legendre polynomials. It goes on beyond the fitted times, where `|x| > 1`: a line by
    a straight line, a polynomial of high degree wildly.

    Arguments:
        trend: Legendre coefficients, shape `(channel, degree + 1)`, in the user's units; no columns
            where no trend is removed.
        spread: scale of what is left, shape `(channel,)`, in the user's units, positive.
        centre: middle of the fitted times, shape `()`, in the unit of `times`.
        half_span: half the length of the fitted times, shape `()`, in the unit of `times`.
        channels: names of the channels; static.
    """

    trend: Float[Array, "channel coefficient"]
    spread: Float[Array, " channel"]
    centre: Float[Array, ""]
    half_span: Float[Array, ""]
    channels: tuple[str, ...] = eqx.field(static=True)


def fit_scaling(recording: Recording, *, degree: int | None = 1, robust: bool = False) -> Scaling:
    """Fit the trend and the scale of each channel to its observed samples; host-side.

    The trend is the least-squares polynomial, in a Legendre basis over the recording's times, which
    stays well conditioned. The scale is the standard deviation of what is left.

    Arguments:
        recording: one recording with known values, of any spacing, with any gaps.
        degree: degree of the polynomial: 0 removes the mean, 1 (default) a line, None nothing. The
            trend extrapolates; of a degree above 1 or 2, wildly.
        robust: take the scale as the median absolute deviation, times 1.4826 so that it equals the
            standard deviation of normal noise; the trend stays least squares.

    Returns:
        A `Scaling`.

    Raises:
        TypeError: `recording` is no `Recording`, or is traced; `degree` is no int.
        ValueError: a channel has too few samples for the degree, or is constant once the trend is
            off.

    Example:
        >>> from oscillib.recordings import fit_scaling, recording
        >>> s = fit_scaling(recording([0.0, 1.0, 2.0, 3.0], [[1.0], [3.0], [1.0], [3.0]]), degree=0)
        >>> s.trend[0], s.spread[0]
        (Array([2.], dtype=float64), Array(1., dtype=float64))

    Source: common practice, no source.
    """
    times, values, mask = host_arrays("recording", recording)
    columns = 0 if degree is None else check_count("degree", degree, least=0) + 1
    dtype = recording.values.dtype
    # Rounded first: the trend is then fitted on the very basis that `unscale` will compute.
    centre = jnp.asarray((times[0] + times[-1]) / 2, dtype)
    half_span = jnp.asarray((times[-1] - times[0]) / 2 or 1.0, dtype)
    basis = np.polynomial.legendre.legvander(
        (times - float(centre)) / float(half_span), max(columns - 1, 0)
    )[:, :columns]
    trend, spread = np.zeros((values.shape[1], columns)), np.zeros(values.shape[1])
    for i, name in enumerate(recording.channels):
        seen = mask[:, i]
        trend[i] = _fit_trend(basis[seen], values[seen, i], name)
        left = values[seen, i] - basis[seen] @ trend[i]
        rounding = 10 * float(jnp.finfo(dtype).eps) * float(np.max(np.abs(values[seen, i])))
        spread[i] = _spread(left, rounding, name, robust)
    return Scaling(
        jnp.asarray(trend, dtype),
        jnp.asarray(spread, dtype),
        centre,
        half_span,
        recording.channels,
    )


def scale(recording: Recording, scaling: Scaling) -> Recording:
    """Take the trend off a recording and divide by the scale.

    `scaled = (values - trend(times)) / spread` where observed; missing entries stay 0.

    Arguments:
        recording: one recording, with the channels of `scaling`; its times may differ from the
            fitted ones, where the trend extrapolates.
        scaling: what `fit_scaling` returned.

    Returns:
        A `Recording` in units of the scale, with the same times and mask.

    Raises:
        TypeError: `recording` is no `Recording`, or its dtype is another one than the scaling's.
        ValueError: `recording` is a stack, or its channels are other ones.

    Example:
        >>> from oscillib.recordings import fit_scaling, recording, scale
        >>> r = recording([0.0, 1.0, 2.0, 3.0], [[1.0], [3.0], [1.0], [3.0]])
        >>> scale(r, fit_scaling(r, degree=0)).values[:, 0]
        Array([-1.,  1., -1.,  1.], dtype=float64)
    """
    check_recording("recording", recording)
    if recording.channels != scaling.channels:
        raise ValueError(
            f"`recording.channels` must be those of `scaling`, {scaling.channels}; got "
            f"{recording.channels}. Fix: fit a scaling to this recording, or reorder its channels."
        )
    check_same_dtype("recording.values", recording.values, "scaling.spread", scaling.spread)
    left = recording.values - _trend(recording.times, scaling)
    scaled = left / jnp.broadcast_to(scaling.spread, left.shape)
    return Recording(
        recording.times,
        jnp.where(recording.mask, scaled, 0),
        recording.mask,
        recording.channels,
    )


def unscale(
    values: Float[Array, "time channel"], times: Float[Array, " time"], scaling: Scaling
) -> Float[Array, "time channel"]:
    """Bring scaled values, such as a prediction, back to the user's units.

    `values * spread + trend(times)`, the inverse of `scale`. The trend extrapolates beyond the
    fitted times: by a straight line for degree 1, wildly for a high degree.

    Arguments:
        values: values in units of the scale, shape `(time, channel)`.
        times: their times, shape `(time,)`, in the unit of the fitted times.
        scaling: what `fit_scaling` returned.

    Returns:
        Values in the user's units, shape `(time, channel)`.

    Raises:
        TypeError: the dtypes differ.
        ValueError: a shape does not fit.

    Example:
        >>> from oscillib.recordings import fit_scaling, recording, unscale
        >>> r = recording([0.0, 1.0, 2.0, 3.0], [[1.0], [3.0], [1.0], [3.0]])
        >>> unscale(jnp.array([[0.5]]), jnp.array([4.0]), fit_scaling(r, degree=0))
        Array([[2.5]], dtype=float64)
    """
    check_shape("times", times, (None,), "(time,)")
    shape = (times.shape[0], scaling.spread.shape[0])
    check_shape("values", values, shape, "(time, channel)")
    check_same_dtype("values", values, "scaling.spread", scaling.spread)
    check_same_dtype("times", times, "scaling.spread", scaling.spread)
    return values * jnp.broadcast_to(scaling.spread, shape) + _trend(times, scaling)


def unscale_spread(
    sd: Float[Array, "*axes channel"], scaling: Scaling
) -> Float[Array, "*axes channel"]:
    """Bring a standard deviation or the width of an interval back to the user's units.

    `sd * spread`: a width has no trend. A covariance matrix takes the product of two spreads.

    Arguments:
        sd: widths in units of the scale, any shape with `channel` as its last axis.
        scaling: what `fit_scaling` returned.

    Returns:
        Widths in the user's units, the shape of `sd`.

    Raises:
        TypeError: the dtypes differ.
        ValueError: the last axis of `sd` is not `channel`.

    Example:
        >>> from oscillib.recordings import fit_scaling, recording, unscale_spread
        >>> r = recording([0.0, 1.0, 2.0, 3.0], [[1.0], [5.0], [1.0], [5.0]])
        >>> unscale_spread(jnp.array([0.5]), fit_scaling(r, degree=0))
        Array([1.], dtype=float64)
    """
    check_floating("sd", sd)
    count = scaling.spread.shape[0]
    if jnp.ndim(sd) == 0 or sd.shape[-1] != count:
        raise ValueError(
            f"`sd` must have the {count} channels of `scaling` as its last axis; got shape "
            f"{jnp.shape(sd)}. Fix: `jnp.moveaxis(sd, ..., -1)`, or one width a channel."
        )
    check_same_dtype("sd", sd, "scaling.spread", scaling.spread)
    return sd * jnp.broadcast_to(scaling.spread, sd.shape)


def _trend(times: jax.Array, scaling: Scaling) -> jax.Array:
    """Return the trend at `times`, shape `(time, channel)`."""
    x = (times - scaling.centre) / scaling.half_span
    # Legendre polynomials by their recurrence, (k + 1) P_{k+1} = (2k + 1) x P_k - k P_{k-1}.
    previous, polynomial = jnp.zeros_like(x), jnp.ones_like(x)
    total = jnp.zeros((x.shape[0], scaling.trend.shape[0]), scaling.trend.dtype)
    for k in range(scaling.trend.shape[1]):
        total = total + polynomial[:, None] * scaling.trend[None, :, k]
        step = ((2 * k + 1) * x * polynomial - k * previous) / (k + 1)
        previous, polynomial = polynomial, step
    return total


def _fit_trend(basis: np.ndarray, values: np.ndarray, name: str) -> np.ndarray:
    count, columns = basis.shape
    if not columns:
        return np.zeros(0)
    if count <= columns:
        raise ValueError(
            f"`degree` must leave samples to measure the scale by: degree {columns - 1} needs at "
            f"least {columns + 1}, but channel {name!r} has {count}. Fix: a lower degree, or leave "
            "that channel out."
        )
    from scipy.linalg import lstsq

    solved = lstsq(basis, values)
    assert solved is not None
    coefficients, _, rank, _ = solved
    if rank < columns:
        raise ValueError(
            f"`degree` is {columns - 1}, too high for where the samples of channel {name!r} lie: "
            f"they fix only {rank} of {columns} coefficients. Fix: a lower degree."
        )
    return coefficients


def _spread(left: np.ndarray, rounding: float, name: str, robust: bool) -> float:
    if robust:
        from scipy.stats import median_abs_deviation

        # The type stub knows numbers alone, not the documented "normal".
        mad = median_abs_deviation(left, scale="normal")  # pyright: ignore[reportArgumentType]
        spread = float(mad)
    else:
        spread = float(np.std(left))
    if spread <= rounding or not math.isfinite(spread):
        fix = "`robust=False`, if fewer than half of its samples vary; or " if robust else ""
        raise ValueError(
            f"`recording` must vary in every channel; channel {name!r} has scale {spread:.3g} once "
            f"the trend is off: it is constant, or a trend and nothing else. Fix: {fix}a lower "
            "`degree`, or leave that channel out."
        )
    return spread
