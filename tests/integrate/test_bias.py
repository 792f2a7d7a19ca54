"""What a step makes of a linear noisy oscillator, against closed forms."""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.optimize

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import (
    NoisyParams,
    euler_maruyama,
    heun,
    noisy_strang,
    rk4,
    rollout,
    split_noise,
    step_bias,
    without_noise,
)


FIELD = HopfNetwork()
W = 2 * np.pi * 0.05


def unit(a, w, s):
    return NoisyParams(HopfParams([a], [w]), noise=[s])


def test_euler_maruyama_on_a_damped_unit():
    out = step_bias(euler_maruyama(FIELD), unit(-0.2, W, 0.02), 0.1)
    # Closed form s^2 h / (1 - |1 + h(a + iw)|^2), instead of s^2 / 2|a| = 0.001.
    # Its denominator cancels to 4e-3 of its terms: rounding is some hundred times the value's.
    np.testing.assert_allclose(out.variance, 0.0010359194835712863, rtol=0, atol=1e-14)
    factor = 1 + 0.1 * (-0.2 + 1j * W)
    np.testing.assert_allclose(out.growth, np.log(abs(factor)) / 0.1, rtol=0, atol=1e-14)
    np.testing.assert_allclose(out.frequency, np.angle(factor) / 0.1, rtol=0, atol=1e-14)


def test_euler_maruyama_adds_half_the_squared_frequency_times_the_step():
    out = step_bias(euler_maruyama(FIELD), unit(-0.2, 6.0, 0.1), 0.01)
    assert abs(out.growth - (-0.2 + 6.0**2 * 0.01 / 2)) < 0.01
    assert np.isinf(step_bias(euler_maruyama(FIELD), unit(-0.2, 6.0, 0.1), 0.05).variance)


def test_explicit_euler_inflates_the_limit_cycle():
    # Radius^2 solves |1 + h(a + iw - r^2)| = 1 (derived), truth 0.2.
    quiet = without_noise(euler_maruyama(FIELD))
    ys = rollout(quiet, unit(0.2, 2.0, 0.0), jnp.array([[0.4], [0.0]]), 0.05, 4000)
    np.testing.assert_allclose(jnp.sum(ys[-1] ** 2), 0.30025125787, rtol=0, atol=1e-9)


@pytest.mark.parametrize("h", [0.05, 0.4])
def test_splitting_has_no_bias(h):
    out = step_bias(
        noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix), unit(-0.2, W, 0.02), h
    )
    np.testing.assert_allclose([*out], [-0.2, W, 0.001], rtol=1e-12)


def test_steps_without_noise():
    # Closed forms: |R|^2 = 1 + x^4 / 4 for Heun; RK4 follows its stability function.
    params = HopfParams([0.0], [1.0])
    out = step_bias(heun(FIELD), params, 0.1)
    np.testing.assert_allclose(np.exp(2 * 0.1 * out.growth), 1.000025, rtol=0, atol=1e-14)
    params = HopfParams([-1.0], [0.0])
    assert step_bias(rk4(FIELD), params, 0.1).variance == 0
    polynomial = 1 - 0.1 + 0.1**2 / 2 - 0.1**3 / 6 + 0.1**4 / 24
    np.testing.assert_allclose(step_bias(rk4(FIELD), params, 0.1).growth, np.log(polynomial) / 0.1)


def test_amplitude_factors_of_a_rotation():
    # |R|^2 of a turn of 0.1 rad: 1 + h^2 by explicit Euler, 1 by an exact step; closed form.
    def square(step, params):
        return np.exp(2 * 0.1 * jax.jit(lambda p: step_bias(step, p, 0.1).growth)(params))

    assert abs(square(without_noise(euler_maruyama(FIELD)), unit(0.0, 1.0, 0.0)) - 1.01) < 1e-14
    exact = lambda p, h: lambda t, y: FIELD.linear_flow(p, h)(y)
    assert abs(square(exact, HopfParams([0.0], [1.0])) - 1) < 1e-14


@pytest.mark.parametrize(
    "growth, frequency, limit", [(-1.0, 0.0, 2.785293563405), (0.0, 1.0, 2.828427124746)]
)
def test_stability_limits_of_rk4(growth, frequency, limit):
    # On the real and on the imaginary axis, 2 sqrt(2); textbook.
    params = HopfParams([growth], [frequency])
    gain = jax.jit(lambda h: step_bias(rk4(FIELD), params, h).growth)
    found: Any = scipy.optimize.brentq(lambda h: gain(jnp.asarray(h)), 2.6, 3.0, xtol=1e-13)
    assert abs(found - limit) < 1e-10


def test_noise_in_the_middle_of_a_runge_kutta_step():
    out = step_bias(split_noise(rk4(FIELD)), unit(-0.2, 6.0, 0.1), 0.02)
    np.testing.assert_allclose([*out], [-0.2, 6.0, 0.025], rtol=2e-4)


def test_differentiable():
    growth = lambda w: step_bias(euler_maruyama(FIELD), unit(-0.2, w, 0.1), 0.05).growth
    numeric = (growth(6.0 + 1e-6) - growth(6.0 - 1e-6)) / 2e-6
    gradient = jax.grad(lambda w: growth(w[None][0]))(jnp.asarray(6.0))
    np.testing.assert_allclose(gradient, numeric, rtol=1e-6)


@pytest.mark.usefixtures("user_errors")
def test_message():
    with pytest.raises(ValueError, match="`point` must hold two entries"):
        step_bias(rk4(FIELD), HopfParams([0.0], [1.0]), 0.1, point=jnp.zeros((2, 2)))
