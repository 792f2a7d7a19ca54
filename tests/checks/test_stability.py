import jax.numpy as jnp
import pytest

from oscillib.checks import check_stability, check_step_bias
from oscillib.fields import HopfNetwork, HopfParams, LinearNetwork, LinearParams
from oscillib.integrate import (
    NoisyParams,
    euler_maruyama,
    heun,
    noisy_strang,
    rk4,
    split_noise,
)


FIELD = HopfNetwork()
PARAMS = HopfParams([-0.2], [6.0])
NOISY = NoisyParams(PARAMS, noise=[0.1])
TURNING = LinearParams.turning(growth=[0.0], frequency=[6.0])
LINEAR = LinearNetwork()
REST = jnp.zeros((2, 1))


def test_exact_step_has_no_bias():
    exact = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)
    check_step_bias(exact, FIELD, NOISY, 0.1, limit=1e-9, variance_limit=1e-9)


def test_runge_kutta_within_its_truncation_error():
    # Growth of rk4 on a turning unit: -w^6 h^5 / 144; of its frequency: -w^5 h^4 / 120.
    step = rk4(FIELD)
    check_step_bias(step, FIELD, PARAMS, 0.05, limit=6**5 * 0.05**4 / 100)
    with pytest.raises(AssertionError, match="of the step"):
        check_step_bias(step, FIELD, PARAMS, 0.05, limit=6**5 * 0.05**4 / 200)


def test_euler_maruyama_within_its_stated_bias():
    h = 0.002  # adds w^2 h / 2 = 0.036 to the growth
    step = euler_maruyama(FIELD)
    check_step_bias(step, FIELD, NOISY, h, limit=0.04)
    with pytest.raises(AssertionError, match="explicit Euler step adds"):
        check_step_bias(step, FIELD, NOISY, h, limit=0.03)


def test_split_noise_within_its_variance_error():
    check_step_bias(split_noise(rk4(FIELD)), FIELD, NOISY, 0.05, limit=1e-3, variance_limit=0.05)
    with pytest.raises(TypeError, match="`variance_limit` needs a noisy step"):
        check_step_bias(rk4(FIELD), FIELD, PARAMS, 0.05, limit=1e-3, variance_limit=0.05)


def test_fixed_point_off_the_origin():
    def shifted(t, y, params):
        return jnp.stack([y[1] - 1, -params * (y[0] - 2)])

    point = jnp.array([2.0, 1.0])
    check_step_bias(rk4(shifted), shifted, jnp.asarray(4.0), 0.05, limit=1e-5, point=point)
    with pytest.raises(AssertionError, match="fixed point of the step"):
        check_stability(rk4(shifted), jnp.asarray(4.0), point + 0.1, 1.4)


def test_limit_of_runge_kutta_on_a_turning_unit():
    # |h w| <= 2 sqrt(2): Hairer & Wanner, Solving ODEs II (from memory).
    step = rk4(LINEAR)
    check_stability(step, TURNING, REST, 2.82 / 6)
    with pytest.raises(AssertionError, match=r"at step size 0\.4767"):
        check_stability(step, TURNING, REST, 2.86 / 6)


def test_limit_of_heun_on_damping():
    # Real interval of stability of order 2 with two stages: h |a| <= 2 (from memory).
    damped, step = LinearParams.relaxing([5.0]), heun(LINEAR)
    check_stability(step, damped, jnp.zeros((1, 1)), 1.99 / 5)
    with pytest.raises(AssertionError, match="stability of the step"):
        check_stability(step, damped, jnp.zeros((1, 1)), 2.01 / 5)


def test_splitting_is_stable_at_any_step():
    exact = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)
    check_stability(exact, NOISY, REST, 50.0)


def test_growth_without_an_eigenvalue_outside_is_seen():
    # A shear matrix: eigenvalues 1, powers that grow like n.
    step = lambda params, h: lambda t, y: jnp.stack([y[0] + h * params * y[1], y[1]])
    with pytest.raises(AssertionError, match="after 256 steps"):
        check_stability(step, jnp.asarray(1.0), jnp.zeros(2), 0.5, count=1)


def test_misuse(user_errors):
    del user_errors
    with pytest.raises(ValueError, match="`count` must be at least 1"):
        check_stability(rk4(LINEAR), TURNING, REST, 0.1, count=0)
    with pytest.raises(ValueError, match="`point` must hold two entries"):
        check_step_bias(rk4(LINEAR), LINEAR, TURNING, 0.1, limit=0.1, point=jnp.zeros((1, 1)))
