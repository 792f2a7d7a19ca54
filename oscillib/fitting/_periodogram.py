"""Least-squares periodogram of recordings with gaps: the Lomb-Scargle method with a free mean."""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import (
    as_float,
    check_count,
    check_floating,
    check_same_dtype,
    check_shape,
    check_values,
    is_concrete,
)


# Frequencies handled at once: bounds the memory at this many rows of the recording's length.
_BATCH = 64


class Periodogram(eqx.Module):
    """Tones fitted to every channel, one frequency at a time.

    Arguments:
        frequencies: angular frequency of each row, `(frequency,)`, rad per time unit.
        power: fraction of the observed variance that the tone explains, from 0 to 1,
            `(frequency, channel)`.
        amplitude: amplitude of the fitted tone, `(frequency, channel)`, unit of the values.
        phase: phase of the fitted tone at the first time, `(frequency, channel)`, rad.
        offset: fitted constant, `(frequency, channel)`, unit of the values.
    """

    frequencies: Float[Array, " frequency"]
    power: Float[Array, "frequency channel"]
    amplitude: Float[Array, "frequency channel"]
    phase: Float[Array, "frequency channel"]
    offset: Float[Array, "frequency channel"]


def periodogram(times: Any, values: Any, mask: Any, frequencies: Any) -> Periodogram:
    """Fit a tone and a constant to the observed samples at each frequency.

    For every frequency `w` and channel, least squares over the observed samples of

        values ~ offset + amplitude cos(w (times - times[0]) + phase)

    and `power = 1 - (residual sum of squares) / (sum of squares about the mean)`. Times may be
    irregular and samples missing. A frequency at which cosine and sine cannot be told apart on
    the given times (0 and the Nyquist frequency of a regular grid) gets the smallest of the
    equally good fits; a channel without observed variance gets power and amplitude 0.

    Arguments:
        times: sample times, `(time,)`, increasing, in the user's time unit.
        values: samples, `(time, channel)`.
        mask: True where a sample was observed, `(time, channel)`. What `values` holds elsewhere,
            NaN included, has no effect.
        frequencies: angular frequencies, `(frequency,)`, rad per time unit; see
            `default_frequencies`.

    Returns:
        A `Periodogram` with arrays of shape `(frequency, channel)`. With `n` observed samples of
        variance v, the classical Lomb-Scargle power of a tone is `power n v / 2`.

    Raises:
        ValueError: shapes do not fit together.
        TypeError: dtypes differ, or `mask` is not boolean.

    Example:
        >>> from oscillib.fitting import periodogram
        >>> times = jnp.arange(64.0)
        >>> values = 3.0 * jnp.cos(0.5 * times + 1.0)[:, None]
        >>> found = periodogram(times, values, jnp.ones((64, 1), bool), jnp.array([0.5]))
        >>> [round(float(x[0, 0]), 6) for x in (found.power, found.amplitude, found.phase)]
        [1.0, 3.0, 1.0]

    Source: Lomb, Astrophys. Space Sci. 39, 447 (1976); Scargle, Astrophys. J. 263, 835 (1982); the
        free mean: Zechmeister & Kuerster, Astron. Astrophys. 496, 577 (2009). From memory.
    """
    times, values, mask = check_samples(times, values, mask)
    frequencies = as_float(frequencies)
    check_shape("frequencies", frequencies, (None,), "(frequency,)")
    check_same_dtype("frequencies", frequencies, "times", times)
    check_values("frequencies", frequencies, lambda w: np.isfinite(w) & (w >= 0), "0 or more")
    return Periodogram(frequencies, *_tones(times, values, mask, frequencies))


def default_frequencies(times: Any, *, oversample: int = 5) -> Array:
    """List the angular frequencies that a recording can resolve. Host-side: needs known times.

        w_k = (2 pi / span) (1 + k / oversample),  up to  pi / (median interval)

    with `span = times[-1] - times[0]`: from one turn in the record to the pseudo-Nyquist frequency.

    Arguments:
        times: sample times, `(time,)`, increasing, in the user's time unit.
        oversample: points per resolution width `2 pi / span`; 5 leaves no peak between points.

    Returns:
        Angular frequencies, `(frequency,)`, rad per time unit, in the precision of `times`.

    Raises:
        ValueError: fewer than three times, or times that do not increase.
        TypeError: called inside `jit`, where the number of frequencies cannot depend on times.

    Example:
        >>> from oscillib.fitting import default_frequencies
        >>> default_frequencies(jnp.arange(5.0), oversample=1) / jnp.pi
        Array([0.5, 1. ], dtype=float64)

    Source: common practice, no source.
    """
    if not is_concrete(times):
        raise TypeError(
            "`times` must be known values, because they set the number of frequencies; got a "
            "traced array. Fix: call `default_frequencies` outside `jit` and pass the result in."
        )
    oversample = check_count("oversample", oversample)
    # Taken before the conversion, which would hide the values of an array known inside `jit`.
    t = np.asarray(times, dtype=np.float64)
    times = as_float(times)
    check_shape("times", times, (None,), "(time,)")
    if times.shape[0] < 3:
        raise ValueError(f"`times` must hold at least 3 samples; got {times.shape[0]}.")
    check_values("times", np.diff(t), lambda d: d > 0, "increasing; its differences positive")
    step = 2 * np.pi / (t[-1] - t[0])
    highest = np.pi / np.median(np.diff(t))
    # The slack keeps the last point when it falls on the limit but for rounding.
    count = int(np.floor((highest / step - 1) * oversample * (1 + 1e-9))) + 1
    if count < 1:
        raise ValueError(
            "`times` span less than one period at their pseudo-Nyquist frequency; give the "
            "frequencies yourself."
        )
    grid = step * (1 + np.arange(count) / oversample)
    return jnp.asarray(grid, dtype=times.dtype)


