"""The model of one tissue slice: what is believed of it, how it is simulated and filtered.

A slice is a few noisy Hopf units that share growth, noise and one coupling strength; each region
has its own frequency and its own gain. Channels are in units of their own spread, which all but
fixes the gain once the dynamics are known: what is fitted is the level, the gain over the one that
is expected then. Nothing here knows which slices were treated.
"""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jax.scipy.stats import norm

from oscillib import encoders, likelihood, losses
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_rollout, noisy_strang
from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import Free, Positive


TREND = 2  # degree of the polynomial that is taken off every channel: slow fading
SATURATION = 0.04  # per hour; a choice of the state's unit: gain and noise are measured in it
SETTLE = 240  # steps before a simulated recording: five days in half hours
STACK = 4  # samples side by side in one row of the network: a shorter recurrence
FIELD = HopfNetwork()
STEP = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)


class Slice(eqx.Module):
    """Parameters of one slice; rates per hour, channels in units of their own spread."""

    growth: Any  # (): below zero the cells are damped, above they oscillate by themselves
    coupling: Any  # (): drive of every region by every other one
    noise: Any  # (): per square root of an hour
    reading: Any  # (): standard deviation of a reading, in units of the state
    frequency: Any  # (region,): rad per hour
    level: Any  # (region,): of the order of 1

    @property
    def size(self) -> Any:
        """Return the root mean square of a component of the state of a unit by itself.

        Its r^2 follows a normal law of mean a/b and variance s^2/b cut at 0.

        Source: Fokker-Planck equation, e.g. Risken 1989 (from memory).
        """
        middle, spread = self.growth / SATURATION, self.noise / SATURATION**0.5
        ratio = middle / spread
        cut = jnp.exp(norm.logpdf(ratio) - norm.logcdf(ratio))
        return jnp.sqrt((middle + spread * cut) / 2)

    @property
    def gain(self) -> Any:
        """Return the gains, shape `(region,)`: `level` over the expected spread of a channel."""
        return self.level / jnp.sqrt(self.size**2 + self.reading**2)

    @property
    def dynamics(self) -> NoisyParams:
        """Return the network and its noise, as the noisy step takes them."""
        every = lambda x: jnp.broadcast_to(x, self.frequency.shape)
        others = 1 - jnp.eye(self.frequency.shape[0], dtype=self.frequency.dtype)
        field = HopfParams(
            every(self.growth),
            self.frequency,
            saturation=jnp.full_like(self.frequency, SATURATION),
            coupling=self.coupling * others,
        )
        return NoisyParams(field, every(self.noise))

    @property
    def readout(self) -> ReadoutParams:
        """Return the gains; mean and trend are off."""
        return ReadoutParams(self.gain)

    @property
    def reading_noise(self) -> Any:
        """Return a standard deviation for each channel, in its own units."""
        return self.gain * self.reading


RULES = Slice(Free(), Free(), Positive(), Positive(), Positive(), Positive())


def beliefs(regions: int, dtype: Any = float) -> encoders.Prior:
    """Say what is believed of any slice, treated or not, before its recording is seen."""
    ones = jnp.ones(regions, dtype)
    number = lambda x: jnp.asarray(x, dtype)
    middle = Slice(
        number(0.0), number(0.0), number(0.07), number(0.1), 2 * jnp.pi / 24 * ones, 0.83 * ones
    )
    # Growth and coupling per hour, about none at all; the others are relative.
    prior = encoders.Prior(middle, RULES, sd=Slice(0.05, 0.03, 0.4, 0.4, 0.06, 0.12))
    # Levels are off together, by what coupling does to the spread, and each by the chance of six
    # days; how far was seen in simulations.
    covariance = prior.law.covariance.at[-regions:, -regions:].add(0.45**2)
    law = encoders.FreeGaussian(prior.law.mean, jnp.linalg.cholesky(covariance))
    return eqx.tree_at(lambda p: p.law, prior, law)


