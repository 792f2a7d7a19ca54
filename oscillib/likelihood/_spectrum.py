"""Spectra of damped linear networks, of recordings, and a likelihood that compares the two."""

from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float, Int

from .._validate import as_float, check_count, check_same_dtype, check_shape
from ..integrate import linear_transition
from ._gaussian import whitener


class CrossSpectrum(NamedTuple):
    """A Hermitian matrix at each frequency, in real and imaginary part.

    Attributes:
        real: shape `(frequency, channel, channel)`, symmetric.
        imag: same shape, antisymmetric.
    """

    real: Float[Array, "frequency channel channel"]
    imag: Float[Array, "frequency channel channel"]


class SampleSpectrum(NamedTuple):
    """What `sample_spectrum` returns.

    Attributes:
        frequencies: angular, rad per time unit, `(frequency,)`, without zero and the highest.
        spectrum: averaged over the stretches that are completely observed.
        count: how many those were; 0 makes the spectrum NaN.
    """

    frequencies: Float[Array, " frequency"]
    spectrum: CrossSpectrum
    count: Int[Array, ""]


def cross_spectrum(
    matrix: Float[Array, "size size"],
    rate: Float[Array, "size size"],
    frequencies: Float[Array, " frequency"],
    *,
    interval: Float[Array, ""] | float | None = None,
) -> CrossSpectrum:
    """Return the stationary cross-spectrum of a damped linear network.

        S(v) = (iv - A)^-1 Q (iv - A)^-*        integral of S dv / 2 pi = stationary covariance

    Two-sided. Sampled every `h`, frequencies beyond `pi / h` fold back; then, exactly,

        S_h(v) = h (e^(ivh) - e^(Ah))^-1 C(h) (e^(ivh) - e^(Ah))^-*

    with `C(h)` the noise of one interval.

    Arguments:
        matrix: `A`, shape `(size, size)`, per time unit; must be damped.
        rate: `Q`, shape `(size, size)`, covariance added per time unit.
        frequencies: `v`, angular, rad per time unit, shape `(frequency,)`.
        interval: `h`, sampling interval in time units; default `None`: the spectrum in continuous
            time.

    Returns:
        The spectrum of the flattened state, squared state units times time units. Channels have
        `see_spectrum(H, spectrum)`.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import cross_spectrum
        >>> spectrum = cross_spectrum(-jnp.eye(1), jnp.eye(1), jnp.array([0.0, 1.0]))
        >>> print(spectrum.real.ravel())  # 1 / (1 + v^2)
        [1.  0.5]

    Source: Gardiner, Handbook of Stochastic Methods (from memory).
    """
    matrix, rate, frequencies = jnp.asarray(matrix), jnp.asarray(rate), as_float(frequencies)
    check_shape("rate", rate, matrix.shape, "that of `matrix`")
    check_shape("frequencies", frequencies, (None,), "(frequency,)")
    check_same_dtype("rate", rate, "matrix", matrix)
    check_same_dtype("frequencies", frequencies, "matrix", matrix)
    if interval is None:
        turn, moved, noise = jax.lax.complex(0 * frequencies, frequencies), matrix, rate
    else:
        h = jnp.asarray(interval, matrix.dtype)
        moved, noise = linear_transition(matrix, rate, h)
        noise = h * noise
        turn = jax.lax.complex(jnp.cos(frequencies * h), jnp.sin(frequencies * h))
    eye = jnp.eye(matrix.shape[0], dtype=turn.dtype)
    resolvent = jnp.linalg.inv(turn[:, None, None] * eye[None] - moved.astype(turn.dtype)[None])
    spectrum = resolvent @ noise.astype(turn.dtype)[None] @ resolvent.conj().transpose(0, 2, 1)
    return CrossSpectrum(spectrum.real, spectrum.imag)


def see_spectrum(
    readout: Float[Array, "channel size"],
    spectrum: CrossSpectrum,
    *,
    reading_noise: Float[Array, " channel"] | None = None,
    interval: Float[Array, ""] | float | None = None,
) -> CrossSpectrum:
    """Return the spectrum of channels: `H S H' + h diag(reading_noise^2)`.

    Arguments:
        readout: `H`, from `readout_matrix`, shape `(channel, size)`.
        spectrum: of the state.
        reading_noise: standard deviation of each sample's reading, `(channel,)`; default none.
        interval: `h`, sampling interval in time units, needed with `reading_noise`.

    Returns:
        The spectrum of the channels.

    Raises:
        ValueError: only one of `reading_noise` and `interval` is given.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import cross_spectrum, see_spectrum
        >>> spectrum = cross_spectrum(-jnp.eye(1), jnp.eye(1), jnp.array([0.0]))
        >>> print(see_spectrum(jnp.array([[3.0]]), spectrum).real.ravel())
        [9.]
    """
    if (reading_noise is None) != (interval is None):
        raise ValueError(
            "`reading_noise` and `interval` belong together: reading noise has a spectrum only "
            "where sampling has an interval; got one of them."
        )
    real = readout[None] @ spectrum.real @ readout.T[None]
    imag = readout[None] @ spectrum.imag @ readout.T[None]
    if reading_noise is not None:
        h = jnp.asarray(interval, real.dtype)
        real = real + (h * jnp.diag(as_float(reading_noise) ** 2))[None]
    return CrossSpectrum(real, imag)


