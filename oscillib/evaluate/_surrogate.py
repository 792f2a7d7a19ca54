"""Surrogate recordings: the same spectrum, no other structure."""

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, PRNGKeyArray, UInt32

from .._validate import check_count, check_floating, check_shape, check_values


def phase_surrogate(
    values: Float[Array, "time channel"],
    *,
    key: PRNGKeyArray | UInt32[Array, "2"],
    shared_phases: bool = True,
) -> Float[Array, "time channel"]:
    """Draw a recording with the same periodogram and random phases.

    The discrete Fourier transform of each channel is multiplied by `exp(i phase)`, `phase` uniform
    on `[0, 2 pi)` for each frequency; mean and Nyquist component stay. A model of the nonlinear
    dynamics should forecast the recording better than its surrogates, which only keep what a linear
    Gaussian process has.

    Arguments:
        values: samples on a regular grid, shape `(time, channel)`, none missing.
        key: random key.
        shared_phases: turn all channels by the same phases, which keeps every cross-spectrum, hence
            every linear relation between channels (default); otherwise channels are independent.

    Returns:
        Surrogate, shape `(time, channel)`.

    Raises:
        TypeError: `values` are not floating.
        ValueError: the shape is wrong, or a value is not finite.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import phase_surrogate
        >>> values = jnp.sin(jnp.arange(8.0))[:, None]
        >>> surrogate = phase_surrogate(values, key=jax.random.key(0))
        >>> bool(jnp.allclose(jnp.sum(surrogate**2), jnp.sum(values**2)))
        True

    Source:
        Theiler et al. 1992, Physica D 58:77; shared phases: Prichard and Theiler 1994, Phys. Rev.
        Lett. 73:951.
    """
    _check_recording(values)
    num, channels = values.shape
    spectrum = jnp.fft.rfft(values, axis=0)
    turned = (num - 1) // 2  # frequencies strictly between zero and Nyquist
    shape = (turned, 1 if shared_phases else channels)
    phase = 2 * jnp.pi * jax.random.uniform(key, shape, dtype=values.dtype)
    phase = jnp.broadcast_to(phase, (turned, channels))
    turn = jax.lax.complex(jnp.cos(phase), jnp.sin(phase))
    spectrum = spectrum.at[1 : turned + 1].multiply(turn)
    return jnp.fft.irfft(spectrum, n=num, axis=0)


def amplitude_adjusted_surrogate(
    values: Float[Array, "time channel"],
    *,
    key: PRNGKeyArray | UInt32[Array, "2"],
    iterations: int = 100,
) -> Float[Array, "time channel"]:
    """Draw a recording with the very values of each channel, and nearly its periodogram.

    From a random order of the samples, two moves take turns: give the discrete Fourier transform
    the amplitudes of `values` and keep its phases; then replace the k-th smallest sample by the
    k-th smallest of `values`. `phase_surrogate` makes the values nearly Gaussian; these keep their
    distribution exactly, so a model that wins over them has found more than a static distortion
    of a linear Gaussian process. Channels are independent of each other: relations between them
    are lost.

    Arguments:
        values: samples on a regular grid, shape `(time, channel)`, none missing.
        key: random key.
        iterations: number of turns; 100 by default.

    Returns:
        Surrogate, shape `(time, channel)`: a permutation of each channel. NaN where a channel was
        not finite under `jit`.

    Raises:
        TypeError: `values` are not floating, or `iterations` is not an int.
        ValueError: the shape is wrong, or a value is not finite.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import amplitude_adjusted_surrogate
        >>> values = jnp.exp(jnp.sin(jnp.arange(16.0)))[:, None]
        >>> surrogate = amplitude_adjusted_surrogate(values, key=jax.random.key(0))
        >>> bool(jnp.all(jnp.sort(surrogate, axis=0) == jnp.sort(values, axis=0)))
        True

    Source:
        Schreiber and Schmitz 1996, Phys. Rev. Lett. 77:635.
    """
    _check_recording(values)
    iterations = check_count("iterations", iterations)
    num = values.shape[0]
    ordered = jnp.sort(values, axis=0)
    amplitude = jnp.abs(jnp.fft.rfft(values, axis=0))

    def turn(_, surrogate):
        spectrum = jnp.fft.rfft(surrogate, axis=0)
        size = jnp.abs(spectrum)
        # A vanishing component has no phase; it takes phase 0.
        cosine = jnp.where(size > 0, spectrum.real / jnp.where(size > 0, size, 1), 1)
        sine = jnp.where(size > 0, spectrum.imag / jnp.where(size > 0, size, 1), 0)
        shaped = jax.lax.complex(amplitude * cosine, amplitude * sine)
        rank = jnp.argsort(jnp.argsort(jnp.fft.irfft(shaped, n=num, axis=0), axis=0), axis=0)
        return jnp.take_along_axis(ordered, rank, axis=0)

    start = jax.random.permutation(key, values, axis=0, independent=True)
    surrogate = jax.lax.fori_loop(0, iterations, turn, start)
    return jnp.where(jnp.all(jnp.isfinite(values), axis=0)[None], surrogate, jnp.nan)


def _check_recording(values: Array) -> None:
    check_shape("values", values, (None, None), "(time, channel)")
    check_floating("values", values)
    check_values("values", values, jnp.isfinite, "finite (fill or cut out missing samples)")
