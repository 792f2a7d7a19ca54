"""Simulation: draws by window and step, laws of motion against closed forms, diffrax's solvers."""

import diffrax
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import (
    NoisyParams,
    diffrax_terms,
    euler_maruyama,
    noisy_rollout,
    noisy_strang,
)


FIELD = HopfNetwork()
STRANG = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)


def unit(a, w, s, *, b=1.0):
    return NoisyParams(HopfParams([a], [w], saturation=[b]), noise=[s])


@pytest.fixture(scope="module")
def path():
    def one(params, y0, key, first):
        return noisy_rollout(STRANG, params, y0, 0.1, 12, key=key, first=first)

    return jax.jit(one)


def test_windows_and_segments_see_the_noise_of_one_long_rollout(path):
    params, key, y0 = unit(0.2, 6.0, 0.3), jax.random.key(3), jnp.array([[0.1], [0.0]])
    whole = noisy_rollout(STRANG, params, y0, 0.1, 24, key=key, segment=7)
    first = path(params, y0, key, 0)
    second = path(params, first[-1], key, 12)
    np.testing.assert_allclose(first, whole[:13], rtol=0, atol=1e-15)
    np.testing.assert_allclose(second, whole[12:], rtol=0, atol=1e-15)
    # The same two windows as one batch.
    starts = jnp.stack([y0, whole[12]])
    batch = jax.vmap(path, (None, 0, None, 0))(params, starts, key, jnp.array([0, 12]))
    np.testing.assert_allclose(batch[1], whole[12:], rtol=0, atol=1e-14)


def test_irregular_intervals_of_one_length_equal_a_regular_grid(path):
    params, key, y0 = unit(0.2, 6.0, 0.3), jax.random.key(3), jnp.array([[0.1], [0.0]])
    irregular = noisy_rollout(STRANG, params, y0, jnp.full(12, 0.1), key=key)
    np.testing.assert_allclose(irregular, path(params, y0, key, 0), rtol=0, atol=1e-14)


@pytest.mark.parametrize("s", [0.3, 0.0])
def test_gradient_by_the_noise_level(path, s):
    y0, key = jnp.array([[0.1], [0.0]]), jax.random.key(1)
    total = lambda s: jnp.sum(path(unit(0.2, 6.0, s), y0, key, 0)[-1])
    gradient = jax.grad(lambda s: total(s[None][0]))(jnp.asarray(s))
    assert bool(jnp.isfinite(gradient))
    if s:
        numeric = (total(s + 1e-6) - total(s - 1e-6)) / 2e-6
        np.testing.assert_allclose(gradient, numeric, rtol=1e-6)


def test_single_precision():
    cast = lambda tree: jax.tree.map(lambda x: x.astype(jnp.float32), tree)
    ys = noisy_rollout(
        STRANG, cast(unit(0.2, 6.0, 0.3)), jnp.zeros((2, 1), jnp.float32), 0.1, 3,
        key=jax.random.key(0),
    )  # fmt: skip
    assert ys.dtype == jnp.float32


@pytest.mark.usefixtures("user_errors")
def test_messages():
    params, key = unit(0.2, 6.0, 0.3), jax.random.key(0)
    with pytest.raises(ValueError, match="`steps` must be given"):
        noisy_rollout(STRANG, params, jnp.zeros((2, 1)), 0.1, key=key)
    wide = noisy_strang(
        FIELD.saturation_flow, FIELD.linear_matrix, rate=lambda noise: jnp.eye(2) * noise**2
    )
    params = NoisyParams(params.field, 0.1)
    assert noisy_rollout(wide, params, jnp.zeros((2, 1)), 0.1, 2, key=key).shape == (3, 2, 1)


def ensemble(step, params, h, *, steps, paths, key):
    """Final states of many paths, complex."""

    def one(key):
        return noisy_rollout(step, params, jnp.zeros((2, 1)), h, steps, key=key)[-1, :, 0]

    ends = jax.jit(jax.vmap(one))(jax.random.split(key, paths))
    return np.asarray(jax.lax.complex(ends[:, 0], ends[:, 1]))


def test_stationary_amplitude_at_a_step_where_euler_maruyama_is_wrong():
    # Fokker-Planck closed form for a=-0.5, b=1, s=0.5 (Risken 1989; from memory).
    exact2, exact4 = 0.2625676380805, 0.1187161809598
    params, h, paths = unit(-0.5, 2 * np.pi, 0.5), 0.05, 20_000
    r2 = np.abs(ensemble(STRANG, params, h, steps=160, paths=paths, key=jax.random.key(0))) ** 2
    error = np.sqrt((exact4 - exact2**2) / paths)
    assert abs(r2.mean() - exact2) < 4 * error
    wrong = np.abs(
        ensemble(euler_maruyama(FIELD), params, h, steps=160, paths=paths, key=jax.random.key(0))
    )
    # It adds w^2 h / 2 = 1 to a growth rate of -0.5.
    assert (wrong**2).mean() > 2 * exact2


