"""Encoders and the three ways to train them: simulations, evidence of the filter, rollouts."""

from functools import partial
from typing import Any, NamedTuple

import equinox as eqx
import features
import jax
import jax.numpy as jnp
import optax
import slices

from oscillib import encoders, likelihood, losses
from oscillib.integrate import cut, gather, join, roll_windows


BATCH = 16
HIDDEN = 16
WINDOW = 8  # hours, a third of a turn
WHOLE = slices.SEEN - 1
REFRESHES = 2  # of the states where windows start, in one training
RATE = 3e-3
SPREAD = 0.1  # of a rolled-out reading about its sample: reading noise and a window's noise
OPTIMISER = optax.inject_hyperparams(optax.adam)(learning_rate=0.0)


def encoder(pooling: str, prior: encoders.Prior, *, key: Any) -> encoders.Encoder:
    """Make an encoder; the three poolings differ in nothing else."""
    keys = jax.random.split(key, 3)
    size = 2 * (HIDDEN + features.INPUTS)
    pool = {
        "attention": lambda: encoders.AttentionPool(size, heads=4, key=keys[1]),
        "mean": encoders.MeanPool,
        "last": encoders.LastPool,
    }[pooling]()
    return encoders.Encoder(
        features.features,
        features.Beside(HIDDEN, key=keys[0]),
        pool,
        encoders.GaussianHead(size, prior.size, width=64, key=keys[2]),
    )


def propose(net: encoders.Encoder, prior: encoders.Prior, values: Any, mask: Any) -> Any:
    """Return the proposed Gaussian for one recording."""
    return net(None, values, mask, prior).law


def smoothed(params: slices.Slice, values: Any, mask: Any) -> Any:
    """Return the states of one recording given all of its samples, `(time, 2, region)`."""
    return likelihood.smooth(slices.filtered(params, values, mask)).means


def reconstruct(params: slices.Slice, states: Any, length: int) -> tuple[Any, Any]:
    """Roll out windows that start from known states; return readings and gaps."""
    windows = cut(jnp.arange(states.shape[0], dtype=states.dtype), length)
    starts = gather(states, windows)[:, 0]
    rolled = roll_windows(slices.WINDOW_STEP, params.field, starts, windows)
    read = jax.vmap(slices.light, (0, None))
    return read(join(rolled.states, windows), params.level), rolled.gaps


def rollout_likelihood(params: slices.Slice, values: Any, mask: Any, states: Any, *, length: int):
    """Return the log-density of what windows reconstruct and of the gaps between them."""
    readings, gaps = reconstruct(params, states, length)
    spread = jnp.full(values.shape[1:], SPREAD)
    off = losses.reconstruction(readings, values, mask, scale=spread)
    # What the population's noise adds over one window is the size of an ordinary gap.
    scale = jnp.full(gaps.shape[1:], 0.08 * length**0.5)
    return -off - losses.continuity(gaps, scale=scale)


class Sources(NamedTuple):
    """Where a training loss comes from, by name."""

    simulated: Any
    filter: Any
    windows: Any
    whole: Any


class Data(NamedTuple):
    """What a loss may look at; recordings come first."""

    values: Any
    mask: Any
    free: Any  # the truth, for simulations alone
    states: Any  # smoothed under earlier proposals, for rollouts alone


def _simulated(net, prior, data, key):
    return losses.posterior_loss(propose(net, prior, data.values, data.mask), data.free)


def _from_filter(net, prior, data, key):
    law = propose(net, prior, data.values, data.mask)
    seen = (data.values, data.mask)
    return losses.evidence_bound(law, prior, slices.log_likelihood, seen, key=key).loss


def _from_rollout(length, net, prior, data, key):
    law = propose(net, prior, data.values, data.mask)
    density = partial(rollout_likelihood, length=length)
    seen = (data.values, data.mask, data.states)
    return losses.evidence_bound(law, prior, density, seen, key=key).loss


LOSSES = Sources(
    _simulated, _from_filter, partial(_from_rollout, WINDOW), partial(_from_rollout, WHOLE)
)


@eqx.filter_jit
def _update(kind: str, net: Any, memory: Any, prior: Any, data: Data, key: Any, rate: Any):
    """Take one Adam step on the mean loss of a batch."""
    loss = getattr(LOSSES, kind)
    keys = jax.random.split(key, data.values.shape[0])

    def mean(net):
        return jnp.mean(jax.vmap(loss, (None, None, 0, 0))(net, prior, data, keys))

    value, gradient = eqx.filter_value_and_grad(mean)(net)
    memory.hyperparams["learning_rate"] = rate
    change, memory = OPTIMISER.update(gradient, memory)
    return eqx.apply_updates(net, change), memory, value


@eqx.filter_jit
def laws(net: Any, prior: encoders.Prior, values: Any, mask: Any) -> encoders.FreeGaussian:
    """Return what is proposed for every recording."""
    return jax.lax.map(lambda x: propose(net, prior, *x), (values, mask), batch_size=25)


@eqx.filter_jit
def states(prior: encoders.Prior, free: Any, values: Any, mask: Any) -> Any:
    """Smooth every recording, each under parameters of its own."""
    one = lambda x: smoothed(prior.params(x[0]), x[1], x[2])
    return jax.lax.map(one, (free, values, mask), batch_size=15)


def _refreshed(net: Any, prior: encoders.Prior, values: Any, mask: Any) -> Any:
    """Smooth a cohort under what is proposed for it; nothing is differentiated here."""
    one = lambda x: states(prior, laws(net, prior, x[0], x[1]).mean, x[0], x[1])
    return slices.in_chunks(one, (values, mask))


def train(
    kind: str, pooling: str, prior: encoders.Prior, cohort: slices.Cohort, steps: int, *, key: Any
) -> encoders.Encoder:
    """Train an encoder on a cohort; the rate falls along a half cosine to zero."""
    net = encoder(pooling, prior, key=key)
    memory = OPTIMISER.init(eqx.filter(net, eqx.is_inexact_array))
    values, mask = slices.beginning(cohort)
    count = values.shape[0]
    data = Data(values, mask, cohort.free, cohort.free)
    order, key = jax.random.split(jax.random.fold_in(key, 1))
    for step in range(steps):
        # No network guesses a state: the smoother says where windows start, given the proposals.
        if kind in ("windows", "whole") and step % (steps // REFRESHES) == 0:
            data = data._replace(states=_refreshed(net, prior, values, mask))
        turn, place = divmod(step * BATCH, count // BATCH * BATCH)
        chosen = jax.random.permutation(jax.random.fold_in(order, turn), count)[place:][:BATCH]
        batch = slices.take(data, chosen)
        rate = jnp.asarray(RATE * (1 + jnp.cos(jnp.pi * step / steps)) / 2)
        net, memory, _ = _update(
            kind, net, memory, prior, batch, jax.random.fold_in(key, step), rate
        )
    return net
