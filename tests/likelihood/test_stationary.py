"""Covariance of damped networks at rest, against closed forms and Lyapunov solvers."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_rollout, planar_rate
from oscillib.likelihood import (
    covariance_distance,
    lagged_covariance,
    sample_lagged_covariance,
    stationary_covariance,
    stationary_start,
)


MATRIX = jnp.array([[-0.3, -2.0, 0.1], [2.0, -0.3, 0.0], [0.0, 0.5, -1.0]])
RATE = jnp.array([[0.2, 0.05, 0.0], [0.05, 0.1, 0.02], [0.0, 0.02, 0.3]])
UPPER = jnp.triu_indices(3)
FIELD = HopfNetwork()


@pytest.fixture(scope="module")
def stationary():
    return jax.jit(stationary_covariance)


def test_damped_oscillator(stationary):
    # Closed form: s^2 / 2|a| in each component, no correlation.
    matrix = FIELD.linear_matrix(HopfParams([-0.2], [2 * np.pi * 0.05]))
    out = stationary(matrix, planar_rate(jnp.array([0.02])))
    np.testing.assert_allclose(out.covariance, 0.001 * np.eye(2), rtol=0, atol=1e-15)
    assert bool(out.damped)


def test_three_states(stationary):
    # Lyapunov equation, solved by scipy and as a Kronecker sum.
    expected = [
        0.230707246203, 0.0130815085523, -0.0462480903454, 0.253876723682, 0.0418786008847,
        0.170939300442,
    ]  # fmt: skip
    covariance = stationary(MATRIX, RATE).covariance
    np.testing.assert_allclose(covariance[UPPER], expected, rtol=0, atol=1e-12)


def test_derivative():
    # Differentiated Lyapunov equation and central differences.
    expected = [
        -0.041022674705, 0.012525701352, -0.0033690826041, 0.083504675678, 0.026933978947,
        0.013466989473,
    ]  # fmt: skip
    total = lambda x: stationary_covariance(MATRIX.at[0, 1].set(x), RATE).covariance[UPPER]
    np.testing.assert_allclose(jax.jacrev(total)(jnp.asarray(-2.0)), expected, rtol=0, atol=1e-8)


def test_a_large_network_and_very_slow_damping(stationary):
    rng = np.random.default_rng(0)
    matrix = rng.normal(size=(40, 40))
    matrix -= (np.linalg.eigvals(matrix).real.max() + 1e-3) * np.eye(40)
    covariance = stationary(jnp.asarray(matrix), jnp.eye(40)).covariance
    expected = scipy.linalg.solve_continuous_lyapunov(matrix, -np.eye(40))
    np.testing.assert_allclose(covariance, expected, rtol=1e-9, atol=1e-9 * expected.max())
    out = stationary(jnp.array([[-1e-8, -6.0], [6.0, -1e-8]]), jnp.eye(2))
    np.testing.assert_allclose(out.covariance, 5e7 * np.eye(2), rtol=1e-6, atol=1e-2)


@pytest.mark.parametrize("growth", [0.0, 1e-6, 0.3, 200.0])
def test_undamped_is_flagged_and_never_a_number(stationary, growth):
    matrix = FIELD.linear_matrix(HopfParams([-0.5, growth], [6.0, 5.0]))
    out = stationary(matrix, planar_rate(jnp.array([0.1, 0.1])))
    assert not bool(out.damped)
    assert bool(jnp.all(jnp.isnan(out.covariance)))


def test_lagged_covariance_of_a_damped_oscillator():
    # Closed forms s^2/2|a| e^(a tau) cos(w tau), and the same with the sine.
    matrix = FIELD.linear_matrix(HopfParams([-0.2], [2 * np.pi * 0.05]))
    out = lagged_covariance(matrix, 0.001 * jnp.eye(2), jnp.array([3.0]))[0]
    np.testing.assert_allclose(out[0], [0.000322583385983, -0.000443997940311], rtol=0, atol=1e-15)


def test_single_precision():
    start = stationary_start(MATRIX.astype(jnp.float32), RATE.astype(jnp.float32), (3,))
    assert start.mean.dtype == start.covariance.dtype == jnp.float32
    expected = stationary_covariance(MATRIX, RATE).covariance
    np.testing.assert_allclose(start.covariance, expected, rtol=1e-4, atol=1e-5)


def test_sample_covariance_meets_the_model_and_skips_what_is_masked(step):
    params = NoisyParams(HopfParams([-0.5], [4.0], saturation=[0.0]), [0.4])
    ys = noisy_rollout(step, params, jnp.zeros((2, 1)), 0.2, 40_000, key=jax.random.key(0))
    values, mask = ys[:, :, 0], np.random.default_rng(0).random((40_001, 2)) > 0.3
    sample = sample_lagged_covariance(jnp.where(mask, values, jnp.nan), mask, [0, 2, 5])
    matrix = FIELD.linear_matrix(params.field)
    covariance = stationary_covariance(matrix, planar_rate(params.noise)).covariance
    model = lagged_covariance(matrix, covariance, jnp.array([0.0, 0.4, 1.0]))
    # About 4000 independent stretches of 1/|a|.
    np.testing.assert_allclose(sample, model, atol=4 * 0.16 / np.sqrt(4000))
    near = covariance_distance(model, sample, scale=jnp.full(2, 0.4))
    assert near < covariance_distance(1.3 * model, sample, scale=jnp.full(2, 0.4))


@pytest.mark.usefixtures("user_errors")
def test_messages():
    values = jnp.zeros((5, 1))
    with pytest.raises(ValueError, match="`lags` must be below the 5 samples"):
        sample_lagged_covariance(values, values == 0, [5])
    with pytest.raises(ValueError, match="`lags` must be not negative"):
        lagged_covariance(MATRIX, RATE, jnp.array([-1.0]))
    with pytest.raises(ValueError, match=r"`matrix` must have shape \(size, size\)"):
        stationary_start(MATRIX, RATE, (2, 1))
