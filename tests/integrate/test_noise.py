"""The exact Gaussian transition of a linear part, factors of covariances, keys."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import (
    NoisyParams,
    covariance_factor,
    linear_transition,
    noise_key,
    planar_rate,
)


MATRIX = jnp.array([[-0.3, -2.0, 0.1], [2.0, -0.3, 0.0], [0.0, 0.5, -1.0]])
RATE = jnp.array([[0.2, 0.05, 0.0], [0.05, 0.1, 0.02], [0.0, 0.02, 0.3]])
UPPER = jnp.triu_indices(3)


@pytest.fixture(scope="module")
def transition():
    return jax.jit(linear_transition)


def unit(a, w):
    return HopfNetwork().linear_matrix(HopfParams([a], [w]))


def test_covariance_of_a_three_state_system(transition):
    # Entrywise quadrature of the convolution integral (computed for this test).
    expected = [
        0.0537032031396, 0.0227032931762, 0.000298966774614, 0.0529974057122, 0.0105372032103,
        0.0841165985956,
    ]  # fmt: skip
    propagator, covariance = transition(MATRIX, RATE, 0.4)
    np.testing.assert_allclose(covariance[UPPER], expected, rtol=0, atol=1e-12)
    np.testing.assert_allclose(
        propagator, scipy.linalg.expm(0.4 * np.asarray(MATRIX)), rtol=0, atol=1e-14
    )


def test_noise_variance_of_a_damped_oscillator(transition):
    # Closed form: s^2 (1 - e^(2ah)) / 2|a|.
    a, w, s, h = -0.2, 2 * np.pi * 0.05, 0.02, 2.0
    _, covariance = transition(unit(a, w), planar_rate(jnp.array([s])), h)
    np.testing.assert_allclose(covariance, 0.000550671035883 * np.eye(2), rtol=0, atol=1e-15)


@pytest.mark.parametrize("a", [-30.0, -1e-9, 0.0, 1e-9, 2.0])
@pytest.mark.parametrize("h", [0.0, 1e-8, 0.3, 40.0])
def test_accurate_for_any_sign_of_growth(transition, a, h):
    # Closed form: s^2 (e^(2ah) - 1) / 2a, which is s^2 h without growth.
    _, covariance = transition(unit(a, 6.0), planar_rate(jnp.array([0.5])), h)
    expected = 0.25 * (h if a == 0 else np.expm1(2 * a * h) / (2 * a))
    np.testing.assert_allclose(jnp.diag(covariance), expected, rtol=1e-12)


def test_slow_and_fast_damping_together_over_a_long_gap(transition):
    # The block exponential holds e^(+100 h) here, and loses every digit of the slow direction.
    matrix, rate = jnp.diag(jnp.array([-100.0, -0.01])), jnp.eye(2)
    _, covariance = transition(matrix, rate, 5.0)
    expected = [1 / 200, (1 - np.exp(-0.1)) / 0.02]
    np.testing.assert_allclose(jnp.diag(covariance), expected, rtol=1e-12)


def test_beyond_its_range_the_result_is_nan_not_wrong(transition):
    _, covariance = transition(1e9 * MATRIX, RATE, 1.0)
    assert bool(jnp.all(jnp.isnan(covariance)))


def test_two_short_transitions_make_a_long_one(transition):
    first, early = transition(MATRIX, RATE, 0.7)
    second, late = transition(MATRIX, RATE, 1.6)
    whole, covariance = transition(MATRIX, RATE, 2.3)
    np.testing.assert_allclose(second @ first, whole, rtol=0, atol=1e-14)
    np.testing.assert_allclose(second @ early @ second.T + late, covariance, rtol=0, atol=1e-14)


@pytest.mark.parametrize("noise", [0.3, 0.0])
def test_gradient_against_central_differences(noise):
    def total(x):
        out = linear_transition(x[0] * MATRIX, x[1] ** 2 * RATE, x[2])
        return jnp.sum(out[0] * RATE) + jnp.sum(out[1] * MATRIX)

    x = jnp.array([1.0, noise, 0.8])
    gradient, step = jax.grad(total)(x), 1e-6
    numeric = [(total(x + step * e) - total(x - step * e)) / (2 * step) for e in jnp.eye(3)]
    np.testing.assert_allclose(gradient, numeric, rtol=1e-7, atol=1e-9)


def test_single_precision():
    _, covariance = linear_transition(
        MATRIX.astype(jnp.float32), RATE.astype(jnp.float32), jnp.float32(0.4)
    )
    assert covariance.dtype == jnp.float32
    np.testing.assert_allclose(covariance, linear_transition(MATRIX, RATE, 0.4)[1], rtol=1e-5)


@pytest.mark.usefixtures("user_errors")
def test_messages():
    with pytest.raises(ValueError, match=r"`rate` must have shape \(size, size\)"):
        linear_transition(MATRIX, RATE[:2], 1.0)
    with pytest.raises(TypeError, match="`rate` is float32 but `matrix` is float64"):
        linear_transition(MATRIX, RATE.astype(jnp.float32), 1.0)


def test_factor_equals_cholesky_where_that_exists():
    np.testing.assert_allclose(
        covariance_factor(RATE), jnp.linalg.cholesky(RATE), rtol=0, atol=1e-15
    )


def test_factor_of_a_singular_covariance():
    tall = jax.random.normal(jax.random.key(0), (5, 2))
    covariance = tall @ tall.T
    factor = covariance_factor(covariance)
    np.testing.assert_allclose(factor @ factor.T, covariance, rtol=0, atol=1e-14)
    derivative = jax.grad(lambda c: jnp.sum(covariance_factor(c) ** 2))(covariance)
    assert bool(jnp.all(jnp.isfinite(derivative)))


def test_factor_at_zero_noise_has_a_finite_derivative():
    total = lambda s: jnp.sum(covariance_factor(planar_rate(s)))
    np.testing.assert_array_equal(jax.grad(total)(jnp.zeros(2)), [0, 0])
    np.testing.assert_allclose(jax.grad(total)(jnp.ones(2)), [2, 2])


@pytest.mark.parametrize("bad", [jnp.diag(jnp.array([1.0, -1.0])), jnp.array([[jnp.nan]])])
def test_factor_of_no_covariance_is_nan(bad):
    assert bool(jnp.any(jnp.isnan(covariance_factor(bad))))


def test_keys_differ_by_recording_window_and_step():
    keys = [
        noise_key(jax.random.key(r), k, window=w) for r in (0, 1) for w in (0, 1) for k in (0, 1)
    ]
    assert len({tuple(np.asarray(jax.random.key_data(k))) for k in keys}) == 8


@pytest.fixture(scope="module")
def inward():
    """Rate of the radius, at radii of one Hopf unit."""
    along = lambda r, p: HopfNetwork()(0.0, jnp.stack([r, 0 * r])[:, None], p)[0, 0]
    return jax.jit(lambda p, radii: jax.vmap(along, (0, None))(radii, p))


# Fokker-Planck closed form, b = 1 (e.g. Risken 1989, laser model; from memory): r^2 is a normal
# N(a, s^2) cut at 0, and <r^4> = a <r^2> + s^2.
@pytest.mark.parametrize(
    "a, s, square, fourth",
    [
        (-0.5, 0.5, 0.2625676380805, 0.1187161809598),
        (0.0, 0.1, 0.07978845608029, 0.01),
        (0.0, 1.0, 0.7978845608029, 1.0),
        (0.1, 0.1, 0.1287599970939, 0.02287599970939),
        (0.5, 0.5, 0.6437999854696, 0.5718999927348),
        (1.0, 0.3, 1.000462882303, 1.090462882303),
    ],
)
def test_stationary_radius_of_field_and_noise_together(inward, a, s, square, fourth):
    # The density is r e^(integral of 2 F / Q), F the field along a radius, Q the rate of the noise.
    # It pins the convention: a noise of s per root of time in each component.
    nodes, weights = np.polynomial.legendre.leggauss(120)
    top = np.sqrt(max(a, 0) + 9 * s)
    radius = top * (nodes + 1) / 2
    inside = radius[:, None] * (nodes + 1) / 2
    rate = planar_rate(jnp.array([s]))[0, 0]
    drift = np.asarray(inward(HopfParams([a], [5.0]), inside.ravel())).reshape(inside.shape)
    exponent = 2 * radius / 2 * (drift @ weights) / rate
    density = weights * radius * np.exp(exponent - np.max(exponent))
    moment = lambda power: np.sum(density * radius**power) / np.sum(density)
    np.testing.assert_allclose([moment(2), moment(4)], [square, fourth], rtol=0, atol=1e-12)


def test_constraints_cover_field_and_noise():
    params = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1])
    assert jax.tree.structure(params.constraints()) == jax.tree.structure(params)
