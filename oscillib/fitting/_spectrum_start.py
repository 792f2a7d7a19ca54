"""Start values of an oscillator read off the spectral line and the envelope of a recording."""

import math
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_same_dtype, check_shape, check_values
from ._periodogram import (
    centre,
    check_samples,
    default_frequencies,
    fit_tone,
    periodogram,
    polar,
)


# Samples a block holds on average, at least: enough for a tone and a constant with some to spare.
_BLOCK_SAMPLES = 8
# Lags of the block correlation: a line narrower than 1/64 turn is as good as a line of no width.
_MOST_LAGS = 64
# Envelope variation above which a rhythm counts as damped; see `spectrum_start`.
_DAMPED_ABOVE = 0.25
# Half widths above this many 1/span are resolved: the record holds as many coherence times.
_RESOLVED = 3.0
# Steps of the golden section: down to 1e-6 of the bracket; one step of Newton's does the rest.
_GOLDEN_STEPS = 30


class SpectrumStart(eqx.Module):
    """Start values for an oscillator, per channel; all fields have shape `(channel,)`.

    Arguments:
        frequency: angular frequency of the rhythm, rad per time unit.
        amplitude: amplitude of the tone at that frequency, unit of the values.
        phase: its phase at the first time, rad: `offset + amplitude cos(w (t - t0) + phase)`.
        offset: fitted constant, unit of the values.
        growth: start of the bifurcation parameter: `-half_width` for a damped rhythm kept up by
            noise, the mean squared envelope for a self-sustained one.
        half_width: half width of the spectral line, at least 1/span, rad per time unit.
        envelope_variation: squared coefficient of variation of the squared envelope: 1 for a
            damped rhythm driven by noise, near 0 for a self-sustained one.
        share: variance of the rhythm over that of the channel: 1 without noise and drift (chance
            may take it a little above), near 0 where there is no rhythm.
        ok: whether the peak lies inside the given frequencies and enough neighbouring periods
            were observed to read width and envelope; False where anything is not finite.
    """

    frequency: Float[Array, " channel"]
    amplitude: Float[Array, " channel"]
    phase: Float[Array, " channel"]
    offset: Float[Array, " channel"]
    growth: Float[Array, " channel"]
    half_width: Float[Array, " channel"]
    envelope_variation: Float[Array, " channel"]
    share: Float[Array, " channel"]
    ok: Bool[Array, " channel"]


def spectrum_start(times: Any, values: Any, mask: Any, *, frequencies: Any = None) -> SpectrumStart:
    """Read start values for a noisy Hopf oscillator off a recording, channel by channel.

    The rhythm is taken as `x`, the real part of

        dz = [(growth + i frequency) z - |z|^2 z] dt + s dW

    Its frequency is the highest peak of the `periodogram` on the grid, refined between the grid
    points by golden section and a Newton step. The record is cut into blocks of one period (or
    of 8 samples, if that is longer) and a tone and a constant are fitted in each, which gives the
    complex envelope z_j, whatever the sampling. With averages over pairs of blocks, weighted by
    the samples in both,

        R_k = <z_(j+k) conj(z_j)>,      half_width = -d log|R_k| / d(lag),  lags from 1 on
        envelope_variation = cov(|z_(j+1)|^2, |z_j|^2) / |R_1|^2

    Where the record holds more than 3 coherence times 1 / half_width, the line is a cluster of
    peaks, and the turn of R_1 moves `frequency` from the highest one to the centre.

    Lag 0 is left out, so white measurement noise drops out of both. A damped rhythm (growth < 0)
    is a Gaussian process: its line is Lorentzian with half width |growth|, and its envelope
    variation is 1. A self-sustained one has an envelope close to sqrt(growth): for noise `s` the
    stationary density of |z|^2 is a normal one of mean `growth` and standard deviation s, cut off
    at 0, so that its variation is about (s / growth)^2 for growth >> s, and 0.57 at growth = 0.

    The sign rule: self-sustained if `envelope_variation < 0.25`. The bound lies below 0.57 because
    a short record shows less variation than there is. It is sound where |growth| exceeds 2 s and
    the record is many coherence times 1 / half_width long; closer to the bifurcation a rhythm
    counts as damped, which is how it looks. Read `envelope_variation` itself before you trust the
    sign. The cubic term widens a damped line: half_width = |growth| + 2 s^2 / half_width.

    Measured: wrong signs in percent over 200 simulated records a case, 10 samples a period; first
    without measurement noise and gaps, then with noise of half the signal's standard deviation and
    30 percent of the samples missing.

        growth, s      30 periods   60 periods   100 periods
        -0.4,  0.1      11 / 23       2 / 10        1 / 2
        -0.2,  0.1      10 / 21       4 / 12        0 / 0
        -0.05, 0.03     20 / 25       5 / 6         2 / 4
        -0.05, 0.1      20 / 26      10 / 13        2 / 3
         0.2,  0.1      11 / 13      10 / 13        7 / 8
         0.2,  0.05      0 / 1        0 / 0         0 / 0
         0.5,  0.1       0 / 0        0 / 0         0 / 0
         0.5,  0.3       9 / 10       5 / 10        4 / 5

    The error of `frequency` was about sqrt(2 half_width / span) for lines that are resolved, and
    meets the Cramer-Rao bound for a tone in white noise.

    Arguments:
        times: sample times, `(time,)`, increasing, in the user's time unit.
        values: samples, `(time, channel)`, without slow drift (or restrict `frequencies`). Width
            and variation need no unit; `growth` of a self-sustained rhythm is in squared units of
            the values, which is right for the unit cubic coefficient above and a readout of gain 1.
        mask: True where a sample was observed, `(time, channel)`. What `values` holds elsewhere,
            NaN included, has no effect.
        frequencies: angular frequencies to search, `(frequency,)`, increasing, rad per time unit,
            spaced well below `2 pi / span`; default `default_frequencies(times)`, for which the
            times must be known (outside `jit`).

    Returns:
        A `SpectrumStart` with arrays of shape `(channel,)`.

    Raises:
        ValueError: shapes do not fit, or fewer than three frequencies, or not increasing.
        TypeError: dtypes differ, `mask` is not boolean, or traced times without `frequencies`.

    Example:
        >>> from oscillib.fitting import spectrum_start
        >>> times = jnp.linspace(0.0, 40.0, 401)
        >>> values = 2.0 * jnp.cos(6.0 * times + 0.5)[:, None]
        >>> start = spectrum_start(times, values, jnp.ones((401, 1), bool))
        >>> [round(float(x[0]), 3) for x in (start.frequency, start.phase, start.growth)]
        [6.0, 0.5, 4.0]

    Source: Lomb-Scargle peak: as `periodogram`. The envelope variation compares intensity and
        field correlations: Siegert, MIT Rad. Lab. Rep. 465 (1943); the density of |z|^2 near
        threshold: Risken, Z. Phys. 186, 85 (1965). From memory. The bound 0.25: measured here.
    """
    times, values, mask = check_samples(times, values, mask)
    if frequencies is None:
        frequencies = default_frequencies(times)
    frequencies = as_float(frequencies)
    check_shape("frequencies", frequencies, (None,), "(frequency,)")
    check_same_dtype("frequencies", frequencies, "times", times)
    if frequencies.shape[0] < 3:
        raise ValueError(
            "`frequencies` must hold at least 3 values, so that a peak can lie between two; got "
            f"{frequencies.shape[0]}."
        )
    check_values("frequencies", frequencies[1:] - frequencies[:-1], lambda d: d > 0, "increasing")
    return SpectrumStart(*_starts(times, values, mask, frequencies))


