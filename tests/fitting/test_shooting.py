"""Fits of known systems from poor starts, their status, and what the data cannot touch."""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.optimize

from oscillib.fitting import (
    AugmentedContinuity,
    HardContinuity,
    Shooting,
    SoftContinuity,
    Status,
    laplace,
    shoot,
)
from oscillib.integrate import cut, rk4, roll_windows, rollout
from oscillib.losses import continuity as continuity_loss, reconstruction
from oscillib.parameters import Free


def whole_state(y, params):
    return y


def fitzhugh_nagumo(t, y, params):
    # Ramsay, Hooker, Campbell & Cao 2007 (from memory)
    a, b, c = params
    v, r = y
    return jnp.stack([c * (v - v**3 / 3 + r), -(v - a + b * r) / c])


FHN = rk4(fitzhugh_nagumo)
TRUTH = jnp.array([0.2, 0.2, 3.0])
TIMES = jnp.linspace(0.0, 20.0, 401)
SCALE = jnp.full(2, 0.1)


@pytest.fixture(scope="module")
def states():
    return rollout(FHN, TRUTH, jnp.array([-1.0, 1.0]), 0.05, 400)


@pytest.fixture(scope="module")
def values(states):
    return states + 0.1 * jax.random.normal(jax.random.key(0), states.shape)


@pytest.fixture(scope="module")
def least_squares(values):
    """The solution of one unbroken rollout, started at the truth, by another solver."""

    def residual(x):
        return ((rollout(FHN, x[:3], x[3:], 0.05, 400) - values) / SCALE[None]).ravel()

    jacobian: Any = jax.jit(jax.jacfwd(residual))
    start = np.array([*TRUTH, -1.0, 1.0])
    found = scipy.optimize.least_squares(jax.jit(residual), start, jac=jacobian, xtol=1e-14)
    return found.x, np.asarray(jacobian(found.x))


def random_starts(count):
    draw = np.random.default_rng(0).uniform
    return jnp.asarray(
        np.stack([draw(0, 2, count), draw(0, 2, count), draw(0.5, 8, count)], axis=1)
    )


def many_fhn(values, params, continuity, length=20):
    """Fit from many starts, each with its own values or all with the same."""
    windows = cut(TIMES, length)
    values = jnp.broadcast_to(values, (params.shape[0], *TIMES.shape, 2))

    @jax.jit
    @jax.vmap
    def one(p, values):
        fit = Shooting(FHN, whole_state, p, values[:-1:length], windows, values, scale=SCALE,
                       continuity=continuity)  # fmt: skip
        return fit.result(fit.run(fit.init()))

    return one(params, values)


def reached(fits, solution):
    near = np.abs(fits.params - solution[None, :3]).max(axis=1) < 1e-5
    return int((near & (np.asarray(fits.status) == Status.CONVERGED)).sum())


@pytest.fixture(scope="module")
def hard_and_clean(values, states):
    """Thirty fits of the noisy data, and one of the noise-free states."""
    everything = jnp.concatenate([jnp.broadcast_to(values, (30, *values.shape)), states[None]])
    fits = many_fhn(everything, random_starts(31), HardContinuity())
    return jax.tree.map(lambda x: x[:30], fits), jax.tree.map(lambda x: x[30], fits)


@pytest.fixture(scope="module")
def hard(hard_and_clean):
    return hard_and_clean[0]


@pytest.mark.long
def test_fitzhugh_nagumo_from_random_starts(hard, least_squares):
    assert reached(hard, least_squares[0]) == 30
    assert np.abs(hard.gaps).max() < 1e-10
    # Ramsay et al. 2007 report estimates near the truth; here within 4 standard errors.
    error = np.sqrt(np.diagonal(hard.covariance[0]))
    assert (np.abs(hard.params[0] - TRUTH) < 4 * error).all()


def test_closed_gaps_are_the_unbroken_rollout(hard):
    unbroken = rollout(FHN, hard.params[0], hard.starts[0, 0], 0.05, 400)
    np.testing.assert_allclose(hard.predicted[0], unbroken, rtol=0, atol=1e-9)


