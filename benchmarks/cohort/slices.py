"""The scenario: slices of six coupled regions, seen by 32 pixels through a saturating response.

A slice is a chain of six noisy Hopf units with one growth rate, one coupling between neighbours and
one level of noise, and a period of its own for every region. Each pixel sees the light of the
regions near it, log-linear in their states and saturating. One sample an hour, four days to learn
from and 32 hours beyond, hours of silence during a change of medium, and single readings lost.
"""

from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp

from oscillib import likelihood
from oscillib.encoders import Prior
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_rollout, noisy_strang, strang
from oscillib.losses import simulate_pair
from oscillib.parameters import Free, Positive


REGIONS, PIXELS = 6, 32
SEEN, BEYOND, HORIZON = 96, 32, 20  # samples
ORIGINS = (95, 101, 107)  # last sample known; the last horizon ends with the recording
CHUNK = 75  # recordings
FINER, SETTLE = 4, 120  # steps a sample, samples before the recording
FIELD = HopfNetwork()
NOISY_STEP = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)
WINDOW_STEP = strang(FIELD.saturation_flow, FIELD.linear_flow)

_AT = jnp.linspace(-0.5, REGIONS - 0.5, PIXELS)
_NEAR = jnp.exp(-((_AT[:, None] - jnp.arange(REGIONS)[None]) ** 2) / (2 * 0.6**2))
WEIGHT = _NEAR / jnp.sum(_NEAR, axis=1, keepdims=True)  # (pixel, region)


class Slice(eqx.Module):
    """Parameters of one slice; rates per hour, light in units of what saturates the sensor."""

    growth: Any  # (): bifurcation parameter
    frequency: Any  # (region,)
    coupling: Any  # (): between neighbours
    noise: Any  # (): per square root of an hour
    level: Any  # (): log of the light of a region at rest
    reading: Any  # (): standard deviation of a reading

    @property
    def field(self) -> HopfParams:
        """Return the parameters of the network; an uncoupled limit cycle has a radius near 1."""
        n = self.frequency.shape[0]
        neighbours = jnp.eye(n, k=1) + jnp.eye(n, k=-1)
        growth = jnp.broadcast_to(self.growth, (n,))
        return HopfParams(
            growth,
            self.frequency,
            saturation=jnp.full(n, 0.03),
            coupling=self.coupling * neighbours,
        )

    @property
    def dynamics(self) -> NoisyParams:
        """Return network and noise, as a noisy step takes them."""
        return NoisyParams(self.field, jnp.broadcast_to(self.noise, (REGIONS,)))

    @property
    def readout(self) -> Any:
        """Return what `light` takes."""
        return self.level

    @property
    def reading_noise(self) -> Any:
        """Return one standard deviation a pixel."""
        return jnp.broadcast_to(self.reading, (PIXELS,))


RULES = Slice(Free(), Positive(), Positive(), Positive(), Free(), Positive())


def population() -> Prior:
    """Return what is known of a slice before it is seen; the cohorts are drawn from it."""
    middle = Slice(
        jnp.asarray(0.03),
        jnp.full(REGIONS, 2 * jnp.pi / 24),
        jnp.asarray(0.03),
        jnp.asarray(0.06),
        jnp.asarray(0.0),
        jnp.asarray(0.04),
    )
    widths = Slice(0.02, 0.12, 0.7, 0.3, 0.4, 0.3)
    return Prior(middle, RULES, sd=widths)


def light(y: Any, level: Any) -> Any:
    """Read every pixel, shape `(pixel,)`: the light of its regions, saturating at 1."""
    return jax.nn.sigmoid(level + WEIGHT @ y[0])


def simulate(params: Slice, times: Any, key: Any) -> Any:
    """Record a slice that has forgotten its start: readings and, beside them, the light itself."""
    start, before, after, reading = jax.random.split(key, 4)
    y = jax.random.normal(start, (2, REGIONS))
    fine = 1 / FINER
    y = noisy_rollout(NOISY_STEP, params.dynamics, y, fine, SETTLE * FINER, key=before)[-1]
    count = times.shape[0]
    ys = noisy_rollout(NOISY_STEP, params.dynamics, y, fine, (count - 1) * FINER, key=after)
    seen = jax.vmap(light, (0, None))(ys[::FINER], params.level)
    readings = seen + params.reading * jax.random.normal(reading, seen.shape)
    return jnp.concatenate([readings, seen], axis=1)