# Compiled as a whole: step by step, a first call would compile hundreds of operations.
@jax.jit
def _starts(times: Array, values: Array, mask: Array, frequencies: Array) -> tuple[Array, ...]:
    """Fields of a `SpectrumStart` for all channels."""
    power = periodogram(times, values, mask, frequencies).power
    peak = jnp.argmax(power, axis=0)
    elapsed, centred, mean = centre(times, values, mask)
    last = frequencies.shape[0] - 1
    low, high = frequencies[jnp.maximum(peak - 1, 0)], frequencies[jnp.minimum(peak + 1, last)]
    inside = (peak > 0) & (peak < last)
    of_channel = jax.vmap(_start, in_axes=(0, 0, 0, None, 1, 1, 0))
    return of_channel(low, high, inside, elapsed, centred, mask, mean)


def _start(
    low: Array, high: Array, inside: Array, elapsed: Array, x: Array, m: Array, mean: Array
) -> tuple[Array, ...]:
    """Fields of a `SpectrumStart` for one channel: `x` its centred samples, `m` its mask."""
    w = _refine(low, high, elapsed, x, m)
    span = elapsed[-1]
    duration = jnp.maximum(2 * jnp.pi / w, _BLOCK_SAMPLES * span / (elapsed.shape[0] - 1))
    envelope, weight = _envelope(w, duration, elapsed, x, m)
    slope, turn, size, variation, pairs = _correlate(envelope, weight)
    half_width = jnp.maximum(slope / duration, 1 / span)
    # A resolved line is a cluster of peaks: its centre is known better than which one is highest.
    w = w + jnp.where(half_width > _RESOLVED / span, turn / duration, 0)
    _, cosine, sine, offset = (v[0] for v in fit_tone(w, elapsed, x[:, None], m[:, None]))
    amplitude, phase = polar(cosine, sine)
    damped = ~(variation < _DAMPED_ABOVE)
    total = (x**2).sum() / jnp.maximum(m.sum(), 1).astype(x.dtype)
    share = size / 2 / jnp.where(total > 0, total, 1)
    growth = jnp.where(damped, -half_width, size)
    ok = inside & (pairs >= 4) & jnp.isfinite(w + growth + share + amplitude) & (total > 0)
    return w, amplitude, phase, mean + offset, growth, half_width, variation, share, ok