def test_stationary_amplitude_above_onset():
    # Fokker-Planck closed form for a=0.5, b=1, s=0.5 (Risken 1989; from memory). Turning does not
    # matter. Each path is averaged over 14 time units, some twenty times what r^2 remembers.
    def one(key):
        params = unit(0.5, 2.0, 0.5)
        ys = noisy_rollout(STRANG, params, jnp.full((2, 1), 0.5), 0.05, 360, key=key)
        return jnp.mean(jnp.sum(ys[80:] ** 2, axis=(1, 2)))

    r2 = np.asarray(jax.jit(jax.vmap(one))(jax.random.split(jax.random.key(0), 6000)))
    assert 4 * np.std(r2) / np.sqrt(6000) < 0.006
    assert abs(r2.mean() - 0.64379999) < 0.006


@pytest.mark.long
@pytest.mark.parametrize(
    ("a", "s", "exact2", "exact4"),
    [
        # Fokker-Planck closed forms, b=1 (Risken 1989, laser model; from memory).
        (-0.5, 0.5, 0.2625676380805, 0.1187161809598),
        (0.0, 1.0, 0.7978845608029, 1.0),
        (0.5, 0.5, 0.6437999854696, 0.5718999927348),
        (1.0, 0.3, 1.000462882303, 1.090462882303),
    ],
)
def test_radial_density_against_fokker_planck(a, s, exact2, exact4):
    """p(r) ~ r exp((a r^2 - r^4 / 2) / s^2): u = r^2 is a normal N(a, s^2) cut at 0."""
    import scipy.stats

    params, h, paths = unit(a, 2 * np.pi, s), 0.05, 40_000
    z = ensemble(STRANG, params, h, steps=400, paths=paths, key=jax.random.key(7))
    u = np.abs(z) ** 2
    # The splitting's own bias, of order h^2, is below a third of these sampling errors.
    assert abs(u.mean() - exact2) < 4 * np.sqrt((exact4 - exact2**2) / paths)
    law = scipy.stats.truncnorm(-a / s, np.inf, loc=a, scale=s)
    assert scipy.stats.kstest(u, law.cdf).pvalue > 1e-3
    wrong = ensemble(
        euler_maruyama(FIELD), params, h, steps=400, paths=paths, key=jax.random.key(7)
    )
    assert scipy.stats.kstest(np.abs(wrong) ** 2, law.cdf).pvalue < 1e-12


@pytest.mark.long
def test_decay_of_the_phase_against_fokker_planck():
    # Slowest eigenvalue of the Fokker-Planck operator, a=0.5, b=1, s=0.5 (collocation).
    rate = -0.3302459487
    params, h, lag = unit(0.5, 2 * np.pi, 0.5), 0.05, 40

    def one(key):
        ys = noisy_rollout(STRANG, params, jnp.zeros((2, 1)), h, 200 + 2 * lag, key=key)
        ends = ys[jnp.array([200, 200 + lag, 200 + 2 * lag]), :, 0]
        return jax.lax.complex(ends[:, 0], ends[:, 1])

    z = np.asarray(jax.jit(jax.vmap(one))(jax.random.split(jax.random.key(5), 200_000)))
    once, twice = np.mean(z[:, 1] * z[:, 0].conj()), np.mean(z[:, 2] * z[:, 0].conj())
    # The ratio of two lags leaves the slowest mode alone.
    slope = np.log(twice / once * np.exp(-2j * np.pi * h * lag)) / (h * lag)
    assert abs(slope.real - rate) < 0.01
    assert abs(slope.imag) < 0.01


@pytest.mark.long
def test_diffrax_solver_meets_the_same_law():
    # Variance of a damped linear unit from rest: s^2 (1 - e^(2at)) / 2|a|.
    a, s, t = -0.5, 0.4, 1.0
    params = unit(a, 3.0, s, b=0.0)

    def one(key):
        path = diffrax.VirtualBrownianTree(0.0, t, 1e-3, (2,), key)
        solution = diffrax.diffeqsolve(
            diffrax_terms(FIELD, path), diffrax.Heun(), 0.0, t, 0.02, jnp.zeros((2, 1)),
            args=params,
        )  # fmt: skip
        return jnp.asarray(solution.ys)[0, :, 0]

    ends = jax.jit(jax.vmap(one))(jax.random.split(jax.random.key(2), 4000))
    expected = s**2 * (1 - np.exp(2 * a * t)) / (-2 * a)
    error = expected * np.sqrt(1 / 4000)
    assert abs(float(jnp.mean(ends**2)) - expected) < 4 * error
