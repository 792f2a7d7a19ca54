import math
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import CoupledParams, Edges, HopfUnitParams, coupled, hopf_unit
from oscillib.integrate import delay_rollout, rk4, rollout


DECAY = lambda t, y, past, params: -past
TURN = lambda t, y, past, params: -params * past
ONE: dict[str, Any] = {"source": [0]}


def steps_solution(t, delay=1.0):
    """Solve x'(t) = -x(t - delay), x = 1 before 0, by the method of steps."""
    count = math.floor(t / delay) + 2
    return sum((-1) ** k * (t - (k - 1) * delay) ** k / math.factorial(k) for k in range(count))


def steps_derivative(t, delay):
    """Differentiate `steps_solution` with respect to the delay."""
    return sum(
        (-1) ** k * (1 - k) * (t - (k - 1) * delay) ** (k - 1) / math.factorial(k - 1)
        for k in range(1, math.floor(t / delay) + 2)
    )


def slope(h, errors):
    return np.polyfit(np.log(h), np.log(errors), 1)[0]


LAST = 8.0


@pytest.fixture(scope="module")
def error():
    """Largest error up to t = 8 of x' = -speed x(t - 1); one compilation for all steps."""
    run = jax.jit(
        lambda h, history, speed: delay_rollout(
            TURN, speed, history, h, 648, delay=jnp.array([1.0]), **ONE
        )[:, 0, 0]
    )

    def largest(h, past, speed, exact):
        history = jnp.asarray(past(h * np.arange(-83, 1)))[:, None, None]
        times = h * np.arange(int(LAST / h + 1e-9) + 1)
        x = run(jnp.asarray(h), history, jnp.asarray(speed))[: len(times)]
        return np.max(np.abs(x - np.array([exact(t) for t in times])))

    return largest


# Method of steps; common practice. Where the delay is no whole number of steps, the kink of the
# history at 0 comes back within a step, and the order falls to 2.
@pytest.mark.parametrize("extra, order, tolerance", [(0.0, 4, 0.1), (0.37, 2, 0.3)])
def test_order_against_the_method_of_steps(error, extra, order, tolerance):
    h = 1 / (np.array([10, 20, 40, 80]) + extra)
    errors = [error(k, np.ones_like, 1.0, lambda t: steps_solution(t + 1e-12)) for k in h]
    assert abs(slope(h, errors) - order) < tolerance


def test_order_between_grid_points_with_a_smooth_history(error):
    # cos(pi t / 2) solves x' = -(pi/2) x(t - 1); no delay is a whole number of steps.
    h = 1 / (np.array([20, 40, 80]) + 0.37)
    cosine = lambda t: np.cos(np.pi / 2 * t)
    errors = [error(k, cosine, np.pi / 2, cosine) for k in h]
    assert abs(slope(h, errors) - 4) < 0.2


def test_polynomial_pieces_are_exact():
    # x is a straight line, then a parabola, then a cubic: within what step and interpolation hold.
    x = delay_rollout(DECAY, None, jnp.ones((6, 1, 1)), 0.2, 15, delay=jnp.array([1.0]), **ONE)
    exact = [steps_solution(0.2 * k) for k in range(16)]
    np.testing.assert_allclose(x.ravel(), exact, rtol=0, atol=1e-14)


EDGES = Edges([0, 1, 2, 2], [1, 2, 0, 1], [0.5, 0.4, 0.3, 0.2], nodes=3)
UNITS = HopfUnitParams([0.5, 0.2, -0.1], [3.0, 2.5, 4.0], shear=[0.1, 0.2, 0.3])
NETWORK, PARAMS = coupled(hopf_unit, component=(0, 1)), CoupledParams(UNITS, EDGES, gain=1.5)


HISTORY = jnp.asarray(np.random.default_rng(0).normal(size=(6, 2, 3)))


@pytest.fixture(scope="module")
def delayed():
    def run(delay, history, segment=None):
        return delay_rollout(
            NETWORK.delayed, PARAMS, history, 0.1, 12,
            source=EDGES.source, delay=delay, segment=segment,
        )  # fmt: skip

    weights = jnp.asarray(np.random.default_rng(1).normal(size=(13, 2, 3)))

    def compiled(segment):
        def loss(delay, history):
            states = run(delay, history, segment)
            return jnp.sum(weights * states), states

        return jax.jit(jax.value_and_grad(loss, argnums=(0, 1), has_aux=True))

    return compiled(None), compiled(5)


def test_zero_delay_is_no_delay(delayed):
    plain = rollout(rk4(NETWORK), PARAMS, HISTORY[-1], 0.1, 12)
    (_, states), (by_delay, _) = delayed[0](jnp.zeros(4), HISTORY)
    np.testing.assert_allclose(states, plain, rtol=0, atol=1e-14)
    np.testing.assert_array_equal(by_delay, 0)


def test_one_undelayed_edge_among_delayed_ones(delayed):
    some = delayed[0](jnp.array([0.0, 0.1, 0.25, 0.5]), HISTORY)[0][1]
    none = delayed[0](jnp.zeros(4), HISTORY)[0][1]
    assert np.max(np.abs(some - none)) > 1e-2 and np.all(np.isfinite(some))


