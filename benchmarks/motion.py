"""Do parameters in one pass tell activities apart? `python benchmarks/motion.py`; extra `motion`.

The data: 80 recordings of a watch on the wrist, six channels (acceleration and turning rate, three
axes each), 100 samples at 10 Hz, four activities with 20 recordings each, shipped with aeon.

The model: one noisy Hopf unit behind each channel, near its bifurcation, all coupled to all, read
with a gain, an offset and white reading noise. Offset and scale of a recording are taken off first,
so that nothing else of it enters. An encoder is trained once, without labels, on recordings that
are simulated with parameters from the prior: it has seen no recording of the cohort. Its mean for a
recording, one pass, are the features; a second column refines it by Fisher scoring on the filter's
likelihood times the prior.

Beside it stand the log power of the channels in bands, zero frequency included, and ridge vector
autoregressions of each recording. The classifier is one and the same: multinomial logistic
regression with a ridge on standardised features. Its ridge, the number of bands, the order of the
autoregression, and whether couplings are among the features are chosen by inner cross-validation
on the training part (by log loss). Of all rivals the variant with more information is shown too.

Printed: errors of the proposal on fresh simulations; what the filter says of the recordings under
the prior's mean, the proposal and the refined parameters; accuracy and log loss of repeated
stratified cross-validation over all 80, and of the split in which the archive ships them.
"""

import argparse
import importlib.util
import time
from pathlib import Path
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import optax
import scipy.optimize

from oscillib import encoders, fitting, likelihood, losses, recordings
from oscillib.evaluate import fit_autoregression
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_rollout, noisy_strang
from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import Fixed, Free, OffDiagonal, Positive, unconstrain


jax.config.update("jax_enable_x64", True)

CHANNELS, SAMPLES, INTERVAL = 6, 100, 0.1  # INTERVAL in seconds
SETTLE = 60  # samples before a simulated recording
TIMES = INTERVAL * np.arange(SAMPLES)
SEEN = np.ones((SAMPLES, CHANNELS), bool)
FIELD = HopfNetwork()
STEP = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)


# Data ---------------------------------------------------------------------------------------------


class Cohort(NamedTuple):
    values: np.ndarray  # (recording, time, channel)
    label: np.ndarray  # (recording,): 0, 1, 2, 3
    names: list[str]
    shipped_for_training: np.ndarray  # (recording,)


def folder() -> Path | None:
    """Find the data without importing aeon, which takes long."""
    found = importlib.util.find_spec("aeon")
    if found is None or not found.submodule_search_locations:
        return None
    return Path(found.submodule_search_locations[0]) / "datasets" / "data" / "BasicMotions"


def load(where: Path) -> Cohort:
    values, labels, training = [], [], []
    for part in ("TRAIN", "TEST"):
        text = (where / f"BasicMotions_{part}.ts").read_text()
        for line in text.split("@data")[1].split():
            *channels, label = line.split(":")
            values.append([[float(x) for x in channel.split(",")] for channel in channels])
            labels.append(label)
            training.append(part == "TRAIN")
    names, label = np.unique(labels, return_inverse=True)
    return Cohort(np.array(values).transpose(0, 2, 1), label, list(names), np.array(training))


