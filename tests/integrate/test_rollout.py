from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax import lax
from jax.flatten_util import ravel_pytree

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import rk4, rollout, segmented_scan, strang


NET = HopfNetwork()
STEPS = 10
STEP = {"rk4": rk4(NET), "strang": strang(NET.unit_flow, NET.coupling_flow)}
PLACE = (
    HopfParams([0.2, -0.3], [3.0, 2.0], shear=[0.9, 0.4], coupling=[[0.0, 0.5], [0.2, 0.0]]),
    jnp.array([[0.2, 0.4], [-0.3, 0.1]]),
)
AT, UNRAVEL = ravel_pytree(PLACE)
RNG = np.random.default_rng(0)
ALONG = jnp.asarray(RNG.normal(size=AT.shape))
WEIGHTS = jnp.asarray(RNG.normal(size=(STEPS + 1, 2, 2)))
FORCED = lambda t, y, params: y * jnp.cos(t)


def derivatives(kind, segment):
    """Value, gradient, forward derivative along a direction, and Hessian along it."""

    def loss(flat):
        params, y0 = UNRAVEL(flat)
        states = rollout(STEP[kind], params, y0, 0.2, STEPS, segment=segment)
        return jnp.sum(WEIGHTS * states**2)

    def everything(x):
        primal, tangent = jax.jvp(jax.value_and_grad(loss), (x,), (ALONG,))
        return primal[0], tangent[0], primal[1], tangent[1]

    return jax.jit(everything)


@pytest.fixture(scope="module")
def plain():
    return derivatives("rk4", None)


@pytest.mark.parametrize("kind", list(STEP))
def test_forward_reverse_and_second_derivatives_agree_with_differences(plain, kind):
    at = plain if kind == "rk4" else derivatives(kind, None)
    _, forward, gradient, hessian = at(AT)
    np.testing.assert_allclose(forward, gradient @ ALONG, rtol=1e-12)
    e = 1e-5
    above, below = at(AT + e * ALONG), at(AT - e * ALONG)
    # Central differences: off by e^2 times third derivatives, and by rounding over e.
    np.testing.assert_allclose(forward, (above[0] - below[0]) / (2 * e), rtol=1e-8)
    scale = np.max(np.abs(hessian))
    np.testing.assert_allclose(hessian, (above[2] - below[2]) / (2 * e), rtol=0, atol=1e-7 * scale)


@pytest.mark.parametrize("segment", [3, 5])
def test_segments_change_neither_value_nor_derivatives(plain, segment):
    for whole, cut in zip(plain(AT), derivatives("rk4", segment)(AT), strict=True):
        np.testing.assert_allclose(cut, whole, rtol=0, atol=1e-13 * np.max(np.abs(whole)))


@pytest.mark.parametrize("segment", [1, 3, 5, 10, 99])
def test_segmented_scan_is_scan_of_any_tree(segment):
    xs = {"a": jnp.arange(10.0), "b": jnp.arange(30.0).reshape(10, 3)}

    def body(carry, x):
        carry = (carry[0] + x["a"], carry[1] * 0.5 + x["b"])
        return carry, {"sum": carry[0], "both": (carry[1], x["a"])}

    start = (jnp.asarray(1.0), jnp.ones(3))
    expected = lax.scan(body, start, xs)
    jax.tree.map(
        np.testing.assert_array_equal, segmented_scan(body, start, xs, segment=segment), expected
    )


def test_segments_store_fewer_states():
    def memory(segment):
        loss = lambda y: jnp.sum(rollout(STEP["rk4"], PLACE[0], y, 0.01, 900, segment=segment)[-1])
        compiled = jax.jit(jax.grad(loss)).lower(PLACE[1]).compile()
        return compiled.memory_analysis().temp_size_in_bytes

    # 30 starts of segments and 30 steps of one instead of 900 starts of steps, of 32 bytes each;
    # the states that a rollout returns remain.
    assert memory(None) - memory(30) > 0.8 * 900 * 32


def test_reverse_mode_stores_one_state_a_step():
    loss = lambda p: jnp.sum(rollout(STEP["rk4"], p, PLACE[1], 0.01, 900)[-1])
    compiled = jax.jit(jax.grad(loss)).lower(PLACE[0]).compile()
    # The starts, and the states returned; the inside of a step would be some 40 times a state.
    assert compiled.memory_analysis().temp_size_in_bytes < 3 * 900 * 32


def test_tangents_of_a_chaotic_run_grow_with_its_exponent():
    # Lorenz 63: 0.9056 a time unit, hence 9.056 in the logarithm over 10; exponent of Sprott 2003
    # (digits seen in public code). Single runs scatter by 1.8.
    field = lambda t, y, p: jnp.stack(
        [10 * (y[1] - y[0]), y[0] * (28 - y[2]) - y[1], y[0] * y[1] - 8 / 3 * y[2]]
    )
    end = lambda y: rollout(rk4(field), None, y, 0.01, 1000)[-1]

    @jax.jit
    @jax.vmap
    def grown(y, v):
        # Onto the attractor, which takes long from near a fixed point; then along its most unstable
        # direction.
        y = jax.lax.fori_loop(0, 6, lambda _, y: end(y), y)
        y, v = jax.jvp(end, (y,), (v,))
        y, v = jax.jvp(end, (y,), (v / jnp.linalg.norm(v),))
        return jnp.log(jnp.linalg.norm(v))

    start, way = np.random.default_rng(1).normal(size=(2, 2000, 3))
    growth = np.asarray(grown(jnp.asarray(8 * start + [0.0, 0.0, 25.0]), jnp.asarray(way)))
    assert np.std(growth) / np.sqrt(2000) < 0.05
    assert abs(np.mean(growth) - 9.056) < 0.15


