import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import persistence, time_average


VALUES = jnp.array([[1.0, 9.0], [4.0, 8.0], [2.0, 2.0], [7.0, 5.0]])
MASK = jnp.array([[True, False], [False, False], [True, True], [False, True]])
ORIGINS = np.array([0, 1, 2, 3])
BASELINES = pytest.mark.parametrize("baseline", [time_average, persistence])


def test_time_average_grows_with_the_origin():
    out = time_average(VALUES, MASK, ORIGINS, 2)
    expected = [[1.0, np.nan], [1.0, np.nan], [1.5, 2.0], [1.5, 3.5]]
    np.testing.assert_array_equal(out, np.repeat(np.array(expected)[:, None], 2, axis=1))


def test_persistence_holds_the_last_observed_sample():
    out = persistence(VALUES, MASK, ORIGINS, 2)
    expected = [[1.0, np.nan], [1.0, np.nan], [2.0, 2.0], [2.0, 5.0]]
    np.testing.assert_array_equal(out, np.repeat(np.array(expected)[:, None], 2, axis=1))


@BASELINES
def test_nothing_later_than_the_origin_is_used(baseline):
    later = VALUES.at[2:].add(100.0)
    known = baseline(VALUES, MASK, ORIGINS[:2], 3)
    np.testing.assert_array_equal(known, baseline(later, MASK, ORIGINS[:2], 3))


@BASELINES
@pytest.mark.parametrize("garbage", [jnp.nan, jnp.inf, 1e300])
def test_masked_entries_change_no_bit(baseline, garbage):
    dirty = jnp.where(MASK, VALUES, garbage)
    total = lambda v: jnp.sum(jnp.nan_to_num(baseline(v, MASK, ORIGINS, 2)) ** 2)
    value, slope = jax.value_and_grad(total)(VALUES)
    dirty_value, dirty_slope = jax.value_and_grad(total)(dirty)
    assert value == dirty_value
    np.testing.assert_array_equal(slope, dirty_slope)
    assert not np.any(np.asarray(slope)[~np.asarray(MASK)])


@BASELINES
def test_jit_vmap_and_float32(baseline):
    batch = jnp.stack([VALUES, 2 * VALUES]).astype(jnp.float32)
    masks = jnp.stack([MASK, ~MASK])
    out = jax.jit(jax.vmap(lambda v, m: baseline(v, m, ORIGINS, 2)))(batch, masks)
    assert out.dtype == jnp.float32
    np.testing.assert_array_equal(out[1], baseline(batch[1], masks[1], ORIGINS, 2))
    outside = jax.jit(lambda o: baseline(VALUES, MASK, o, 2))(jnp.array([-1, 4]))
    assert jnp.all(jnp.isnan(outside))


@pytest.mark.parametrize(
    "values, mask, origins, horizon, error, match",
    [
        (VALUES, MASK[:2], ORIGINS, 1, ValueError, "`mask` must have shape that of `values`"),
        (VALUES, MASK.astype(float), ORIGINS, 1, TypeError, "`mask` must be boolean"),
        (VALUES[None], MASK[None], ORIGINS, 1, ValueError, "`values` must have shape"),
        (VALUES, MASK, np.array([4]), 1, ValueError, "`origins` must be within 0 to 3"),
        (VALUES, MASK, ORIGINS, 0, ValueError, "`horizon` must be at least 1"),
    ],
)
@BASELINES
def test_errors_name_what_is_wrong(
    user_errors, baseline, values, mask, origins, horizon, error, match
):
    with pytest.raises(error, match=match):
        baseline(values, mask, origins, horizon)
