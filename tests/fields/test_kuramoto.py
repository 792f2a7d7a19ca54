import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from oscillib.fields import (
    Edges,
    HopfNetwork,
    HopfParams,
    KuramotoParams,
    kuramoto,
    lorentzian_order,
    order_parameter,
)
from oscillib.integrate import rk4, rollout


FIELD = jax.jit(lambda y, p: kuramoto(0.0, y[None], p)[0])


def solve(params, y0, end, **more):
    return solve_ivp(
        lambda t, y: np.asarray(FIELD(y, params)), (0, end), y0, method="DOP853",
        rtol=1e-12, atol=1e-12, **more,
    )  # fmt: skip


def all_to_all(n):
    return np.full((n, n), 1 / n)


def test_definition():
    # Term by term, with a lag.
    rng = np.random.default_rng(0)
    theta, w, k = rng.normal(size=5), rng.normal(size=5), rng.normal(size=(5, 5))
    expected = w + 0.7 * np.sum(k * np.sin(theta[None] - theta[:, None] - 0.4), axis=1)
    dense = KuramotoParams(w, k, lag=0.4, gain=0.7)
    sparse = KuramotoParams(w, Edges.from_matrix(jnp.asarray(k)), lag=0.4, gain=0.7)
    for params in (dense, sparse):
        out = kuramoto(0.0, jnp.asarray(theta)[None], params)[0]
        np.testing.assert_allclose(out, expected, rtol=1e-13)


def test_beat_of_one_driven_oscillator():
    # Adler 1946: phi' = D - K sin phi beats with period 2 pi / sqrt(D^2 - K^2); D = 1.3, K = 1.
    params = KuramotoParams([1.3, 0.0], [[0.0, 1.0], [0.0, 0.0]])
    turn = lambda t, y: np.sin(y[0] / 2)
    times = solve(params, [0.1, 0.0], 40, events=turn).t_events[0]
    np.testing.assert_allclose(np.diff(times), 7.5640662330079, rtol=0, atol=1e-9)


def test_identical_pair():
    # Closed form: phi(t) = 2 atan(tan(phi0 / 2) e^(-K t)), K = 0.8, phi0 = 2, t = 1.5.
    params = KuramotoParams([0.3, 0.3], [[0.0, 0.4], [0.4, 0.0]])
    end = solve(params, [0.0, 2.0], 1.5).y[:, -1]
    assert abs(end[1] - end[0] - 0.8772177497205) < 1e-11


def test_beat_of_two_oscillators():
    # Closed form: sqrt(D^2 - K^2) with coupling K/2 each way; D = 1, K = 0.6.
    params = KuramotoParams([0.0, 1.0], [[0.0, 0.5], [0.5, 0.0]], gain=0.6)
    beat = lambda t, y: np.sin((y[1] - y[0]) / 2)
    times = solve(params, [0.0, 0.1], 40, events=beat).t_events[0]
    np.testing.assert_allclose(2 * np.pi / np.diff(times), 0.8, rtol=0, atol=1e-9)


def test_locking_of_three_oscillators():
    # Threshold 3 / max(sin x + sin 2x), closed form (Maistrenko et al. 2004, from memory).
    x = np.linspace(0.5, 1.5, 20001)
    none = KuramotoParams(np.zeros(3), all_to_all(3))
    phases = jnp.asarray(np.stack([-x, 0 * x, x], axis=1))
    pull = jax.vmap(lambda y: kuramoto(0.0, y[None], none)[0, 0])(phases)
    assert abs(1 / np.max(pull) - 1.704378316) < 1e-6
    for gain, locked in [(1.72, True), (1.69, False)]:
        params = KuramotoParams([-1.0, 0.0, 1.0], all_to_all(3), gain=gain)
        end = solve(params, np.zeros(3), 200).y[:, -1]
        assert (end[2] - end[0] < np.pi) == locked


@pytest.mark.parametrize("lag", [0.0, 0.5])
def test_identical_oscillators_in_step_turn_slower_by_the_lag(lag):
    # w - g sin(alpha) in step; Sakaguchi & Kuramoto 1986 (from memory).
    params = KuramotoParams(np.ones(4), all_to_all(4), lag=lag, gain=2.0)
    out = kuramoto(0.0, jnp.full((1, 4), 0.3), params)
    np.testing.assert_allclose(out, 1 - 2 * np.sin(lag), rtol=1e-14)


@pytest.fixture(scope="module")
def population():
    """Order parameter of 400 oscillators at the quantiles of a Lorentzian, g = 0.5, K = 2."""
    n = 400
    quantile = np.tan(np.pi * ((np.arange(n) + 0.5) / n - 0.5))
    params = KuramotoParams(0.5 * quantile, all_to_all(n), gain=2.0)
    run = jax.jit(lambda y: rollout(rk4(kuramoto), params, y, 0.05, 1200))
    states = run(jnp.zeros((1, n)))
    pairs = jax.vmap(order_parameter)(states[:, 0])
    return np.linalg.norm(pairs, axis=1)


def test_order_parameter_of_a_population(population):
    # Kuramoto 1975; Ott & Antonsen 2008: r = sqrt(1 - 2 g / K) = 0.7071067812 for infinitely many.
    assert abs(lorentzian_order(jnp.asarray(2.0), jnp.asarray(0.5)) - 0.7071067812) < 1e-10
    assert abs(np.mean(population[800:]) - 0.7071067812) < 0.004


def test_transient_of_the_order_parameter():
    # Ott & Antonsen 2008: r follows a Hopf unit with a = K/2 - g, b = K/2; r(3) from r(0) = 0.1.
    params = HopfParams([0.5], [0.0], saturation=[1.0])
    flow = HopfNetwork().unit_flow(params, jnp.asarray(3.0))
    assert abs(flow(jnp.array([[0.1], [0.0]]))[0, 0] - 0.381270458264) < 1e-11


@pytest.mark.parametrize("gain", [0.5, 1.0, 1.0 + 1e-9, 3.0])
def test_steady_order_has_derivatives_on_both_sides(gain):
    value, slope = jax.value_and_grad(lorentzian_order)(jnp.asarray(gain), jnp.asarray(0.5))
    assert np.isfinite(slope) and (value > 0) == (gain > 1)


def test_order_parameter_of_random_phases():
    # E r = 2 / pi for two random phases; closed form (Rayleigh walk).
    phase = jnp.asarray(2 * np.pi * (np.arange(4000) + 0.5) / 4000)
    pairs = jax.vmap(lambda x: order_parameter(jnp.stack([0 * x, x])))(phase)
    assert abs(np.mean(np.linalg.norm(pairs, axis=1)) - 0.6366197724) < 1e-6