def simulate(params: Slice, times: Any, key: Any) -> Any:
    """Record a slice that has forgotten its start, shape `(time, region)`."""
    start, path, reading = jax.random.split(key, 3)
    shape, dtype = (2, params.frequency.shape[0]), times.dtype
    y = 0.5 * jax.random.normal(start, shape, dtype)
    h = times[1] - times[0]
    ys = noisy_rollout(STEP, params.dynamics, y, h, SETTLE + times.shape[0] - 1, key=path)
    seen = jax.vmap(linear_readout, (0, None))(ys[SETTLE:], params.readout)
    return seen + params.reading_noise[None] * jax.random.normal(reading, seen.shape, dtype)


def own_units(values: Any, mask: Any) -> tuple[Any, Any]:
    """Take trend and spread off as `recordings.scale` does, but inside `jit`.

    Returns the scaled values, 0 where missing, and the spread of each channel.
    """
    x = np.linspace(-1, 1, values.shape[0])
    basis = jnp.asarray(np.polynomial.legendre.legvander(x, TREND), values.dtype)
    seen = mask.astype(values.dtype)

    def one(column, seen):
        column = seen * column
        level = jnp.linalg.solve((basis * seen[:, None]).T @ basis, basis.T @ column)
        left = seen * (column - basis @ level)
        spread = jnp.sqrt(jnp.sum(left**2) / jnp.sum(seen))
        return left / spread, spread

    return jax.vmap(one, in_axes=(1, 1), out_axes=(1, 0))(values, seen)


def simulated(prior: encoders.Prior, times: Any, mask: Any, key: Any) -> losses.Simulated:
    """Draw a slice, record it with the gaps of `mask`, and bring it to its own units."""
    pair = losses.simulate_pair(prior, simulate, times, mask, key=key)
    # A simulation that blew up has nothing observed; it is left as it is.
    values, spread = own_units(pair.values, jnp.asarray(mask))
    level = pair.params.level / jnp.where(pair.finite, spread, 1)
    params = eqx.tree_at(lambda p: p.level, pair.params, level)
    values = jnp.where(pair.mask, values, 0)
    return pair._replace(free=prior.free(params), params=params, values=values)


def record(prior: encoders.Prior, params: Slice, times: Any, mask: Any, key: Any) -> Any:
    """Record a known slice; return its free vector and the values, both in their own units."""
    values, spread = own_units(simulate(params, times, key), mask)
    return prior.free(eqx.tree_at(lambda p: p.level, params, params.level / spread)), values


def encoder(prior: encoders.Prior, regions: int, *, key: Any) -> encoders.Encoder:
    """Samples to rows, recurrence in both directions, attention, Gaussian proposal."""
    keys, dtype = jax.random.split(key, 4), prior.law.mean.dtype
    return encoders.Encoder(
        encoders.SampleMap(STACK * regions, 24, key=keys[0], dtype=dtype),
        encoders.Recurrence(24, 32, key=keys[1], dtype=dtype),
        encoders.AttentionPool(64, heads=4, key=keys[2], dtype=dtype),
        encoders.GaussianHead(64, prior.size, width=64, key=keys[3], dtype=dtype),
    )


def propose(net: Any, prior: encoders.Prior, values: Any, mask: Any) -> encoders.Proposal:
    """Return the proposal for one recording in its own units."""
    short = -values.shape[0] % STACK  # rows of padding that fill the last stack
    rows = lambda x: jnp.pad(x, ((0, short), (0, 0))).reshape(-1, STACK * x.shape[1])
    return net(None, rows(values.astype(prior.law.mean.dtype)), rows(mask), prior)


def start_belief(params: Slice) -> likelihood.Gaussian:
    """Return what is known of the first state: a rhythm of the usual size, at any phase.

    One size for all parameters would favour those with states of that size.
    """
    return likelihood.wide_start((2, params.frequency.shape[0]), params.size)


def filtered(params: Slice, values: Any, mask: Any, h: float) -> likelihood.Filtered:
    """Filter one recording: its likelihood, and residuals that are white if the model is right."""
    start = start_belief(params)
    return likelihood.gaussian_filter(STEP, linear_readout, params, values, mask, h=h, start=start)


def information(params: Slice, values: Any, mask: Any, h: float) -> Any:
    """Return what a recording says of the parameters, `(free, free)`."""
    start = start_belief(params)
    return likelihood.filter_information(
        STEP, linear_readout, params, RULES, values, mask, h=h, start=start
    )
