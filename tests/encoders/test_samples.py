import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.encoders import SampleMap, extent, sample_inputs


TIMES = jnp.array([0.0, 0.5, 2.0, 2.5, 9.0])
VALUES = jnp.array([[9.0, 9.0], [1.0, 9.0], [9.0, 9.0], [2.0, 3.0], [9.0, 9.0]])
MASK = jnp.array([[0, 0], [1, 0], [0, 0], [1, 1], [0, 0]], bool)


@pytest.mark.parametrize(
    "seen, inside",
    [
        ([0, 1, 0, 1, 0], [0, 1, 1, 1, 0]),
        ([1, 0, 0, 0, 1], [1, 1, 1, 1, 1]),
        ([0, 0, 1, 0, 0], [0, 0, 1, 0, 0]),
        ([0, 0, 0, 0, 0], [0, 0, 0, 0, 0]),
        ([], []),
    ],
)
def test_extent(seen, inside):
    mask = jnp.asarray(seen, bool)[:, None] & jnp.array([[True, False]])
    assert extent(mask).tolist() == [bool(i) for i in inside]


def test_rows_hold_values_mask_and_both_intervals():
    expected = [
        [0, 0, 0, 0, 0, 0],  # padding
        [1, 0, 1, 0, 0, 1.5],  # the time until the next row counts, the one since padding does not
        [0, 0, 0, 0, 1.5, 0.5],  # a gap: within the recording, so its time counts
        [2, 3, 1, 1, 0.5, 0],
        [0, 0, 0, 0, 0, 0],
    ]
    np.testing.assert_array_equal(sample_inputs(TIMES, VALUES, MASK), expected)
    even = sample_inputs(None, VALUES, MASK)
    np.testing.assert_array_equal(even[:, :4], np.asarray(expected)[:, :4])
    np.testing.assert_array_equal(even[:, 4], [0, 0, 1, 1, 0])
    assert sample_inputs(None, VALUES.astype(jnp.float32), MASK).dtype == jnp.float32


@pytest.fixture(scope="module")
def both():
    @jax.jit
    def graded(samples, times, values):
        rows, pull = jax.vjp(lambda *at: at[0](*at[1:], MASK)[1:4], samples, times, values)
        return rows, pull(jnp.cos(rows))

    return graded


@pytest.mark.parametrize("junk", [np.nan, np.inf, 1e300, -0.0])
def test_what_is_missing_changes_no_bit(both, junk):
    samples = SampleMap(2, 3, depth=1, width=4, key=jax.random.key(0))
    inside = extent(MASK)
    bits = lambda tree: [np.asarray(leaf).tobytes() for leaf in jax.tree.leaves(tree)]
    clean = both(samples, TIMES, VALUES)
    dirty = both(samples, jnp.where(inside, TIMES, junk), jnp.where(MASK, VALUES, junk))
    assert bits(dirty) == bits(clean)
    slope = np.asarray(dirty[1][2])
    assert np.all(slope[~np.asarray(MASK)] == 0) and np.all(slope[np.asarray(MASK)] != 0)


def test_errors(user_errors):
    with pytest.raises(ValueError, match=r"`values` must have shape \(time, channel\)"):
        sample_inputs(None, VALUES[0], MASK[0])
    with pytest.raises(ValueError, match=r"`mask` must have shape that of `values` = \(5, 2\)"):
        sample_inputs(None, VALUES, MASK[:4])
    with pytest.raises(TypeError, match=r"`mask` must be boolean.*float64"):
        sample_inputs(None, VALUES, MASK.astype(float))
    with pytest.raises(TypeError, match="`values` must hold real floating-point numbers"):
        sample_inputs(None, VALUES.astype(int), MASK)
    with pytest.raises(TypeError, match="`times` is float32 but `values` is float64"):
        sample_inputs(TIMES.astype(jnp.float32), VALUES, MASK)
    with pytest.raises(ValueError, match=r"`times` must have shape \(time,\) = \(5\)"):
        sample_inputs(TIMES[1:], VALUES, MASK)
    samples = SampleMap(3, 4, key=jax.random.key(0))
    with pytest.raises(
        ValueError, match=r"`values` must have shape \(time, channel\) = \(any, 3\)"
    ):
        samples(None, VALUES, MASK)
