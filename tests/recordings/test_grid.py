"""Regular grids, sampling intervals, gaps."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.recordings import gaps, on_grid, recording, sampling_interval


NAN = float("nan")


def one_channel(times):
    times = np.asarray(times)
    return recording(times, np.arange(1, len(times) + 1, dtype=times.dtype)[:, None])


def test_missing_rows_are_inserted_and_nothing_is_dropped():
    keep = [0, 1, 2, 5, 6, 9]
    r = on_grid(recording(0.1 * np.array(keep) + 3, np.ones((6, 2))))
    np.testing.assert_allclose(r.times, 3 + 0.1 * np.arange(10), rtol=1e-14)
    np.testing.assert_array_equal(np.flatnonzero(r.mask[:, 0]), keep)
    np.testing.assert_array_equal(r.values, np.where(r.mask, 1.0, 0.0))


def test_missing_entries_stay_missing():
    r = on_grid(recording([0.0, 1.0, 3.0], [[1.0, NAN], [2.0, 3.0], [NAN, 4.0]]))
    np.testing.assert_array_equal(r.nan_values, [[1, NAN], [2, 3], [NAN, NAN], [NAN, 4]])


def test_step_is_found_where_times_are_rounded():
    # 30 samples a second written with three decimals: the median, 0.033, would drift off the grid.
    times = np.round(np.arange(300) / 30, 3)
    r = on_grid(one_channel(times), tolerance=0.02)
    assert r.times.shape == (300,)
    assert float(r.times[1] - r.times[0]) == pytest.approx(1 / 30, rel=1e-4)


def test_single_precision_rounding_is_no_irregularity():
    times = (1e4 + 0.1 * np.arange(50)).astype(np.float32)
    r = on_grid(one_channel(times))
    assert r.times.dtype == r.values.dtype == jnp.float32
    assert bool(r.mask.all())
    assert sampling_interval(times) == pytest.approx(0.1, rel=1e-3)


def test_a_single_sample_with_its_step():
    assert on_grid(one_channel([2.0]), step=0.5).times.tolist() == [2.0]


@pytest.mark.parametrize(
    ("times", "options", "message"),
    [
        ([0.0, 1.0, 2.4, 3.0], {}, r"index 2, at 2\.4, is 0\.4 away.*any length"),
        ([0.0, 1.0, 2.0], {"step": 0.8}, r"step 0\.8 .* index 1, at 1, is 0\.2 away"),
        ([0.0, 1.0, 1.01, 2.0], {"step": 1.0, "tolerance": 0.1}, "indices 1 and 2.*share one"),
        ([0.0], {}, "`step` must be given"),
        ([0.0, 1.0], {"step": 0.0}, "`step` must be positive"),
        ([0.0, 1.0], {"step": NAN}, "`step` must be positive"),
        ([0.0, 1.0], {"tolerance": 0.5}, "`tolerance` must be from 0 to below 0.5; got 0.5"),
    ],
)
def test_errors_of_the_grid(times, options, message):
    with pytest.raises(ValueError, match=message):
        on_grid(one_channel(times), **options)


def test_sampling_interval():
    assert sampling_interval(2 + 0.25 * np.arange(100)) == 0.25
    jitter = np.zeros(100)
    jitter[50] = 1e-4
    assert sampling_interval(0.25 * np.arange(100) + jitter) is None
    assert sampling_interval(0.25 * np.arange(100) + jitter, tolerance=1e-3) == 0.25
    # A slow chirp: each interval is like the one before, and yet the times are not regular.
    assert sampling_interval(np.arange(100) * (1 + 1e-6 * np.arange(100))) is None
    assert sampling_interval(np.arange(5)) == 1.0


def test_errors_of_sampling_interval(user_errors):
    with pytest.raises(ValueError, match=r"at least two entries.*got 1"):
        sampling_interval([0.0])
    with pytest.raises(ValueError, match="increase strictly"):
        sampling_interval([1.0, 0.0])
    with pytest.raises(ValueError, match=r"`times` must have shape \(time,\)"):
        sampling_interval(np.ones((2, 2)))
    with pytest.raises(TypeError, match="runs on the host"):
        jax.jit(sampling_interval)(jnp.arange(3.0))


def test_gaps():
    r = recording([0.0, 1.0, 2.0, 3.0, 8.0], [[NAN, NAN], [1, NAN], [NAN, 1], [1, 1], [NAN, NAN]])
    # Channels take turns at 1, 2, 3; the edges of the times count.
    assert gaps(r, longer_than=1.0) == [(3.0, 8.0)]
    assert gaps(r, longer_than=0.5) == [(0.0, 1.0), (1.0, 2.0), (2.0, 3.0), (3.0, 8.0)]
    assert gaps(r, longer_than=5.0) == []


def test_rounding_makes_no_gap():
    assert gaps(one_channel(0.1 * np.arange(100)), longer_than=0.1) == []


def test_errors_of_gaps(user_errors):
    with pytest.raises(ValueError, match="`longer_than` must be positive"):
        gaps(one_channel([0.0, 1.0]), longer_than=0.0)
    with pytest.raises(TypeError, match="runs on the host"):
        jax.jit(lambda r: gaps(r, longer_than=1.0))(one_channel([0.0, 1.0]))
