from functools import partial

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import (
    fisher_gaussian,
    fisher_simulated,
    observed_information,
    outer_product_information,
)
from oscillib.parameters import Free, Positive


CONSTRAINTS = {"decay": Positive(), "size": Positive(), "spread": Positive()}
TIMES = jnp.linspace(0.0, 2.0, 12)


def start(dtype=jnp.float64):
    return {k: jnp.asarray(v, dtype) for k, v in zip(CONSTRAINTS, (0.8, 3.0, 0.4), strict=True)}


def mean(params):
    return params["size"] * jnp.exp(-params["decay"] * TIMES)


def loss(params, y):
    z = (y - mean(params)) / params["spread"]
    return jnp.sum(z**2) / 2 + y.size * jnp.log(params["spread"])


def simulate(key, params):
    return mean(params) + params["spread"] * jax.random.normal(key, TIMES.shape)


@pytest.fixture(scope="module")
def expected():
    """Expected information in closed form, on the log scale."""
    t, (decay, size, spread) = np.asarray(TIMES), (0.8, 3.0, 0.4)
    value = size * np.exp(-decay * t)
    jacobian = np.stack([-decay * t * value, value, 0 * t], axis=1)
    matrix = jacobian.T @ jacobian / spread**2
    matrix[2, 2] = 2 * len(t)
    return matrix


@pytest.mark.parametrize("shape", ["()", "(observation,)", "(observation, observation)"])
def test_gaussian(expected, shape):
    full = {
        "()": lambda v: v,
        "(observation,)": lambda v: v * jnp.ones(12),
        "(observation, observation)": lambda v: v * jnp.eye(12),
    }[shape]
    covariance = lambda p: full(p["spread"] ** 2)
    out = jax.jit(lambda p: fisher_gaussian(mean, p, CONSTRAINTS, covariance))(start())
    np.testing.assert_allclose(out, expected, rtol=1e-10, atol=1e-10)
    # A known covariance says nothing about the spread.
    known = jax.jit(lambda p: fisher_gaussian(mean, p, CONSTRAINTS, full(jnp.asarray(0.16))))
    expected = expected * np.array([[1, 1, 0], [1, 1, 0], [0, 0, 0]])
    np.testing.assert_allclose(known(start()), expected, rtol=1e-10, atol=1e-10)


def test_correlated_errors():
    root = np.tril(0.3 * np.random.default_rng(0).normal(size=(12, 12))) + np.eye(12)
    v = root @ root.T
    out = jax.jit(
        lambda p: fisher_gaussian(mean, p, CONSTRAINTS, lambda p: p["spread"] * jnp.asarray(v))
    )(start())
    t = np.asarray(TIMES)
    value = 3.0 * np.exp(-0.8 * t)
    jacobian = np.stack([-0.8 * t * value, value, 0 * t], axis=1)
    expected = jacobian.T @ np.linalg.solve(0.4 * v, jacobian)
    expected[2, 2] = 12 / 2
    np.testing.assert_allclose(out, expected, rtol=1e-9, atol=1e-9)


def test_simulated_and_outer_product(expected):
    estimate = jax.jit(
        lambda key: fisher_simulated(loss, simulate, start(), CONSTRAINTS, key=key, draws=4000)
    )(jax.random.key(0))
    scale = np.sqrt(np.diag(expected))
    error = np.abs(np.asarray(estimate) - expected) / np.outer(scale, scale)
    # Relative error sqrt(2 / 4000) = 0.022; four of them.
    assert error.max() < 0.09
    ys = jax.vmap(lambda k: simulate(k, start()))(jax.random.split(jax.random.key(0), 4000))
    summed = jax.jit(lambda ys: outer_product_information(loss, start(), CONSTRAINTS, ys))(ys)
    np.testing.assert_allclose(summed / 4000, estimate, rtol=1e-9)


def test_observed_is_expected_where_residuals_vanish(expected):
    y = mean(start())
    out = jax.jit(lambda p: observed_information(lambda q: loss(q, y), p, CONSTRAINTS))(start())
    np.testing.assert_allclose(out[:2, :2], expected[:2, :2], rtol=1e-10)
    single = start(jnp.float32)
    low = lambda p: loss({k: v.astype(jnp.float64) for k, v in p.items()}, y).astype(jnp.float32)
    out = jax.eval_shape(lambda p: observed_information(low, p, CONSTRAINTS), single)
    assert out.dtype == jnp.float32


TONE = {"amplitude": Free(), "frequency": Free(), "phase": Free()}


def tone(params, t):
    angle = params["frequency"] * t + params["phase"]
    return params["amplitude"] * jnp.stack([jnp.cos(angle), jnp.sin(angle)])


@pytest.fixture(scope="module")
def bounds():
    """Least variances of amplitude, frequency and phase of a tone, real or complex."""

    @partial(jax.jit, static_argnames="parts")
    def find(frequency, t, variance, parts):
        params = {"amplitude": jnp.asarray(1.3), "frequency": frequency, "phase": jnp.asarray(0.4)}
        see = lambda p: tone(p, t)[:parts].ravel()
        return jnp.linalg.inv(fisher_gaussian(see, params, TONE, variance)).diagonal()

    return lambda *args, parts: np.asarray(find(*map(jnp.asarray, args), parts=parts))


def test_bound_of_the_frequency_of_a_tone(bounds):
    # Rife & Boorstyn 1974; Kay 1993 (from memory); A = 1.3, s = 0.5, w = 0.9, 64 samples. For a
    # real tone 24 s^2 / (A^2 n (n^2 - 1)) is 3 percent low at this phase; the exact value was
    # computed apart.
    t, asymptotic = jnp.arange(64.0), 24 * 0.25 / (1.69 * 64 * (64**2 - 1))
    real = bounds(0.9, t, 0.25, parts=1)[1]
    assert abs(real / 1.39779392e-05 - 1) < 1e-8
    assert abs(real / asymptotic - 1.03184) < 1e-5
    # Of a complex one half of that is exact, and s^2 / n that of the amplitude.
    complex_ = bounds(0.9, t, 0.25, parts=2)
    np.testing.assert_allclose(complex_[1], 6.77330558987e-06, rtol=0, atol=1e-14)
    np.testing.assert_allclose(complex_[0], 0.00390625, rtol=0, atol=1e-14)


def test_bound_of_the_frequency_in_continuous_time(bounds):
    # White noise of two-sided density S on [0, T]: var(w) >= 24 S / (A^2 T^3), the limit of the
    # above; T = 10, S = 0.01, w = 6. A sample of an interval h has the variance S / h.
    h = 10 / 4000
    t = h * (jnp.arange(4000.0) + 0.5)
    assert abs(bounds(6.0, t, 0.01 / h, parts=1)[1] / (24 * 0.01 / (1.69 * 1000)) - 1.0083) < 1e-4


def test_errors_name_what_is_wrong(user_errors):
    with pytest.raises(ValueError, match=r"`covariance` must have shape \(\), \(12,\)"):
        fisher_gaussian(mean, start(), CONSTRAINTS, jnp.ones(3))
