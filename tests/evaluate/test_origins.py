import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import rolling_origins, targets


VALUES = jnp.arange(20.0).reshape(10, 2)


def test_origins_leave_room_for_the_horizon():
    np.testing.assert_array_equal(rolling_origins(10, first=3, horizon=2), [3, 4, 5, 6, 7])
    np.testing.assert_array_equal(rolling_origins(10, first=3, horizon=2, stride=2), [3, 5, 7])
    np.testing.assert_array_equal(rolling_origins(2, first=0, horizon=1), [0])


@pytest.mark.parametrize(
    "change, error, match",
    [
        ({"first": 8}, ValueError, "`first` \\+ `horizon` must be at most"),
        ({"first": -1}, ValueError, "`first` must be at least 0"),
        ({"horizon": 0}, ValueError, "`horizon` must be at least 1"),
        ({"stride": 0}, ValueError, "`stride` must be at least 1"),
        ({"horizon": 2.0}, TypeError, "`horizon` must be a Python int"),
    ],
)
def test_origins_name_what_is_wrong(user_errors, change, error, match):
    with pytest.raises(error, match=match):
        rolling_origins(10, **({"first": 0, "horizon": 2} | change))


def test_targets_are_the_samples_after_each_origin():
    origins = rolling_origins(10, first=2, horizon=3, stride=2)
    out = targets(VALUES, origins, 3)
    expected = np.stack([np.asarray(VALUES)[o + 1 : o + 4] for o in origins])
    np.testing.assert_array_equal(out, expected)
    mask = VALUES % 3 == 0
    np.testing.assert_array_equal(targets(mask, origins, 3), expected % 3 == 0)


def test_targets_outside_the_recording_are_missing_under_jit():
    gather = jax.jit(targets, static_argnums=2)
    out = gather(VALUES, jnp.array([-2, 8]), 2)
    np.testing.assert_array_equal(jnp.isnan(out[:, :, 0]), [[True, False], [False, True]])
    np.testing.assert_array_equal(gather(VALUES > -1, jnp.array([8]), 2)[0, :, 0], [True, False])


def test_targets_keep_float32_and_any_int():
    out = targets(VALUES.astype(jnp.float32), jnp.array([1], dtype=jnp.int32), 2)
    assert out.dtype == jnp.float32


@pytest.mark.parametrize(
    "values, origins, error, match",
    [
        (VALUES, np.array([8]), ValueError, "`origins` must be within 0 to 7"),
        (VALUES, np.array([-1]), ValueError, "`origins` must be within 0 to 7"),
        (VALUES, np.array([1.0]), TypeError, "`origins` must hold whole numbers"),
        (VALUES, np.array([[1]]), ValueError, "`origins` must have shape"),
        (VALUES[:, 0], np.array([1]), ValueError, "`values` must have shape"),
        (VALUES.astype(int), np.array([1]), TypeError, "`values` must hold real floating"),
    ],
)
def test_targets_name_what_is_wrong(user_errors, values, origins, error, match):
    with pytest.raises(error, match=match):
        targets(values, origins, 2)