def own_units(values: Any) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Take mean and standard deviation of each channel off every recording; host-side."""
    scaled, offset, spread = [], [], []
    for recording in map(lambda v: recordings.recording(TIMES, v), values):
        scaling = recordings.fit_scaling(recording, degree=0)
        scaled.append(np.asarray(recordings.scale(recording, scaling).values))
        offset.append(np.asarray(scaling.trend[0]))
        spread.append(np.asarray(scaling.spread))
    return np.array(scaled), np.array(offset), np.array(spread)


# Model --------------------------------------------------------------------------------------------


class Motion(eqx.Module):
    """A unit for each channel; rates per second, channels in their own units."""

    field: HopfParams
    noise: Any  # (channel,)
    gain: Any  # (channel,)
    reading: Any  # (channel,): reading noise over gain

    @property
    def dynamics(self) -> NoisyParams:
        return NoisyParams(self.field, self.noise)

    @property
    def readout(self) -> ReadoutParams:
        return ReadoutParams(self.gain)

    @property
    def reading_noise(self) -> Any:
        return self.gain * self.reading


RULES = Motion(
    jax.tree.unflatten(
        jax.tree.structure(HopfParams([0.0], [1.0])),
        [Free(), Positive(), Fixed(), Fixed(), OffDiagonal(), Fixed()],
    ),
    Positive(), Positive(), Positive(),
)  # fmt: skip


def beliefs() -> encoders.Prior:
    """Say what is known of moving people before a recording is seen: 0.4 to 3 turns a second.

    Saturation sets the unit of the state. The rest is wide: from far below the bifurcation to far
    above, and a channel that is nearly all rhythm or nearly all noise.
    """
    ones = jnp.ones(CHANNELS)
    field = HopfParams(0 * ones, 2 * jnp.pi * 1.2 * ones)
    middle = Motion(field, 0.8 * ones, 1.4 * ones, 0.3 * ones)
    # Growth, log frequency, coupling, log noise, log gain, log reading noise.
    widths = [1.5, 0.5, 0.4, 0.5, 0.5, 0.8]
    free = jax.tree.structure(unconstrain(middle, RULES))
    return encoders.Prior(middle, RULES, sd=jax.tree.unflatten(free, widths))


def simulate(params: Motion, times: Any, key: Any) -> Any:
    """Record a network that has forgotten its start."""
    start, path, reading = jax.random.split(key, 3)
    y = 0.5 * jax.random.normal(start, (2, CHANNELS), times.dtype)
    ys = noisy_rollout(STEP, params.dynamics, y, INTERVAL, SETTLE + times.shape[0] - 1, key=path)
    seen = jax.vmap(linear_readout, (0, None))(ys[SETTLE:], params.readout)
    return seen + params.reading_noise[None] * jax.random.normal(reading, seen.shape, times.dtype)


def log_likelihood(params: Motion, values: Any) -> Any:
    """Return the filter's log-likelihood of a recording in its own units."""
    start = likelihood.wide_start((2, CHANNELS), 1.0)
    return likelihood.gaussian_filter(
        STEP, linear_readout, params, values, SEEN, h=INTERVAL, start=start
    ).log_likelihood


# Proposal and refinement --------------------------------------------------------------------------


def encoder(prior: encoders.Prior, *, key: Any) -> encoders.Encoder:
    keys = jax.random.split(key, 4)
    dtype = prior.law.mean.dtype
    return encoders.Encoder(
        encoders.SampleMap(CHANNELS, 24, key=keys[0], dtype=dtype),
        encoders.Recurrence(24, 32, key=keys[1], dtype=dtype),
        encoders.AttentionPool(64, heads=4, key=keys[2], dtype=dtype),
        encoders.GaussianHead(
            64, prior.size, kind="diagonal", width=64, key=keys[3], dtype=dtype
        ),
    )


def simulated(prior: encoders.Prior, key: Any) -> tuple[Any, Any, Any]:
    """Draw a pair and bring the recording, and the gain with it, to the recording's own units."""
    times = jnp.asarray(TIMES, prior.law.mean.dtype)
    pair = losses.simulate_pair(prior, simulate, times, SEEN, key=key)
    centred = pair.values - jnp.mean(pair.values, axis=0)[None]
    spread = jnp.std(pair.values, axis=0)
    spread = jnp.where(pair.finite, spread, 1)
    params = eqx.tree_at(lambda p: p.gain, pair.params, pair.params.gain / spread)
    return centred / spread[None], pair.mask, prior.free(params)


def train(prior: encoders.Prior, steps: int, batch: int, *, key: Any) -> tuple[Any, float]:
    """Train on fresh simulations; return the encoder and its loss over the last tenth."""
    begin, run = jax.random.split(key)
    net = encoder(prior, key=begin)
    rate = optax.cosine_decay_schedule(3e-3, steps)
    optimiser = optax.chain(optax.clip_by_global_norm(10.0), optax.adam(rate))

    def mean_loss(net, key):
        data = jax.vmap(simulated, (None, 0))(prior, jax.random.split(key, batch))
        laws = jax.vmap(net, (None, 0, 0, None))(None, *data[:2], prior).law
        return jnp.mean(jax.vmap(losses.posterior_loss)(laws, data[2]))

    def body(carry, key):
        net, memory = carry
        value, slope = jax.value_and_grad(mean_loss)(net, key)
        change, memory = optimiser.update(slope, memory)
        return (optax.apply_updates(net, change), memory), value

    start = (net, optimiser.init(net))
    run = jax.jit(lambda c, keys: jax.lax.scan(body, c, keys))
    (net, _), values = run(start, jax.random.split(key, steps))
    return net, float(jnp.mean(values[-(steps // 10) :]))