def test_array_of_equal_steps_is_the_scalar():
    params, y0 = PLACE
    scalar = rollout(STEP["rk4"], params, y0, 0.2, STEPS)
    array = rollout(STEP["rk4"], params, y0, jnp.full(STEPS, 0.2))
    np.testing.assert_allclose(array, scalar, rtol=0, atol=1e-14)


def test_irregular_steps_advance_one_by_one_from_t0():
    h = jnp.array([0.1, 0.4, 0.2])
    out = rollout(rk4(FORCED), None, jnp.array([1.0]), h, t0=2.0)
    y, t = jnp.array([1.0]), 2.0
    expected = [y]
    for k in range(3):
        y = rk4(FORCED)(None, h[k])(t, y)
        t = t + float(h[k])
        expected.append(y)
    np.testing.assert_allclose(out, jnp.stack(expected), rtol=1e-14)


def test_time_is_absolute():
    # y' = y cos t from t = 3: e^(sin t - sin 3).
    out = rollout(rk4(FORCED), None, jnp.array([1.0]), 0.01, 200, t0=3.0)
    times = 3 + 0.01 * np.arange(201)
    np.testing.assert_allclose(out[:, 0], np.exp(np.sin(times) - np.sin(3)), rtol=1e-9)


@pytest.mark.parametrize("array", [False, True])
def test_late_times_lose_no_digits_in_float32(array):
    # A step that returns its time shows what a forced field would see.
    show = lambda params, h: lambda t, y: t
    h = jnp.float32(0.1)
    seen = rollout(
        show, None, jnp.float32(0), jnp.full(1000, h) if array else h, None if array else 1000,
        t0=1e4,
    )[1:]  # fmt: skip
    assert seen.dtype == jnp.float32
    exact = 1e4 + np.float64(h) * np.arange(1000)
    # One spacing of float32 at 10,000; adding 0.1 a thousand times there would be off by 2.
    assert np.max(np.abs(np.float64(seen) - exact)) <= np.spacing(np.float32(1e4))


def test_scalar_step_is_prepared_once():
    prepared = []

    def step(params, h):
        prepared.append(h)
        return lambda t, y: y

    rollout(step, None, jnp.ones(2), 0.1, 50)
    # Once for the check of shapes, once for the run.
    assert len(prepared) == 2


DECAY = rk4(lambda t, y, params: -y)
BODY = lambda carry, x: (carry, x)
FLOAT: Any = 3.0


@pytest.mark.parametrize(
    "error, match, call",
    [
        (ValueError, "`steps` must be given", lambda: rollout(DECAY, None, jnp.ones(2), 0.1)),
        (TypeError, "`steps` .*int.*float", lambda: rollout(DECAY, None, jnp.ones(2), 0.1, FLOAT)),
        (ValueError, "`steps` .* got 0", lambda: rollout(DECAY, None, jnp.ones(2), 0.1, 0)),
        (
            ValueError,
            r"`steps` must agree with `h` of shape \(3,\); got steps=4",
            lambda: rollout(DECAY, None, jnp.ones(2), jnp.ones(3), 4),
        ),
        (
            ValueError,
            r"`h` must be a scalar or have shape \(steps,\); got shape \(2, 2\)",
            lambda: rollout(DECAY, None, jnp.ones(2), jnp.ones((2, 2))),
        ),
        (TypeError, "`y0` .*int64", lambda: rollout(DECAY, None, jnp.ones(2, int), 0.1, 3)),
        (
            TypeError,
            "`h` is float32 but `y0` is float64",
            lambda: rollout(DECAY, None, jnp.ones(2), jnp.float32(0.1), 3),
        ),
        (
            ValueError,
            "`t0` must have shape",
            lambda: rollout(DECAY, None, jnp.ones(2), 0.1, 3, t0=jnp.zeros(1)),
        ),
        (
            ValueError,
            r"must keep the shape and dtype of `y0`, \(2,\) float64; got \(1,\) float64",
            lambda: rollout(lambda p, h: lambda t, y: y[:1], None, jnp.ones(2), 0.1, 3),
        ),
        (
            ValueError,
            "must keep the shape and dtype .* got tuple",
            lambda: rollout(lambda p, h: lambda t, y: (y, y), None, jnp.ones(2), 0.1, 3),
        ),
        (
            ValueError,
            r"got \(2,\) float32",
            lambda: rollout(lambda p, h: lambda t, y: jnp.float32(y), None, jnp.ones(2), 0.1, 3),
        ),
        (
            TypeError,
            "`segment` must be a Python int",
            lambda: rollout(DECAY, None, jnp.ones(2), 0.1, 3, segment=FLOAT),
        ),
        (
            ValueError,
            "`segment` must be at least 1; got 0",
            lambda: segmented_scan(BODY, 0.0, jnp.ones(3), segment=0),
        ),
        (ValueError, "`xs` must hold at least", lambda: segmented_scan(BODY, 0.0, None)),
        (
            ValueError,
            r"`xs` must hold arrays of one length; got \[4, 6\]",
            lambda: segmented_scan(BODY, 0.0, (jnp.ones(4), jnp.ones(6)), segment=2),
        ),
    ],
)
def test_errors(user_errors, error, match, call):
    with pytest.raises(error, match=match):
        call()