def test_segments_change_nothing(delayed):
    delay = jnp.array([0.13, 0.1, 0.25, 0.5])
    for a, b in zip(*(jax.tree.leaves(f(delay, HISTORY)) for f in delayed), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize("delay", [[0.13, 0.17, 0.23, 0.43], [0.111, 0.38, 0.0, 0.22]])
def test_gradient_in_delay_and_history(delayed, delay):
    rng = np.random.default_rng(2)
    delay = jnp.asarray(delay)
    along = jnp.where(delay > 0, jnp.asarray(rng.normal(size=4)), 0)
    move = jnp.asarray(rng.normal(size=HISTORY.shape))
    run, e = delayed[0], 1e-6
    _, (by_delay, by_history) = run(delay, HISTORY)
    above = run(delay + e * along, HISTORY + e * move)[0][0]
    below = run(delay - e * along, HISTORY - e * move)[0][0]
    forward = by_delay @ along + jnp.sum(by_history * move)
    np.testing.assert_allclose(forward, (above - below) / (2 * e), rtol=1e-6)


@pytest.fixture(scope="module")
def end():
    """State at t = 5 of x' = -x(t - delay), with its derivative in the delay."""
    history = jnp.ones((62, 1, 1))
    run = lambda d: delay_rollout(DECAY, None, history, 0.025, 200, delay=d, **ONE)[-1, 0, 0]
    return jax.jit(jax.value_and_grad(run))


@pytest.mark.parametrize("delay", [0.7, 1.013, 1.0, 1.5, 0.05])
def test_derivative_in_the_delay_against_the_method_of_steps(end, delay):
    value, gradient = end(jnp.array([delay]))
    assert abs(value - steps_solution(5.0, delay)) < 1e-5
    # Of order h where the history's kink meets a stage (whole numbers of steps), else of order h^2.
    assert abs(gradient[0] - steps_derivative(5.0, delay)) < 0.025 * 0.2


def test_delay_crosses_a_grid_point_smoothly_with_a_smooth_history():
    times = 0.1 * np.arange(-14, 1)
    history = jnp.cos(np.pi / 2 * times)[:, None, None]
    run = lambda d: delay_rollout(TURN, jnp.asarray(np.pi / 2), history, 0.1, 30, delay=d, **ONE)[
        -1, 0, 0
    ]
    slope = jax.jit(jax.grad(run))
    left, at, right = (slope(jnp.array([1.0 + e]))[0] for e in (-1e-9, 0.0, 1e-9))
    # The history is only nearly the solution: its kink at 0 is the error of its slope, 1e-4.
    np.testing.assert_allclose([left, right], at, rtol=0, atol=1e-4)


def test_a_rollout_goes_on_from_its_own_past():
    speed = jnp.asarray(np.pi / 2)
    history = jnp.cos(np.pi / 2 * 0.05 * np.arange(-24, 1))[:, None, None]
    run = lambda past, n: delay_rollout(
        TURN, speed, past, 0.05, n, delay=jnp.array([1.0]), **ONE
    )  # fmt: skip
    whole = run(history, 60)
    first = run(history, 30)
    second = run(jnp.concatenate([history, first[1:]])[-25:], 30)
    # The slopes of the new history are differences, good to the third order.
    np.testing.assert_allclose(second, whole[30:], rtol=0, atol=1e-6)


def test_time_reaches_the_field():
    # x' = cos t - 0 past: sin t.
    field = lambda t, y, past, params: jnp.cos(t) + 0 * past
    x = delay_rollout(
        field, None, jnp.zeros((4, 1, 1)), 0.1, 10, delay=jnp.array([0.2]), t0=2.0, **ONE
    )
    np.testing.assert_allclose(x[-1, 0, 0], np.sin(3.0) - np.sin(2.0), rtol=0, atol=1e-7)


def test_single_precision():
    run = lambda y, d: delay_rollout(DECAY, None, y, 0.1, 20, delay=d, **ONE)
    x = jax.jit(run)(jnp.ones((11, 1, 1), jnp.float32), jnp.ones(1, jnp.float32))
    assert x.dtype == jnp.float32
    np.testing.assert_allclose(x[20, 0, 0], -0.5, atol=1e-5)


def test_a_refused_delay_within_jit_gives_no_finite_state(end):
    for delay in (0.01, 1.6, -1.0):
        value, _ = end(jnp.array([delay]))
        assert np.isnan(value)


def call(**changes):
    given: dict[str, Any] = {
        "field": DECAY, "params": None, "history": jnp.ones((5, 1, 1)), "h": 0.1, "steps": 3,
        "source": [0], "delay": jnp.array([0.2]), **changes,
    }  # fmt: skip
    first = [given.pop(name) for name in ("field", "params", "history", "h", "steps")]
    return delay_rollout(*first, **given)


@pytest.mark.parametrize(
    "changes, error, match",
    [
        ({"history": jnp.ones((3, 1, 1))}, ValueError, "`history` must hold at least 4 samples"),
        ({"history": jnp.ones((5, 1))}, ValueError, "`history` must have shape"),
        (
            {"delay": jnp.array([0.05])},
            ValueError,
            r"`delay` must be 0, or from one step \(0.1\) to the length of the history \(0.4\); "
            "got 0.05",
        ),
        ({"delay": jnp.array([0.5])}, ValueError, "got 0.5 at index 0"),
        ({"delay": jnp.array([0.2, 0.2])}, ValueError, "`delay` must have shape"),
        ({"source": [1]}, ValueError, "`source` must be in 0 ... 0; got 1"),
        ({"source": [0.0]}, TypeError, "`source` must hold node numbers"),
        ({"h": jnp.ones(3)}, ValueError, "`h` must have shape"),
        ({"delay": jnp.array([0.2], jnp.float32)}, TypeError, "`delay` is float32"),
        ({"field": lambda t, y, past, p: past[0]}, ValueError, "must return the shape and dtype"),
        ({"steps": 2.0}, TypeError, "`steps` must be a Python int"),
    ],
)
def test_errors(user_errors, changes, error, match):
    with pytest.raises(error, match=match):
        call(**changes)