def _refine(low: Array, high: Array, elapsed: Array, x: Array, m: Array) -> Array:
    """Return the frequency of highest power between `low` and `high`."""

    def power(w, x):
        return fit_tone(w, elapsed, x[:, None], m[:, None])[0][0]

    fixed = jax.lax.stop_gradient(x)
    shrink = (math.sqrt(5) - 1) / 2

    def narrow(_, bracket):
        lo, hi = bracket
        inner = jnp.stack([hi - shrink * (hi - lo), lo + shrink * (hi - lo)])
        left, right = jax.vmap(power, in_axes=(0, None))(inner, fixed)
        first = left > right
        return jnp.where(first, lo, inner[0]), jnp.where(first, inner[1], hi)

    lo, hi = jax.lax.fori_loop(0, _GOLDEN_STEPS, narrow, (low, high))
    w = (lo + hi) / 2
    # A Newton step reaches working precision, where comparing values stops at its square root, and
    # gives the peak its exact derivative with respect to the samples.
    slope = jax.jacfwd(power)(w, x)
    bend = jax.jacfwd(jax.jacfwd(power))(w, fixed)
    step = -slope / jnp.where(bend < 0, bend, -1)
    return w + jnp.where((bend < 0) & (low <= w + step) & (w + step <= high), step, 0)


def _envelope(
    w: Array, duration: Array, elapsed: Array, x: Array, m: Array
) -> tuple[tuple[Array, Array], Array]:
    """Fit a tone and a constant in every block; return its two parts, and samples a block.

    Blocks with too few samples, or none, get weight 0.
    """
    blocks = elapsed.shape[0] // _BLOCK_SAMPLES + 2
    index = jnp.floor(elapsed / duration).astype(jnp.int32)
    member = m.astype(x.dtype)

    def total(v):
        return jax.ops.segment_sum(v * member, index, num_segments=blocks)

    c, s = jnp.cos(w * elapsed), jnp.sin(w * elapsed)
    count = total(jnp.ones_like(x))
    full = jnp.maximum(count, 1)
    # Deviations from the block's own mean eliminate the constant.
    c, s, x = (v - (total(v) / full)[index] for v in (c, s, x))
    cc, ss, cs, xc, xs = (total(v) for v in (c * c, s * s, c * s, x * c, x * s))
    det = cc * ss - cs * cs
    # The determinant is count^2 / 4 when samples cover the period evenly.
    good = (count >= 5) & (det > 0.02 * count**2)
    det = jnp.where(good, det, 1)
    real = jnp.where(good, (ss * xc - cs * xs) / det, 0)
    imaginary = jnp.where(good, -(cc * xs - cs * xc) / det, 0)
    return (real, imaginary), jnp.where(good, count, 0)


def _correlate(
    envelope: tuple[Array, Array], weight: Array
) -> tuple[Array, Array, Array, Array, Array]:
    """Return decay and turn a block, mean square, intensity variation, and neighbouring pairs."""
    re, im = envelope
    intensity = re**2 + im**2
    lags = jnp.arange(1, max(2, min(_MOST_LAGS, weight.shape[0] // 2)) + 1)
    position = jnp.arange(weight.shape[0])

    def at(lag):
        later = jnp.minimum(position + lag, weight.shape[0] - 1)
        pair = jnp.where(position + lag < weight.shape[0], weight * weight[later], 0)
        norm = jnp.where(pair.sum() > 0, pair.sum(), 1)
        real = (pair * (re[later] * re + im[later] * im)).sum() / norm
        imaginary = (pair * (im[later] * re - re[later] * im)).sum() / norm
        first, second = (pair * intensity).sum() / norm, (pair * intensity[later]).sum() / norm
        product = (pair * (intensity - first) * (intensity[later] - second)).sum() / norm
        return real, imaginary, product, (pair > 0).sum()

    real, imaginary, product, pairs = jax.vmap(at)(lags)
    square = real**2 + imaginary**2
    there = square > 0
    log_size = jnp.log(jnp.where(there, square, 1)) / 2
    # As many lags as keep half the correlation, and one more: beyond, chance outweighs the decay.
    above = jnp.cumprod(jnp.where(pairs > 0, square > 0.25 * square[0], True)[1:].astype(jnp.int32))
    used = there & jnp.concatenate([jnp.ones(2, bool), above[:-1].astype(bool)])
    lag = lags.astype(square.dtype)
    strength = jnp.where(used, square * pairs.astype(square.dtype), 0)
    total = jnp.where(strength.sum() > 0, strength.sum(), 1)
    mean_lag, mean_log = (strength * lag).sum() / total, (strength * log_size).sum() / total
    spread = (strength * (lag - mean_lag) ** 2).sum()
    slope = -(strength * (lag - mean_lag) * (log_size - mean_log)).sum()
    slope = jnp.maximum(slope / jnp.where(spread > 0, spread, 1), 0)
    # Carried back to lag 0, the decay between blocks does not count as noise.
    size = jnp.where(there[0], jnp.exp(log_size[0] + slope), 0)
    variation = jnp.where(there[0], product[0] / jnp.where(there[0], square[0], 1), 0)
    turn = jnp.arctan2(imaginary[0], jnp.where(there[0], real[0], 1))
    return slope, turn, size, variation, pairs[0]
