"""The model that the examples fit: a rhythm and a slow background behind every channel.

It is assembled from the library's blocks, as a user would: a network of noisy Hopf units, one for
each channel, read through a waveform; and beside each unit a slow noise-driven relaxation, which
takes up what is not rhythm (fading, weather, a wandering baseline).
"""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jax.flatten_util import ravel_pytree
from jax.scipy.stats import norm
from jaxtyping import Array, Float

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_strang, strang
from oscillib.likelihood import StateSpaceParams
from oscillib.observe import WaveformParams, waveform_readout
from oscillib.parameters import Fixed, Free, OffDiagonal, Positive, unconstrain


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


def prior_widths(free: Any) -> Any:
    """Return the standard deviation of the prior of every unconstrained leaf, about its start.

    Rates are in units of the median rhythm's angular frequency. Coupling and overtones are shrunk
    towards none: an unshrunk coupling matrix overfits short recordings. Frequencies stay within a
    few tenths of the spectrum's peaks. Levels of noise and saturation, on a logarithmic scale, may
    be off by a factor of seven.
    """
    rhythm, readout = free.dynamics.rhythm, free.readout
    widths = [
        (lambda f: f.dynamics.rhythm.growth, rhythm.growth, 0.3),
        (lambda f: f.dynamics.rhythm.frequency, rhythm.frequency, 0.1),
        (lambda f: f.dynamics.rhythm.coupling, rhythm.coupling, 0.03),
        (lambda f: f.readout.offset, readout.offset, 1.0),
        (lambda f: f.readout.cosine, readout.cosine, 0.3),
        (lambda f: f.readout.sine, readout.sine, 0.3),
        (lambda f: f.readout.level, readout.level, 0.3),
    ]
    out = jax.tree.map(lambda leaf: jnp.full_like(leaf, 2.0), free)
    for where, leaf, width in widths:
        if leaf is not None:
            out = eqx.tree_at(where, out, jnp.full_like(leaf, width))
    return out


class Prior:
    """Independent normal densities on the unconstrained leaves, centred on the start values."""

    def __init__(self, initial: StateSpaceParams):
        """Lay centre and widths out as one flat vector, in the order of `parameter_names`."""
        self.constraints = constraints(initial)
        free = unconstrain(initial, self.constraints)
        self.centre = ravel_pytree(free)[0]
        self.widths = ravel_pytree(prior_widths(free))[0]

    def loss(self, params: StateSpaceParams) -> Float[Array, ""]:
        """Return the negative log-density, up to a constant."""
        x = ravel_pytree(unconstrain(params, self.constraints))[0]
        return jnp.sum(((x - self.centre) / self.widths) ** 2) / 2

    @property
    def information(self) -> Float[Array, "free free"]:
        """Return the Hessian of the loss, which is the same everywhere."""
        return jnp.diag(self.widths**-2)


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
