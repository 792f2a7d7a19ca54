from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.optimize
import scipy.special
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


def test_order_parameter_of_many_random_phases():
    # E r = sqrt(pi / 4n) nearly and E r^2 = 1/n: closed form (Rayleigh walk). The square is also
    # that of the phase-locking value of n independent pairs; of two, it is above 3/4 in a third.
    phases = jnp.asarray(np.random.default_rng(0).uniform(0, 2 * np.pi, (4000, 1000)))
    length = lambda x: np.linalg.norm(jax.vmap(order_parameter)(x), axis=1)
    assert abs(np.mean(length(phases)) - 0.02802495608) < 7e-4
    assert abs(1000 * np.mean(length(phases) ** 2) - 1) < 4 / np.sqrt(4000)
    assert abs(np.mean(length(phases.reshape(-1, 32)[:, :30]) ** 2) - 1 / 30) < 0.001
    apart = 2 * np.pi * (jnp.arange(3000.0) + 0.5) / 3000
    both = length(jnp.stack([0 * apart, apart], axis=1))
    assert abs(np.mean(2 * both**2 > 1.5) - 1 / 3) < 1e-3


# The first trigonometric moment: I1(2) / I0(2) of von Mises' distribution, e^(-1/2) of the wrapped
# normal one of standard deviation 1; closed forms.
@pytest.mark.parametrize(
    "moment, expected",
    [
        (lambda j: scipy.special.ive(j, 2.0) / scipy.special.ive(0, 2.0), 0.697774657964),
        (lambda j: np.exp(-(j**2) / 2), 0.606530659713),
    ],
    ids=["von Mises", "wrapped normal"],
)
def test_order_parameter_is_the_mean_resultant_length(moment, expected):
    # Phases at the quantiles: the distribution function is a Fourier series, and the mean over a
    # period of a smooth periodic function converges faster than any power.
    j = np.arange(1, 40)
    low, high = np.full(2000, -np.pi), np.full(2000, np.pi)
    share = (np.arange(2000) + 0.5) / 2000 - 0.5
    for _ in range(60):
        middle = (low + high) / 2
        series = np.sin(np.outer(middle, j)) @ (2 * moment(j) / j)
        below = (middle + series) / (2 * np.pi) < share
        low, high = np.where(below, middle, low), np.where(below, high, middle)
    cosine, sine = order_parameter(jnp.asarray((low + high) / 2))
    assert abs(cosine - expected) < 1e-12 and abs(sine) < 1e-12


@jax.jit
def pulls(phases, strength):
    """What a unit at each phase feels of one at phase 0, on which nothing acts."""
    params = KuramotoParams([0.0, 0.0], strength * jnp.array([[0.0, 1.0], [0.0, 0.0]]))
    one = lambda x: kuramoto(0.0, jnp.stack([x, 0 * x])[None], params)[0, 0]
    return jax.vmap(one)(phases)


def test_beat_by_quadrature():
    # Adler 1946, as above: the time of a turn is the integral of 1 / phi' over the phase.
    rate = 1.3 + np.asarray(pulls(2 * jnp.pi * jnp.arange(200.0) / 200, 1.0))
    assert abs(2 * np.pi * np.mean(1 / rate) - 7.5640662330079) < 1e-12


NODES, WEIGHTS = np.polynomial.legendre.leggauss(200)


def locked_order(density, strength):
    """Order parameter of the locked units, all under a mean field of this strength at phase 0.

    The frequency held at a phase is the one that the pull there cancels.
    """
    phase = np.pi / 2 * NODES
    frequency = lambda x: -pulls(x, strength)
    held, slope = jax.jvp(frequency, (jnp.asarray(phase),), (jnp.ones(200),))
    return np.pi / 2 * np.sum(WEIGHTS * np.cos(phase) * density(np.asarray(held)) * slope)


LAWS = {
    "Lorentzian": lambda w: 0.5 / np.pi / (w**2 + 0.25),
    "Gaussian": lambda w: np.exp(-(w**2) / 2) / np.sqrt(2 * np.pi),
    "uniform": lambda w: np.where(np.abs(w) <= 1, 0.5, 0.0),
}


# Half-width 0.5, standard deviation 1, [-1, 1]: 2 / (pi density(0)); Kuramoto 1975; Strogatz 2000,
# Physica D 143 (from memory).
@pytest.mark.parametrize(
    "law, onset", [("Lorentzian", 1.0), ("Gaussian", 1.595769121606), ("uniform", 1.273239544735)]
)
def test_onset_of_a_population_without_end(law, onset):
    r = 1e-5
    assert abs(onset * locked_order(LAWS[law], onset * r) / r - onset) < 1e-8


def test_order_of_a_population_without_end():
    # Gaussian, K = 2: 1 = K sqrt(pi/8) e^-x (I0(x) + I1(x)), x = K^2 r^2 / 4; Kuramoto 1975, the
    # Bessel form derived. Lorentzian as above. The drifting units cancel each other.
    for law, known in (("Gaussian", 0.715173956683), ("Lorentzian", 0.7071067811865)):
        excess = lambda r, law=law: locked_order(LAWS[law], 2 * r) - r
        found: Any = scipy.optimize.brentq(excess, 0.5, 0.9, xtol=1e-13)
        assert abs(found - known) < 1e-10
    # Uniform on [-1, 1] at its onset 4 / pi: Pazo 2005, Phys. Rev. E 72 (from memory). It jumps to
    # pi / 4: so far all units are locked and any order holds itself, beyond it too few are.
    uniform = lambda r: locked_order(LAWS["uniform"], 4 / np.pi * r)
    assert abs(uniform(np.pi / 4) - 0.7853981634) < 1e-10
    assert abs(uniform(0.4) - 0.4) < 1e-10
    assert uniform(0.9) < 0.88


def test_order_of_identical_units_with_noise():
    # Phase noise sqrt(2 D) xi: r = I1(K r / D) / I0(K r / D), here K = 2, D = 0.6; onset K = 2 D;
    # Sakaguchi 1988 (from memory). The stationary density is e^(integral of the pull / D).
    phase = 2 * np.pi * np.arange(64) / 64
    inside = np.outer(phase, (NODES + 1) / 2)

    def order(strength):
        pull = np.asarray(pulls(jnp.asarray(inside.ravel()), strength)).reshape(inside.shape)
        density = np.exp(phase / 2 * (pull @ WEIGHTS) / 0.6)
        return np.sum(density * np.cos(phase)) / np.sum(density)

    assert abs(order(2 * 0.77312962537) - 0.77312962537) < 1e-8
    assert abs(order(1.2 * 1e-5) / 1e-5 - 1) < 1e-8
