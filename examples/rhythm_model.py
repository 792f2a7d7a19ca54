"""The model that the examples fit: a rhythm and a slow background behind every channel.

It is assembled from the library's blocks, as a user would: a network of noisy Hopf units, one for
each channel, read through a waveform; and beside each unit a slow noise-driven relaxation, which
takes up what is not rhythm (fading, weather, a wandering baseline).
"""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jax.scipy.stats import norm
from jaxtyping import Array, Float

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_strang, strang
from oscillib.likelihood import StateSpaceParams
from oscillib.observe import WaveformParams, waveform_readout
from oscillib.parameters import Fixed, Free, OffDiagonal, Positive


FIELD = HopfNetwork()
window_step = strang(FIELD.saturation_flow, FIELD.linear_flow)
_noisy_step = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)


class Dynamics(eqx.Module):
    """Rhythm and background of every channel, in units of the scaled channels."""

    rhythm: HopfParams
    noise: Float[Array, " channel"]
    background_rate: Float[Array, " channel"]  # per time unit
    background_noise: Float[Array, " channel"]


def noisy_step(params: Dynamics, h: Any) -> Any:
    """Step rhythm and background together: nodes 0 to n-1 are rhythms, n to 2n-1 backgrounds."""
    rhythm, n = params.rhythm, params.noise.shape[0]
    still = jnp.zeros_like(params.noise)
    coupling = jnp.zeros((2 * n, 2 * n), still.dtype).at[:n, :n].set(rhythm.coupling)
    network = HopfParams(
        growth=jnp.concatenate([rhythm.growth, -params.background_rate]),
        frequency=jnp.concatenate([rhythm.frequency, still]),
        shear=jnp.concatenate([rhythm.shear, still]),
        saturation=jnp.concatenate([rhythm.saturation, still]),
        coupling=coupling,
    )
    noise = jnp.concatenate([params.noise, params.background_noise])
    return _noisy_step(NoisyParams(network, noise), h)


def noisy_readout(y: Float[Array, "2 node"], params: WaveformParams) -> Float[Array, " channel"]:
    """Read a channel as the waveform of its rhythm plus its background."""
    n = y.shape[1] // 2
    return waveform_readout(y[:, :n], params) + y[0, n:]


def initial_params(start: Any) -> StateSpaceParams:
    """Turn the start values of `spectrum_start`, on scaled channels, into parameters."""
    frequency = start.frequency
    # Growth beyond a tenth of the frequency is no rhythm that a Hopf unit describes.
    growth = jnp.clip(start.growth, -frequency / 10, frequency / 10)
    amplitude = jnp.maximum(start.amplitude, 0.3)
    saturation = jnp.maximum(jnp.abs(growth), 0.02 * frequency) / amplitude**2
    rate = frequency / 20
    dynamics = Dynamics(
        rhythm=HopfParams(growth, frequency, saturation=saturation),
        noise=amplitude * jnp.sqrt(0.02 * frequency),
        background_rate=rate,
        background_noise=0.3 * jnp.sqrt(2 * rate),
    )
    ones = jnp.ones_like(frequency)
    return StateSpaceParams(dynamics, WaveformParams(gain=ones), reading_noise=0.3 * ones)


def constraints(params: StateSpaceParams) -> StateSpaceParams:
    """Return what is fitted: all but the shear and the gain, which the channels' scale sets."""
    coupling = OffDiagonal() if params.reading_noise.shape[0] > 1 else Fixed()
    leaves = [
        Free(), Positive(), Fixed(), Positive(), coupling, Fixed(),  # rhythm
        Positive(), Positive(), Positive(),  # noise, background rate and noise
        Fixed(), Free(), Free(), Free(), Free(),  # gain, offset, cosine, sine, level
        Positive(),  # reading noise
    ]  # fmt: skip
    return jax.tree.unflatten(jax.tree.structure(params), leaves)


def prior_loss(params: StateSpaceParams, start: StateSpaceParams) -> Float[Array, ""]:
    """Return the negative log of a wide prior, centred on the start values.

    Coupling and overtones are shrunk towards none: an unshrunk coupling matrix overfits short
    recordings. Frequencies stay within a few tenths of the spectrum's peaks. Levels of noise and
    saturation may be off by a factor of seven at one sigma.
    """
    rhythm, readout = params.dynamics.rhythm, params.readout
    frequency = jnp.mean(start.dynamics.rhythm.frequency)
    shrunk = jnp.sum((rhythm.coupling / (0.02 * frequency)) ** 2)
    for overtone in (readout.cosine, readout.sine, readout.level):
        shrunk = shrunk + jnp.sum((overtone / 0.3) ** 2)
    frequencies = jnp.log(rhythm.frequency) - jnp.log(start.dynamics.rhythm.frequency)
    shrunk = shrunk + jnp.sum((frequencies / 0.1) ** 2)
    wide = [
        (rhythm.saturation, start.dynamics.rhythm.saturation),
        (params.dynamics.noise, start.dynamics.noise),
        (params.dynamics.background_rate, start.dynamics.background_rate),
        (params.dynamics.background_noise, start.dynamics.background_noise),
        (params.reading_noise, start.reading_noise),
    ]
    spread = sum(jnp.sum((jnp.log(value) - jnp.log(centre)) ** 2) for value, centre in wide)
    return shrunk / 2 + spread / (2 * 2.0**2)


def amplitude(dynamics: Dynamics) -> Float[Array, " channel"]:
    """Return the root mean square radius of each uncoupled unit, damped or self-sustained.

    r^2 follows a normal law of mean a/b and variance s^2/b cut at 0.

    Source: Fokker-Planck equation, e.g. Risken 1989 (from memory).
    """
    a, b = dynamics.rhythm.growth, dynamics.rhythm.saturation
    middle, spread = a / b, dynamics.noise / jnp.sqrt(b)
    ratio = middle / spread
    cut = jnp.exp(norm.logpdf(ratio) - norm.logcdf(ratio))
    return jnp.sqrt(middle + spread * cut)
