"""Surrogate recordings: the same spectrum, no other structure."""

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, PRNGKeyArray, UInt32

from .._validate import check_floating, check_shape, check_values


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
    check_shape("values", values, (None, None), "(time, channel)")
    check_floating("values", values)
    check_values("values", values, jnp.isfinite, "finite (fill or cut out missing samples)")
    num, channels = values.shape
    spectrum = jnp.fft.rfft(values, axis=0)
    turned = (num - 1) // 2  # frequencies strictly between zero and Nyquist
    shape = (turned, 1 if shared_phases else channels)
    phase = 2 * jnp.pi * jax.random.uniform(key, shape, dtype=values.dtype)
    phase = jnp.broadcast_to(phase, (turned, channels))
    turn = jax.lax.complex(jnp.cos(phase), jnp.sin(phase))
    spectrum = spectrum.at[1 : turned + 1].multiply(turn)
    return jnp.fft.irfft(spectrum, n=num, axis=0)
