from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings, strategies as st

from oscillib.integrate import Windows, cut, gather, join, rk4, roll_windows, rollout


# Forced, so that a window rolled out at the wrong time shows.
STEP = rk4(lambda t, y, params: -params * y + jnp.cos(t))
FLOAT: Any = 2.0
RATE, START = jnp.asarray(0.3), jnp.array([1.0, -2.0])
REGULAR = 5.0 + 0.1 * jnp.arange(24.0)
GAPPED = jnp.delete(REGULAR, jnp.array([7, 8, 9, 20]))
IRREGULAR = 5.0 + jnp.cumsum(jnp.asarray(np.random.default_rng(0).uniform(0.05, 0.2, 24)))


@settings(deadline=None, max_examples=60)
@given(st.data())
def test_every_sample_is_owned_once(data):
    num = data.draw(st.integers(2, 40))
    length = data.draw(st.integers(1, num - 1))
    windows = Windows(num, length, jnp.zeros(1), jnp.ones(()))
    index, owned = windows.index, windows.owned
    assert windows.count == len(range(0, num - 1, length))
    assert index.shape == owned.shape == (windows.count, length + 1)
    np.testing.assert_array_equal(np.sort(index[owned]), np.arange(num))
    # A window that follows starts with the sample the one before ends with.
    np.testing.assert_array_equal(index[1:, 0], index[:-1, -1])
    inside = np.arange(length + 1) + length * np.arange(windows.count)[:, None] < num
    np.testing.assert_array_equal(np.diff(index, axis=1), inside[:, 1:])


@pytest.mark.parametrize("length", [1, 4, 9, 19])
@pytest.mark.parametrize(
    "times", [REGULAR, GAPPED, IRREGULAR], ids=["regular", "gapped", "irregular"]
)
def test_windows_that_start_on_the_unbroken_rollout_are_it(times, length):
    # Recordings of 24 or 20 samples: these lengths leave ragged and full last windows.
    windows = cut(times, length)
    unbroken = rollout(STEP, RATE, START, jnp.diff(times), t0=times[0])
    rolled = roll_windows(STEP, RATE, gather(unbroken, windows)[:, 0], windows)
    np.testing.assert_array_equal(windows.t0, times[windows.index[:, 0]])
    assert rolled.gaps.shape == (windows.count - 1, 2)
    assert windows.intervals.ndim == (0 if times is REGULAR else 2)
    np.testing.assert_allclose(rolled.gaps, jnp.zeros_like(rolled.gaps), rtol=0, atol=1e-13)
    np.testing.assert_allclose(join(rolled.states, windows), unbroken, rtol=0, atol=1e-13)
    assert jnp.all(rolled.finite)


@pytest.mark.parametrize("length", [1, 5, 23])
def test_join_undoes_gather(length):
    windows = cut(REGULAR, length)
    values = jnp.asarray(np.random.default_rng(0).normal(size=(24, 3, 2)))
    np.testing.assert_array_equal(join(gather(values, windows), windows), values)


def test_gap_is_end_minus_next_start_and_finite_tells_which_window():
    windows = cut(REGULAR, 8)
    starts = jnp.array([[1.0, 2.0], [np.nan, 0.0], [3.0, 4.0]])
    rolled = roll_windows(STEP, RATE, starts, windows, segment=3)
    np.testing.assert_array_equal(rolled.finite, [True, False, True])
    np.testing.assert_array_equal(rolled.ends, rolled.states[:, -1])
    np.testing.assert_array_equal(rolled.states[:, 0], starts)
    np.testing.assert_array_equal(rolled.gaps, rolled.ends[:-1] - starts[1:])


def test_late_float32_times_are_regular_with_their_mean_interval():
    # 0.1 is stored here to 6e-5 only: single intervals say 0.09998 or 0.1001.
    windows = cut((1000 + 0.1 * jnp.arange(500.0)).astype(jnp.float32), 10)
    assert windows.intervals.shape == ()
    assert windows.intervals.dtype == windows.t0.dtype == jnp.float32
    assert abs(windows.intervals - 0.1) < 1e-6


def test_tolerance_decides_what_is_regular():
    times = REGULAR + 1e-4 * (jnp.arange(24) % 2).astype(float)
    assert cut(times, 4).intervals.shape == (6, 4)
    assert cut(times, 4, tolerance=1e-2).intervals.shape == ()


def test_traced_times_count_as_irregular_and_agree():
    starts = jnp.ones((6, 2))
    roll = lambda times: roll_windows(STEP, RATE, starts, cut(times, 4)).states
    np.testing.assert_allclose(jax.jit(roll)(REGULAR), roll(REGULAR), rtol=0, atol=1e-13)


@pytest.mark.parametrize(
    "error, match, call",
    [
        (ValueError, "`times` must hold at least two samples; got 1", lambda: cut(REGULAR[:1], 1)),
        (ValueError, r"`times` must have shape \(time,\)", lambda: cut(REGULAR[:, None], 1)),
        (
            ValueError,
            "`length` must be at most 23, the steps of the recording; got 24.*Fix",
            lambda: cut(REGULAR, 24),
        ),
        (ValueError, "`length` must be at least 1; got 0", lambda: cut(REGULAR, 0)),
        (TypeError, "`length` must be a Python int", lambda: cut(REGULAR, FLOAT)),
        (
            ValueError,
            r"`times` must be strictly increasing .*; got 0.0 at index 1",
            lambda: cut(jnp.array([0.0, 1, 1, 2]), 2),
        ),
        (
            ValueError,
            r"`times` must be strictly increasing .*; got -1.0 at index 1",
            lambda: cut(jnp.array([0.0, 2, 1, 3]), 2),
        ),
        (
            ValueError,
            "`times` must be finite; got nan at index 2",
            lambda: cut(jnp.array([0.0, 1, np.nan, 3]), 2),
        ),
        (
            ValueError,
            r"`starts` must have shape \(window, \*state\) = \(6, 2\); got shape \(5, 2\)",
            lambda: roll_windows(STEP, RATE, jnp.ones((5, 2)), cut(REGULAR, 4)),
        ),
        (
            TypeError,
            "`h` is float64 but `y0` is float32",
            lambda: roll_windows(STEP, RATE, jnp.ones((6, 2), jnp.float32), cut(REGULAR, 4)),
        ),
        (
            ValueError,
            r"`values` must have shape \(time, ...\) = \(24, 2\); got shape \(23, 2\)",
            lambda: gather(jnp.ones((23, 2)), cut(REGULAR, 4)),
        ),
        (
            ValueError,
            r"`windowed` must have shape .* = \(6, 5\); got shape \(6, 4\)",
            lambda: join(jnp.ones((6, 4)), cut(REGULAR, 4)),
        ),
    ],
)
def test_errors(user_errors, error, match, call):
    with pytest.raises(error, match=match):
        call()