def lose(key: Any) -> Any:
    """Draw a mask, shape `(time, pixel)`: a change of medium, and single readings lost."""
    begin, length, single = jax.random.split(key, 3)
    time = jnp.arange(SEEN + BEYOND)
    first = jax.random.randint(begin, (), 10, SEEN - 20)
    gap = (time >= first) & (time < first + jax.random.randint(length, (), 4, 11))
    lost = jax.random.uniform(single, (SEEN + BEYOND, PIXELS)) < 0.002
    return ~gap[:, None] & ~lost


class Cohort(NamedTuple):
    """Recordings and the truth behind them; recordings come first everywhere."""

    free: Any  # (recording, free)
    values: Any  # (recording, time, pixel), 0 where not observed
    mask: Any
    light: Any  # without reading noise, everywhere


@eqx.filter_jit
def _draw(prior: Prior, keys: Any) -> Cohort:
    times = jnp.arange(SEEN + BEYOND, dtype=float)

    def one(key):
        mask_key, key = jax.random.split(key)
        mask = lose(mask_key)
        # The light is asked for where it was not read, too.
        both = jnp.concatenate([mask, jnp.ones_like(mask)], axis=1)
        pair = simulate_pair(prior, simulate, times, both, key=key)
        values, light = jnp.split(pair.values, 2, axis=1)
        return Cohort(pair.free, values, pair.mask[:, :PIXELS], light)

    return jax.lax.map(one, keys, batch_size=25)


def draw(prior: Prior, count: int, *, key: Any) -> Cohort:
    """Draw a cohort, `count` a multiple of `CHUNK`; with the same key a smaller one begins it."""
    keys = jax.vmap(lambda i: jax.random.fold_in(key, i))(jnp.arange(count))
    return in_chunks(lambda keys: _draw(prior, keys), keys)


def in_chunks(f: Any, inputs: Any) -> Any:
    """Apply `f` to `CHUNK` recordings at a time, so that every size of cohort compiles once."""
    count = jax.tree.leaves(inputs)[0].shape[0]
    parts = [take(inputs, slice(i, i + CHUNK)) for i in range(0, count, CHUNK)]
    return jax.tree.map(lambda *x: jnp.concatenate(x), *map(f, parts))


def take(tree: Any, rows: Any) -> Any:
    """Return some recordings of a cohort, or of anything in which they come first."""
    return jax.tree.map(lambda x: x[rows], tree)


def beginning(cohort: Cohort) -> tuple[Any, Any]:
    """Return values and mask of the samples that parameters are learned from."""
    return cohort.values[..., :SEEN, :], cohort.mask[..., :SEEN, :]


def filtered(params: Slice, values: Any, mask: Any) -> likelihood.Filtered:
    """Filter one recording."""
    return likelihood.gaussian_filter(
        NOISY_STEP, light, params, values, mask, h=1.0, start=start_belief()
    )


def start_belief() -> likelihood.Gaussian:
    """Return what is known of the state at the first sample: amplitudes are near 1."""
    return likelihood.wide_start((2, REGIONS), 1.0)


def log_likelihood(params: Slice, values: Any, mask: Any) -> Any:
    """Return the filter's log-likelihood of one recording."""
    return filtered(params, values, mask).log_likelihood


def forecast(params: Slice, values: Any, mask: Any) -> Any:
    """Forecast one recording from every origin, shape `(origin, horizon, pixel)`."""
    out = filtered(params, values, mask)
    at = jnp.array(ORIGINS)
    beliefs = likelihood.Gaussian(out.means[at], out.covariances[at])
    return likelihood.forecast(NOISY_STEP, light, params, beliefs, HORIZON, h=1.0).means
