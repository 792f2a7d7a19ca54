"""Padding, and grouping by length with least padding."""

from itertools import combinations
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings, strategies as st

from oscillib.recordings import bucket, pad, recording
from oscillib.recordings._bucket import _best_lengths


NAN = float("nan")


def of_length(n, channels=2, dtype: Any = np.float64):
    return recording(np.arange(n, dtype=dtype) * 0.5, np.full((n, channels), n, dtype))


def padded_rows(lengths, longest):
    return sum(min(x for x in longest if x >= n) for n in lengths)


def test_pad_adds_missing_rows_at_increasing_times():
    r = recording([0.0, 0.4, 2.0], [[1.0], [NAN], [3.0]])
    p = pad(r, 6)
    np.testing.assert_array_equal(p.times[:3], r.times)
    np.testing.assert_allclose(p.times[3:], [3.0, 4.0, 5.0])
    np.testing.assert_array_equal(p.mask[:, 0], [True, False, True, False, False, False])
    np.testing.assert_array_equal(p.values[3:], 0.0)
    np.testing.assert_array_equal(pad(r, 3).times, r.times)
    assert pad(of_length(1), 3).times.tolist() == [0.0, 1.0, 2.0]


def test_pad_under_transformations():
    values = jnp.ones((2, 3, 1))
    f = lambda v: pad(recording(jnp.arange(3.0), v), 5)
    assert jax.jit(jax.vmap(f))(values).values.shape == (2, 5, 1)
    np.testing.assert_array_equal(jax.grad(lambda v: f(v).values.sum())(values[0]), values[0])
    assert pad(of_length(3, dtype=np.float32), 5).times.dtype == jnp.float32


def test_errors_of_pad(user_errors):
    with pytest.raises(ValueError, match="`length` must be at least 3; got 2"):
        pad(of_length(3), 2)
    with pytest.raises(TypeError, match="`length` must be a Python int"):
        pad(of_length(3), 4.0)  # pyright: ignore[reportArgumentType]
    with pytest.raises(ValueError, match=r"continued.*increase strictly"):
        pad(recording([1e20], [[1.0]]), 2)


@settings(max_examples=60, deadline=None)
@given(lengths=st.lists(st.integers(1, 30), min_size=1, max_size=7), max_shapes=st.integers(1, 4))
def test_padding_is_the_least_possible(lengths, max_shapes):
    best = _best_lengths(np.array(lengths), max_shapes)
    sizes = sorted(set(lengths))
    assert best == sorted(set(best)) and len(best) <= max_shapes
    count = min(max_shapes, len(sizes))
    # Check value: every choice of lengths that holds the longest, tried in turn.
    every = (padded_rows(lengths, [*c, sizes[-1]]) for c in combinations(sizes[:-1], count - 1))
    assert padded_rows(lengths, best) == min(every)


def test_bucket_keeps_every_recording_and_its_place():
    lengths = [5, 100, 6, 50, 48, 99]
    rs = [of_length(n) for n in lengths]
    groups, waste = bucket(rs)
    assert [g.indices for g in groups] == [(0, 2), (3, 4), (1, 5)]
    assert waste == pytest.approx(1 - sum(lengths) / (2 * 6 + 2 * 50 + 2 * 100))
    for group in groups:
        stack = group.recordings
        assert stack.times.shape == stack.values.shape[:2]
        for row, i in enumerate(group.indices):
            one = jax.tree.map(lambda x: x[row], stack)  # noqa: B023
            np.testing.assert_array_equal(one.values[: lengths[i]], rs[i].values)
            assert int(one.mask[:, 0].sum()) == lengths[i]
            assert bool(jnp.all(jnp.diff(one.times) > 0))
    # The stacked recordings are what vmap wants.
    sums = jax.vmap(lambda r: jnp.sum(r.values))(groups[0].recordings)
    np.testing.assert_array_equal(sums, [2 * 25, 2 * 36])


def test_equal_lengths_need_no_padding():
    groups, waste = bucket([of_length(4)] * 3)
    assert len(groups) == 1 and waste == 0.0
    assert bucket([of_length(4), of_length(8)], max_shapes=1).waste == 0.25


def test_errors_of_bucket(user_errors):
    with pytest.raises(ValueError, match="at least one Recording; got none"):
        bucket([])
    with pytest.raises(ValueError, match="got a single one"):
        bucket(of_length(3))  # pyright: ignore[reportArgumentType]
    with pytest.raises(ValueError, match=r"`recordings\[1\]\.channels` must be .* 2: .* got 1: "):
        bucket([of_length(3), of_length(3, channels=1)])
    with pytest.raises(TypeError, match=r"`recordings\[1\]\.values` must be float64.*got float32"):
        bucket([of_length(3), of_length(3, dtype=np.float32)])
    with pytest.raises(TypeError, match=r"`recordings\[1\]` must be a Recording"):
        bucket([of_length(3), None])  # pyright: ignore[reportArgumentType]
    with pytest.raises(ValueError, match="`max_shapes` must be at least 1"):
        bucket([of_length(3)], max_shapes=0)
    with pytest.raises(TypeError, match="must hold known values; got a traced"):
        jax.jit(lambda r: bucket([r]).waste)(of_length(3))
