import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.flatten_util import ravel_pytree

from oscillib.fields import HopfNetwork, HopfParams, LinearNetwork, LinearParams
from oscillib.integrate import (
    NoisyParams,
    linear_transition,
    noisy_strang,
    rk4,
    rollout,
    without_noise,
)


RNG = np.random.default_rng(0)
K = RNG.normal(size=(3, 3))
PARAMS = LinearParams(RNG.normal(size=(3, 2, 2)) - 2 * np.eye(2), K, gain=0.5)
Y = jnp.asarray(RNG.normal(size=(2, 3)))


@pytest.mark.parametrize("kind", ["diffusive", "additive"])
def test_matrix_is_the_jacobian(kind):
    field = LinearNetwork(kind=kind)
    jacobian = jax.jit(jax.jacfwd(lambda y: field(0.0, y, PARAMS)))(Y).reshape(6, 6)
    matrix = jax.jit(field.linear_matrix)(PARAMS)
    np.testing.assert_allclose(matrix, jacobian, rtol=1e-13, atol=1e-14)


@pytest.mark.parametrize("kind", ["diffusive", "additive"])
def test_turning_nodes_are_hopf_units_without_saturation(kind):
    growth, frequency = [-0.1, -0.2, 0.1], [3.0, 4.0, 5.0]
    linear = LinearParams.turning(growth, frequency, K, gain=0.5)
    hopf = HopfParams(growth, frequency, saturation=np.zeros(3), coupling=K, gain=0.5)
    ours, theirs = LinearNetwork(kind=kind), HopfNetwork(kind=kind)
    np.testing.assert_allclose(ours(0.0, Y, linear), theirs(0.0, Y, hopf), rtol=1e-13)
    np.testing.assert_allclose(
        ours.linear_matrix(linear), theirs.linear_matrix(hopf), rtol=1e-13, atol=1e-14
    )


def test_flow_solves_the_field():
    field, h = LinearNetwork(), jnp.asarray(0.5)
    end = jax.jit(lambda y: rollout(rk4(field), PARAMS, y, h / 200, 200)[-1])(Y)
    np.testing.assert_allclose(field.linear_flow(PARAMS, h)(Y), end, rtol=1e-8)
    np.testing.assert_array_equal(field.saturation_flow(PARAMS, h)(Y), Y)


def test_noisy_step_is_the_exact_transition():
    field, h = LinearNetwork(), jnp.asarray(0.7)
    noise = jnp.asarray(RNG.uniform(0.5, 1, size=(2, 3)))
    step = noisy_strang(field.saturation_flow, field.linear_matrix, rate=field.noise_rate)
    advance = step(NoisyParams(PARAMS, noise), h)
    rate = np.diag(np.asarray(ravel_pytree(noise)[0]) ** 2)
    propagator, covariance = linear_transition(field.linear_matrix(PARAMS), jnp.asarray(rate), h)
    np.testing.assert_allclose(advance.covariance, covariance, rtol=1e-12)
    quiet = without_noise(step)(NoisyParams(PARAMS, noise), h)
    np.testing.assert_allclose(quiet(0.0, Y).ravel(), propagator @ Y.ravel(), rtol=1e-12)


def test_variance_of_relaxing_nodes():
    # s^2 / (2 rate) in the long run; Uhlenbeck & Ornstein 1930.
    field = LinearNetwork()
    step = noisy_strang(field.saturation_flow, field.linear_matrix, rate=field.noise_rate)
    params = NoisyParams(LinearParams.relaxing([0.5, 2.0]), jnp.array([[0.3, 0.4]]))
    covariance = step(params, jnp.asarray(200.0)).covariance
    np.testing.assert_allclose(covariance, np.diag([0.09, 0.04]), rtol=1e-12, atol=1e-15)


def test_stationary_variance_of_a_damped_rhythm():
    # s^2 / (2 |a|) in each component, no cross-covariance: a = -0.2, w = 2 pi 0.05, s = 0.02;
    # closed form.
    field = LinearNetwork()
    params = LinearParams.turning([-0.2], [2 * np.pi * 0.05])
    _, covariance = linear_transition(
        field.linear_matrix(params), field.noise_rate(jnp.full((2, 1), 0.02)), 400.0
    )
    np.testing.assert_allclose(covariance, 0.001 * np.eye(2), rtol=0, atol=1e-15)
