"""A recording: mask, checks, slices, transformations."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.recordings import Recording, recording, take


NAN = float("nan")
T = np.array([0.0, 0.5, 1.0, 3.0])
V = np.array([[1.0, NAN], [2.0, 5.0], [NAN, 6.0], [4.0, 7.0]])


def test_missing_entries_hold_zero_and_come_back_as_nan():
    r = recording(T, V, channels=["left", "right"])
    np.testing.assert_array_equal(r.mask, ~np.isnan(V))
    np.testing.assert_array_equal(r.values, np.nan_to_num(V))
    np.testing.assert_array_equal(r.nan_values, V)
    assert r.channels == ("left", "right")
    assert recording(T, V).channels == ("channel_0", "channel_1")


def test_a_row_with_no_sample_is_allowed():
    assert not recording([0.0, 1.0], [[NAN], [1.0]]).mask[0, 0]


def test_dtypes():
    assert recording(np.arange(4), np.ones((4, 2), int)).values.dtype == jnp.float64
    r = recording(T.astype(np.float32), V.astype(np.float32))
    assert r.times.dtype == r.values.dtype == r.nan_values.dtype == jnp.float32
    # A channel-first view and a list are as good as an array.
    assert recording(T.tolist(), V.tolist()).values.shape == (4, 2)


def test_without_64_bit_floats():
    with jax.enable_x64(False):
        r = recording(T, V)
        assert r.times.dtype == r.values.dtype == jnp.float32
        with pytest.raises(ValueError, match=r"both .* in float32.*subtract the first time"):
            recording(1e9 + T, V)


def test_jit_vmap_grad_with_respect_to_values():
    def loss(values):
        r = recording(T, values)
        return jnp.sum(jnp.where(r.mask, r.values**2, 0))

    # d/dv of v^2 is 2 v where observed, and 0, not NaN, where missing.
    expected = np.nan_to_num(2 * V)
    np.testing.assert_array_equal(jax.jit(jax.grad(loss))(jnp.asarray(V)), expected)
    batch = jax.vmap(lambda v: recording(T, v))(jnp.stack([V, 2 * V]))
    np.testing.assert_array_equal(batch.mask, np.stack([~np.isnan(V)] * 2))
    traced = jax.jit(recording)(jnp.asarray(T), jnp.asarray(V))
    np.testing.assert_array_equal(traced.nan_values, V)
    with pytest.raises(ValueError, match="`values` must have a row"):
        jax.jit(recording)(jnp.asarray(T[:3]), jnp.asarray(V))


def test_known_times_are_checked_even_under_jit():
    with pytest.raises(ValueError, match="increase strictly"):
        jax.jit(lambda v: recording(T[::-1], v))(jnp.asarray(V))


@pytest.mark.parametrize(
    ("times", "values", "error", "message"),
    [
        (T[:, None], V, ValueError, r"`times` must have shape \(time,\); got shape \(4, 1\)"),
        (T, V[:, 0], ValueError, r"`values` must .* got shape \(4,\)\. Fix: `values\[:, None\]`"),
        (T, V[None], ValueError, r"`values` must .* got shape \(1, 4, 2\)\. Fix: `vmap`"),
        (T[:3], V, ValueError, r"a row for each of the 3 `times`; got shape \(4, 2\)"),
        (T, V.T, ValueError, r"`values\.T`, time comes first"),
        (T[:0], V[:0], ValueError, "at least one sample"),
        (T, V[:, :0], ValueError, "at least one sample of one channel"),
        ([0, 2, 1, 3], V, ValueError, r"index 2 is 1\.0, after 2\.0\. Fix: sort"),
        ([0, 1, 1, 3], V, ValueError, r"indices 1 and 2 are both 1\.0"),
        ([0, 1, NAN, 3], V, ValueError, r"`times` must be finite; got nan at index 2"),
        ([0, 1, 2, np.inf], V, ValueError, "got inf at index 3"),
        (T, np.where(V == 6, -np.inf, V), ValueError, r"got -inf at index \(2, 1\) .*'channel_1'"),
        (T, V * [NAN, 1], ValueError, r"channel 'channel_0' is missing \(NaN\) at all 4 times"),
        (T, V + 0j, TypeError, "`values` must hold real numbers; got dtype complex128"),
        (T, V > 2, TypeError, "got dtype bool"),
        (T, V.astype(str), TypeError, "`values` must hold real numbers"),
        (T, [[1.0], [1.0, 2.0], [], []], ValueError, "`values` must be one array"),
        (T, np.ma.masked_invalid(V), TypeError, r"`values\.filled\(np\.nan\)`"),
        (np.arange(4).astype("M8[s]"), V, TypeError, "`times` must hold real numbers; got dates"),
        (T.astype(np.float32), V, TypeError, r"`times` is float32 but `values` is float64"),
    ],
)
def test_errors_of_arrays(user_errors, times, values, error, message):
    with pytest.raises(error, match=message):
        recording(times, values)


@pytest.mark.parametrize(
    ("channels", "error", "message"),
    [
        (("a",), ValueError, r"each of the 2 columns of `values`; got 1"),
        ("ab", TypeError, "`channels` must be a sequence of names; got 'ab'"),
        ((1, 2), TypeError, "sequence of names"),
        (2, TypeError, "sequence of names; got 2"),
        (("a", "a"), ValueError, "got 'a' at indices 0 and 1"),
        (("a", ""), ValueError, "got '' at index 1"),
        (("a ", "b"), ValueError, "no space at either end"),
        (("a\n", "b"), ValueError, "printable"),
    ],
)
def test_errors_of_names(user_errors, channels, error, message):
    with pytest.raises(error, match=message):
        recording(T, V, channels=channels)


def test_take():
    r = recording(T, V)
    part = take(r, 1, 3)
    np.testing.assert_array_equal(part.times, T[1:3])
    np.testing.assert_array_equal(part.nan_values, V[1:3])
    assert part.channels == r.channels
    batch = jax.vmap(lambda v: take(recording(T, v), 1, 3))(jnp.stack([V, V]))
    assert batch.values.shape == (2, 2, 2)


@pytest.mark.parametrize(
    ("start", "stop", "error", "message"),
    [
        (2, 2, ValueError, "0 <= start < stop <= 4.*got start=2, stop=2"),
        (0, 5, ValueError, "got start=0, stop=5"),
        (-2, 4, ValueError, "`start` must be at least 0"),
        (0.0, 4, TypeError, "`start` must be a Python int"),
    ],
)
def test_errors_of_take(user_errors, start, stop, error, message):
    with pytest.raises(error, match=message):
        take(recording(T, V), start, stop)


def test_take_wants_one_recording(user_errors):
    with pytest.raises(TypeError, match="`recording` must be a Recording; got ndarray"):
        take(V, 0, 1)  # pyright: ignore[reportArgumentType]
    stack = jax.tree.map(lambda x: x[None], recording(T, V))
    assert isinstance(stack, Recording)
    with pytest.raises(ValueError, match=r"got shape \(1, 4, 2\)"):
        take(stack, 0, 1)