def coherence(spectrum: CrossSpectrum) -> Float[Array, "frequency channel channel"]:
    """Return the squared coherence of every pair of channels.

        |S_ij|^2 / (S_ii S_jj)

    Arguments:
        spectrum: any cross-spectrum.

    Returns:
        Between 0 and 1, shape `(frequency, channel, channel)`; NaN where a channel has no power.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import coherence, cross_spectrum
        >>> matrix = jnp.array([[-1.0, 0.0], [1.0, -1.0]])  # the first drives the second
        >>> spectrum = cross_spectrum(matrix, jnp.eye(2), jnp.array([0.0]))
        >>> print(coherence(spectrum)[0, 0, 1].round(6))
        0.5

    Source: common practice, no source.
    """
    power = jnp.diagonal(spectrum.real, axis1=1, axis2=2)
    return (spectrum.real**2 + spectrum.imag**2) / (power[:, :, None] * power[:, None, :])


def sample_spectrum(
    values: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"] | Bool[np.ndarray, "time channel"],
    length: int,
    *,
    interval: Float[Array, ""] | float,
) -> SampleSpectrum:
    """Return the cross-spectrum of a recording, averaged over stretches of `length` samples.

    Stretches follow one another; each is freed of its mean and tapered by a Hann window. A stretch
    with a missing sample is left out as a whole, samples at the end too few for one as well.

    Arguments:
        values: shape `(time, channel)`, regularly sampled; anything where `mask` is False.
        mask: same shape, True where observed.
        length: samples a stretch; a peak narrower than `8 pi / (length interval)` is smeared.
        interval: sampling interval, time units.

    Returns:
        Frequencies, spectrum and the number of stretches in it.

    Raises:
        ValueError: shapes differ; `length` is below 4 or above the recording's.
        TypeError: `mask` is not boolean; `length` is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import sample_spectrum
        >>> values = jnp.cos(jnp.pi / 2 * jnp.arange(32.0))[:, None]
        >>> out = sample_spectrum(values, values < 2, 16, interval=1.0)
        >>> out.frequencies[jnp.argmax(out.spectrum.real.ravel())] / jnp.pi
        Array(0.5, dtype=float64)

    Source: Welch 1967 (from memory), without overlap.
    """
    values, mask = jnp.asarray(values), jnp.asarray(mask)
    check_shape("mask", mask, values.shape, "that of `values`")
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    time, channels = values.shape
    if check_count("length", length, least=4) > time:
        raise ValueError(f"`length` must be at most the {time} samples; got {length}.")
    count = time // length
    cut = lambda x: x[: count * length].reshape(count, length, channels)
    whole = jnp.all(cut(mask), axis=(1, 2))
    stretches = jnp.where(whole[:, None, None], cut(values), 0)
    stretches = stretches - jnp.mean(stretches, axis=1, keepdims=True)
    h = jnp.asarray(interval, values.dtype)
    angle = (2 * np.pi / length) * np.arange(length)
    taper = jnp.asarray((1 - np.cos(angle)) / 2, values.dtype)
    inner = slice(1, (length + 1) // 2)
    waves = jnp.fft.rfft(stretches * taper[None, :, None], axis=1)[:, inner]
    products = jnp.sum(waves[:, :, :, None] * waves.conj()[:, :, None, :], axis=0)
    total = jnp.sum(whole)
    scale = h / (jnp.sum(taper**2) * total.astype(values.dtype))
    frequencies = jnp.asarray(angle[inner], values.dtype) / h
    spectrum = CrossSpectrum(products.real * scale, products.imag * scale)
    return SampleSpectrum(frequencies, spectrum, total)


def whittle(model: CrossSpectrum, sample: SampleSpectrum) -> Float[Array, ""]:
    """Return minus the log-likelihood of a recording's spectrum, up to a constant.

        count  sum over frequencies of  log det S(v) + trace( S(v)^-1 sample(v) )

    Exact only for long stretches and peaks much wider than a stretch resolves; the taper's side
    effects are not in it. Cheap, and a good source of start values for `gaussian_filter`.

    Arguments:
        model: spectrum of the channels at `sample.frequencies`, reading noise included.
        sample: from `sample_spectrum`.

    Returns:
        A scalar; NaN if no stretch was complete or the model's spectrum is singular.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import CrossSpectrum, sample_spectrum, whittle
        >>> values = jnp.sin(jnp.arange(32.0) ** 2)[:, None]
        >>> sample = sample_spectrum(values, values < 2, 16, interval=1.0)
        >>> flat = lambda level: CrossSpectrum(jnp.full((7, 1, 1), level), jnp.zeros((7, 1, 1)))
        >>> bool(whittle(flat(0.5), sample) < whittle(flat(2.0), sample))
        True

    Source: Whittle 1953 (from memory).
    """
    check_shape("sample.spectrum.real", sample.spectrum.real, model.real.shape, "that of `model`")
    check_same_dtype("sample.spectrum.real", sample.spectrum.real, "model.real", model.real)
    expected = jax.lax.complex(model.real, model.imag)
    seen = jax.lax.complex(sample.spectrum.real, sample.spectrum.imag)
    white = jax.vmap(whitener)(expected)
    diagonal = jnp.diagonal(white, axis1=1, axis2=2).real
    trace = jnp.sum((white.conj() * (white @ seen)).real)
    return sample.count.astype(trace.dtype) * (trace - 2 * jnp.sum(jnp.log(diagonal)))