def test_record_and_gradient(hard):
    steps = int(hard.steps[0])
    assert np.isfinite(hard.record.loss[0, :steps]).all()
    assert np.isnan(hard.record.loss[0, steps:]).all()
    assert hard.record.decrement[0, steps - 1] < 1e-6
    assert (hard.gradient_norm < 1e-3).all()


def test_covariance_is_that_of_the_unbroken_rollout(hard, least_squares):
    # Gauss-Newton: (J'J)^-1 of the rollout from one start, which is marginalised too.
    jacobian = least_squares[1]
    expected = np.linalg.inv(jacobian.T @ jacobian)[:3, :3]
    np.testing.assert_allclose(hard.covariance[0], expected, rtol=1e-5)


@pytest.mark.long
@pytest.mark.parametrize(
    "continuity",
    [
        HardContinuity(),
        AugmentedContinuity(),
        SoftContinuity(weight=1e6, schedule=[1e-4, 1e-2, 1.0]),
    ],
    ids=["hard", "augmented", "soft"],
)
def test_two_hundred_of_two_hundred(values, least_squares, continuity):
    starts = random_starts(200)
    fits = many_fhn(values, starts, continuity)
    if isinstance(continuity, SoftContinuity):  # a penalty has a solution of its own
        best = np.asarray(fits.params[jnp.argmin(fits.objective)])
        assert reached(fits, best) == 200
    else:
        assert reached(fits, least_squares[0]) == 200
        assert np.abs(fits.gaps).max() < 1e-10
    # One window is a single rollout: the same solver, the same data, fewer answers.
    single = reached(many_fhn(values, starts, continuity, 400), least_squares[0])
    print(f"single rollout: {single} of 200")
    assert single < 180


@pytest.mark.long
def test_result_does_not_depend_on_the_windows(values, hard):
    # Windows of 70 samples, the last one ragged.
    other = many_fhn(values, random_starts(1), HardContinuity(), 70)
    np.testing.assert_allclose(other.params[0], hard.params[0], rtol=1e-6)
    np.testing.assert_allclose(other.predicted[0], hard.predicted[0], atol=1e-5)
    np.testing.assert_allclose(other.covariance[0], hard.covariance[0], rtol=1e-4)


def test_covariance_equals_laplace_without_noise(hard_and_clean, states):
    # Zero residuals: the Hessian of the loss is the Gauss-Newton matrix.
    fit = hard_and_clean[1]
    np.testing.assert_allclose(fit.params, TRUTH, rtol=1e-9)

    def loss(p):
        ys = rollout(FHN, p["params"], p["start"], 0.05, 400)
        return reconstruction(ys, states, np.ones(ys.shape, bool), scale=SCALE)

    best = {"params": fit.params, "start": fit.starts[0]}
    other = jax.jit(lambda p: laplace(loss, p, {"params": Free(), "start": Free()}))(best)
    np.testing.assert_allclose(fit.covariance, other.covariance[:3, :3], rtol=1e-6)


@pytest.mark.long
def test_soft_solution_is_a_minimum_of_the_losses(values):
    windows = cut(TIMES, 20)
    soft = SoftContinuity(scale=[0.02, 0.05], schedule=[0.01, 1.0])
    fit = shoot(FHN, whole_state, jnp.array([0.5, 0.5, 2.0]), values[:-1:20], windows, values,
                scale=SCALE, continuity=soft)  # fmt: skip
    assert fit.status == Status.CONVERGED

    def loss(params, starts):
        rolled = roll_windows(FHN, params, starts, windows)
        fitted = reconstruction(
            rolled.states, values[windows.index], windows.owned[..., None].repeat(2, 2), scale=SCALE
        )
        gap = continuity_loss(rolled.gaps, scale=jnp.array([0.02, 0.05]))
        return fitted + gap, (rolled, gap)

    gradient, (rolled, gap) = jax.jit(jax.grad(loss, (0, 1), has_aux=True))(fit.params, fit.starts)
    # In units of the curvature, 1e2 to 1e4 here.
    assert max(np.abs(g).max() for g in gradient) < 1e-3
    np.testing.assert_allclose(rolled.gaps, fit.gaps, rtol=0, atol=1e-12)
    np.testing.assert_allclose(fit.objective - fit.loss, gap, rtol=1e-9)
    assert np.abs(fit.gaps).max() > 1e-3