def check_samples(times: Any, values: Any, mask: Any) -> tuple[Array, Array, Array]:
    """Return times, values and mask as arrays, or raise naming the one that does not fit."""
    times, values, mask = as_float(times), jnp.asarray(values), jnp.asarray(mask)
    check_shape("times", times, (None,), "(time,)")
    check_shape("values", values, (times.shape[0], None), "(time, channel)")
    check_shape("mask", mask, values.shape, "(time, channel)")
    check_floating("values", values)
    check_same_dtype("values", values, "times", times)
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean; got {mask.dtype}. Fix: `mask.astype(bool)`.")
    check_values("times", times, np.isfinite, "finite")
    return times, values, mask


def centre(times: Array, values: Array, mask: Array) -> tuple[Array, Array, Array]:
    """Return elapsed times, values less their observed mean with zeros in the gaps, and the mean.

    Small numbers keep the precision of both the angle and the sums in float32.
    """
    count = jnp.maximum(mask.sum(0), 1).astype(values.dtype)
    mean = jnp.where(mask, values, 0).sum(0) / count
    return times - times[0], jnp.where(mask, values - mean[None], 0), mean


@jax.jit
def _tones(times: Array, values: Array, mask: Array, frequencies: Array) -> tuple[Array, ...]:
    """Power, amplitude, phase and offset at every frequency."""
    elapsed, centred, mean = centre(times, values, mask)

    # Recomputed in the backward pass: what is kept would be as large as frequencies times times.
    @jax.checkpoint
    def at(w):
        return fit_tone(w, elapsed, centred, mask)

    # Whole batches: a shorter last one would compile all of it a second time.
    count = frequencies.shape[0]
    whole = jnp.pad(frequencies, (0, -count % _BATCH))
    fitted = jax.lax.map(at, whole, batch_size=_BATCH)
    power, cosine, sine, offset = (x[:count] for x in fitted)
    amplitude, phase = polar(cosine, sine)
    return power, amplitude, phase, mean[None] + offset


def fit_tone(
    w: Array, elapsed: Array, centred: Array, mask: Array
) -> tuple[Array, Array, Array, Array]:
    """Least-squares power, cosine and sine coefficient and constant at one angular frequency.

    The constant is eliminated first, which leaves two equations a channel.
    """
    weights = mask.astype(centred.dtype)
    count = jnp.maximum(weights.sum(0), 1)
    c, s = jnp.cos(w * elapsed), jnp.sin(w * elapsed)
    mean_c, mean_s = c @ weights / count, s @ weights / count
    cc = (c * c) @ weights - count * mean_c**2
    ss = (s * s) @ weights - count * mean_s**2
    cs = (c * s) @ weights - count * mean_c * mean_s
    yc, ys = c @ centred, s @ centred
    cosine, sine = _solve(cc, cs, ss, yc, ys)
    total = (centred**2).sum(0)
    power = (cosine * yc + sine * ys) / jnp.where(total > 0, total, 1)
    return power, cosine, sine, -cosine * mean_c - sine * mean_s


def polar(cosine: Array, sine: Array) -> tuple[Array, Array]:
    """Return amplitude and phase of `cosine cos + sine sin = amplitude cos(. + phase)`.

    Zero coefficients get amplitude and phase 0 with gradient 0, not NaN.
    """
    there = (cosine != 0) | (sine != 0)
    cosine, sine = jnp.where(there, cosine, 1), jnp.where(there, sine, 0)
    amplitude = jnp.where(there, jnp.hypot(cosine, sine), 0)
    return amplitude, jnp.where(there, jnp.arctan2(-sine, cosine), 0)


def _solve(cc: Array, cs: Array, ss: Array, yc: Array, ys: Array) -> tuple[Array, Array]:
    """Solve the two normal equations; least-norm where they are singular to working precision."""
    det, trace = cc * ss - cs * cs, cc + ss
    full = det > 100 * jnp.finfo(cc.dtype).eps * trace**2
    # A matrix M of rank one has the pseudo-inverse M / trace(M)^2.
    safe_det = jnp.where(full, det, 1)
    safe_trace = jnp.where(trace > 0, trace, 1)
    cosine = jnp.where(full, (ss * yc - cs * ys) / safe_det, (cc * yc + cs * ys) / safe_trace**2)
    sine = jnp.where(full, (cc * ys - cs * yc) / safe_det, (cs * yc + ss * ys) / safe_trace**2)
    return cosine, sine
