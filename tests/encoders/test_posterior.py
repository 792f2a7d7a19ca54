"""Calibration of a proposal that was trained on simulations, and of what is refined from it."""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import optax
import pytest
import scipy.stats

from oscillib.encoders import AttentionPool, Encoder, GaussianHead, Prior, Recurrence, SampleMap
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.fitting import Status, refine
from oscillib.integrate import NoisyParams, noisy_rollout, noisy_strang
from oscillib.likelihood import filter_information, gaussian_filter, wide_start
from oscillib.losses import posterior_loss, simulate_pair
from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import Fixed, Free, Positive


SAMPLES, H, BATCH, DRAWS, NORMAL_90 = 80, 0.2, 32, 19, 1.6448536
STEP = noisy_strang(HopfNetwork().saturation_flow, HopfNetwork().linear_matrix)
# Nothing was read from sample 30 to 37.
MASK = ((jnp.arange(SAMPLES) < 30) | (jnp.arange(SAMPLES) > 37))[:, None]


class Unit(eqx.Module):
    """One noisy unit below or above its bifurcation."""

    growth: Any
    frequency: Any
    noise: Any
    reading_noise: Any
    readout: Any

    @property
    def dynamics(self):
        return NoisyParams(HopfParams(self.growth, self.frequency), self.noise)


def beliefs():
    middle = Unit(
        jnp.array([0.0]), jnp.array([3.0]), jnp.array([0.4]), jnp.array([0.1]),
        ReadoutParams(jnp.array([1.0])),
    )  # fmt: skip
    leaves = [Free(), Positive(), Positive(), Fixed(), Fixed(), Fixed()]
    rules = jax.tree.unflatten(jax.tree.structure(middle), leaves)
    sd = jax.tree.unflatten(jax.tree.structure(middle), [0.3, 0.1, 0.3, None, None, None])
    return Prior(middle, rules, sd=sd)


def simulate(params, times, key):
    start, path, reading = jax.random.split(key, 3)
    y = jax.random.normal(start, (2, 1))
    ys = noisy_rollout(STEP, params.dynamics, y, H / 2, 2 * (SAMPLES - 1), key=path)[::2]
    return ys[:, 0] + params.reading_noise[None] * jax.random.normal(reading, (SAMPLES, 1))


@pytest.fixture(scope="module")
def trained():
    with jax.numpy_dtype_promotion("standard"), jax.numpy_rank_promotion("allow"):
        prior = beliefs()
        keys = jax.random.split(jax.random.key(0), 6)
        net: Any = Encoder(
            SampleMap(1, 8, key=keys[0]),
            Recurrence(8, 16, key=keys[1]),
            AttentionPool(32, heads=4, key=keys[2]),
            GaussianHead(32, prior.size, key=keys[3]),
        )

        def pairs(key, count):
            many = jax.random.split(key, count)
            return jax.vmap(lambda k: simulate_pair(prior, simulate, None, MASK, key=k))(many)

        def loss(net, key):
            pair = pairs(key, BATCH)
            law = jax.vmap(lambda v, m: net(None, v, m, prior).law)(pair.values, pair.mask)
            return jnp.mean(jax.vmap(posterior_loss)(law, pair.free))

        steps = 3000
        optimiser = optax.chain(
            optax.clip_by_global_norm(5.0), optax.adam(optax.cosine_decay_schedule(5e-3, steps))
        )

        @jax.jit
        def update(net, memory, key):
            change, memory = optimiser.update(jax.grad(loss)(net, key), memory)
            return optax.apply_updates(net, change), memory

        memory = optimiser.init(net)
        for step in range(steps):
            net, memory = update(net, memory, jax.random.fold_in(keys[4], step))
        fresh = jax.jit(pairs, static_argnums=1)(keys[5], 500)
        law = jax.jit(jax.vmap(lambda v, m: net(None, v, m, prior).law))(fresh.values, fresh.mask)
        return prior, fresh, law


@pytest.mark.long
def test_ranks_of_the_truth_under_the_proposal_are_uniform(trained):
    # Simulation-based calibration, Talts et al. 2018 (from memory). 500 recordings; a sound
    # proposal fails one of three tests at 0.001 in 0.3 percent of trainings.
    _, fresh, law = trained
    normal = np.random.default_rng(0).normal(size=(500, DRAWS, 3))
    drawn = law.mean[:, None] + np.einsum("rij,rdj->rdi", law.factor, normal)
    rank = np.sum(drawn < np.asarray(fresh.free)[:, None], axis=1)
    for column, name in zip(rank.T, ("growth", "frequency", "noise"), strict=True):
        p = scipy.stats.chisquare(np.bincount(column // 2, minlength=10)).pvalue
        narrower = np.std(law.mean[:, 0] - fresh.free[:, 0]) / 0.3
        print(f"{name}: p = {p:.3f}; error of growth is {narrower:.2f} of the prior's width")
        assert p > 0.001
    # Uniform ranks cost nothing if the proposal is the prior.
    assert np.std(law.mean[:, 0] - fresh.free[:, 0]) < 0.85 * 0.3


@pytest.mark.long
def test_intervals_cover_after_refinement(trained):
    # 200 recordings, 600 intervals, correlated in threes: a standard error of about 1.5 percent.
    prior, fresh, law = trained
    precision = jnp.linalg.inv(prior.law.covariance)
    given: dict[str, Any] = {"h": H, "start": wide_start((2, 1), 1.0), "method": "cubature"}

    def one(start, values, mask):
        def negative(params):
            out = gaussian_filter(STEP, linear_readout, params, values, mask, **given)
            return -out.log_likelihood - prior.law.log_prob(prior.free(params))

        def information(params):
            return precision + filter_information(
                STEP, linear_readout, params, prior.constraints, values, mask, **given
            )

        out = refine(
            negative, prior.params(start), prior.constraints,
            curvature=information, max_steps=30, tolerance=1e-2,
        )  # fmt: skip
        return prior.free(out.params), out.curvature, out.status

    with jax.numpy_dtype_promotion("standard"), jax.numpy_rank_promotion("allow"):
        inputs = (law.mean[:200], fresh.values[:200], fresh.mask[:200])
        fit = jax.jit(lambda x: jax.lax.map(lambda y: one(*y), x, batch_size=20))
        free, curvature, status = jax.device_get(fit(inputs))
    assert np.mean(status == Status.CONVERGED) > 0.98
    error = np.sqrt([np.diag(np.linalg.inv(c)) for c in curvature])
    covered = np.abs(free - fresh.free[:200]) < NORMAL_90 * error
    print("covered", covered.mean(axis=0))
    assert 0.85 <= covered.mean() <= 0.95