def unstable(t, y, p):
    # Bulirsch 1971; Bock 1983 (from memory): an error of the start grows as e^(60 t) / 2.
    return jnp.stack([y[1], 3600 * y[0] - (3600 + p**2) * jnp.sin(p * t)])


def test_unstable_problem_before_its_error_has_grown():
    # sin(pi t) and its slope at t = 0.25, where an error of the start has grown by e^15.
    end = rollout(rk4(unstable), jnp.asarray(np.pi), jnp.array([0.0, np.pi]), 0.25 / 2000, 2000)[-1]
    np.testing.assert_allclose(end, [0.7071067812, 2.221441469], rtol=0, atol=1e-4)


def test_unstable_problem():
    times = jnp.linspace(0.0, 1.0, 21)
    exact = jnp.stack([jnp.sin(jnp.pi * times), jnp.pi * jnp.cos(jnp.pi * times)], axis=1)
    step = rk4(unstable, substeps=50)
    fit = shoot(step, whole_state, jnp.asarray(2.0), exact[:-1], cut(times, 1), exact,
                scale=jnp.ones(2))  # fmt: skip
    assert fit.status == Status.CONVERGED
    # The parameter is pi up to the error of the Runge-Kutta steps.
    np.testing.assert_allclose(fit.params, np.pi, rtol=0, atol=1e-6)
    assert np.abs(fit.gaps).max() < 1e-10


def lotka_volterra(t, y, params):
    a, b, c, d = params
    return jnp.stack([a * y[0] - b * y[0] * y[1], c * y[0] * y[1] - d * y[1]])


def check_recovery(step, truth, starts, first, interval, continuity, tolerance):
    """Fit the noise-free solution from poor parameters, all compiled once."""
    times = jnp.linspace(0.0, 200 * interval, 201)
    exact = rollout(step, truth, first, interval, 200)
    windows = cut(times, 10)

    @jax.jit
    @jax.vmap
    def fits(p):
        fit = Shooting(step, whole_state, p, exact[:-1:10], windows, exact, scale=jnp.ones(2),
                       continuity=continuity)  # fmt: skip
        return fit.result(fit.run(fit.init()))

    found = fits(starts)
    np.testing.assert_array_equal(found.status, Status.CONVERGED)
    truth = np.broadcast_to(truth, found.params.shape)
    np.testing.assert_allclose(found.params, truth, rtol=tolerance)
    assert np.abs(found.gaps).max() < 1e-10
    return exact


@pytest.mark.long
def test_lotka_volterra():
    # Problem B1 of DETEST: Hull, Enright, Fellen & Sedgwick 1972; its end at t = 20 as published.
    starts = jnp.array([[1.0, 1, 1, 1], [0.5, 0.5, 3, 3], [5, 5, 0.3, 0.3], [4, 1, 2, 4]])
    truth, first = jnp.array([2.0, 2.0, 1.0, 1.0]), jnp.array([1.0, 3.0])
    step = rk4(lotka_volterra, substeps=8)
    exact = check_recovery(step, truth, starts, first, 0.1, HardContinuity(), 1e-8)
    np.testing.assert_allclose(exact[-1], [0.6761876008576667, 0.1860816099640036], rtol=3e-6)


def van_der_pol(t, y, mu):
    return jnp.stack([y[1], mu * (1 - y[0] ** 2) * y[1] - y[0]])


@pytest.mark.parametrize(
    "continuity",
    [HardContinuity(), pytest.param(AugmentedContinuity(), marks=pytest.mark.long)],
    ids=["hard", "augmented"],
)
def test_relaxation_oscillator(continuity):
    starts = jnp.array([0.5, 1.0, 10.0, 20.0])
    step = rk4(van_der_pol, substeps=4)
    check_recovery(step, jnp.asarray(5.0), starts, jnp.array([2.0, 0.0]), 0.05, continuity, 1e-7)
