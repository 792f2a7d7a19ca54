"""Streams: every recording once an epoch, in an order that only seed and epoch decide."""

import itertools
import threading

import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings, strategies as st

from oscillib.cohort import Position, batches


class Counting:
    """A cohort that notes what is read, in which thread."""

    def __init__(self, size):
        self.size, self.read = size, []

    def __len__(self):
        return self.size

    def __getitem__(self, index):
        self.read.append((index, threading.current_thread()))
        return {"x": np.full(2, float(index)), "label": index % 2}


def used(stream):
    """Return the indices that count, in order."""
    return [int(i) for b in stream for i in b.indices[b.present]]


def same(a, b):
    assert a.position == b.position
    for x, y in zip((a.indices, a.present), (b.indices, b.present), strict=True):
        np.testing.assert_array_equal(x, y)
    for name in a.recordings:
        np.testing.assert_array_equal(a.recordings[name], b.recordings[name])


SIZES = st.integers(1, 12)


@settings(max_examples=60, deadline=None)
@given(count=SIZES, size=SIZES, seed=st.none() | st.integers(0, 2**70), stop=st.integers(0, 20))
def test_padded_stream_gives_each_once_an_epoch_and_resumes_anywhere(count, size, seed, stop):
    given = {"size": size, "seed": seed, "last": "pad", "epochs": 3}
    all_batches = list(batches(Counting(count), **given))
    order = used(all_batches)
    epochs = [order[e * count : (e + 1) * count] for e in range(3)]
    assert len(order) == 3 * count
    assert all(sorted(epoch) == list(range(count)) for epoch in epochs)
    if seed is None:
        assert epochs[0] == list(range(count))
    for b in all_batches:
        np.testing.assert_array_equal(b.recordings["x"][:, 0], b.indices)
        np.testing.assert_array_equal(b.recordings["label"], b.indices % 2)
        # Rows that fill up come last, and repeat a recording of the batch.
        assert b.present[0]
        assert np.all(np.diff(b.present.astype(int)) <= 0)
        assert set(b.indices) == set(b.indices[b.present])
    stop = min(stop, len(all_batches) - 1)
    rest = batches(Counting(count), position=all_batches[stop].position, **given)
    for a, b in zip(rest, all_batches[stop + 1 :], strict=True):
        same(a, b)


@settings(max_examples=40, deadline=None)
@given(count=SIZES, share=st.integers(1, 4), processes=st.integers(1, 4), ahead=st.integers(0, 2))
def test_processes_share_out_the_same_batches(count, share, processes, ahead):
    given = {"size": share * processes, "seed": 5, "last": "pad", "epochs": 2}
    whole = list(batches(Counting(count), **given))
    sources = [Counting(count) for _ in range(processes)]
    parts = [
        list(batches(s, process_index=p, process_count=processes, ahead=ahead, **given))
        for p, s in enumerate(sources)
    ]
    for b, *rows in zip(whole, *parts, strict=True):
        np.testing.assert_array_equal(np.concatenate([r.indices for r in rows]), b.indices)
        np.testing.assert_array_equal(np.concatenate([r.present for r in rows]), b.present)
        assert {r.position for r in rows} == {b.position}
    # Each process reads its own rows and no others.
    assert all(len(s.read) == share * len(whole) for s in sources)


def test_dropping_leaves_out_what_does_not_fill_a_batch():
    given = {"size": 4, "seed": 1, "last": "drop"}
    stream = list(batches(Counting(10), epochs=3, **given))
    assert len(stream) == 6
    assert all(b.present.all() for b in stream)
    assert [b.position[:2] for b in stream[:3]] == [(0, 4), (1, 0), (1, 4)]
    missing = [set(range(10)) - set(used(stream[e * 2 : e * 2 + 2])) for e in range(3)]
    assert {len(m) for m in missing} == {2}
    assert len(set(map(frozenset, missing))) > 1
    # Where fewer are left of an epoch than a batch, the next one begins.
    rest = batches(Counting(10), position=Position(0, 8), **given)
    same(next(rest), stream[2])


def test_seeds_and_epochs_give_other_orders_and_the_size_does_not():
    orders = {
        (seed, size): used(batches(Counting(50), size=size, seed=seed, last="pad", epochs=2))
        for seed in (0, 1)
        for size in (7, 16)
    }
    assert orders[0, 7] == orders[0, 16]
    assert orders[1, 7] == orders[1, 16]
    assert orders[0, 7][:50] != orders[1, 7][:50]
    assert orders[0, 7][:50] != orders[0, 7][50:]


def test_order_is_that_of_the_first_version():
    # A checkpoint of today must find the same order tomorrow: these are the bits of Philox, sorted.
    order = used(batches(Counting(8), size=8, seed=2024, last="pad", epochs=2))
    assert order == [2, 0, 5, 6, 1, 4, 3, 7, 6, 5, 7, 1, 0, 2, 3, 4]


def test_every_place_is_equally_likely():
    count, epochs = 6, 3000
    order = used(batches(Counting(count), size=count, seed=0, last="pad", epochs=epochs))
    table = np.zeros((count, count))
    np.add.at(table, (np.tile(np.arange(count), epochs), np.array(order)), 1)
    # Chi-square with 25 degrees of freedom: above 52.6 with probability 0.001; the seed is fixed.
    expected = epochs / count
    assert np.sum((table - expected) ** 2 / expected) < 52.6


def test_reads_no_more_than_is_asked_for():
    source = Counting(1000)
    stream = batches(source, size=3, seed=0, last="pad")
    assert source.read == []
    list(itertools.islice(stream, 2))
    assert len(source.read) == 6
    assert {thread for _, thread in source.read} == {threading.main_thread()}


def test_reading_ahead_changes_nothing_and_ends_with_the_stream():
    before = threading.active_count()
    given = {"size": 3, "seed": 0, "last": "pad", "epochs": 2}
    source = Counting(10)
    for a, b in zip(batches(source, ahead=2, **given), batches(Counting(10), **given), strict=True):
        same(a, b)
    assert threading.main_thread() not in {thread for _, thread in source.read}
    stream = batches(Counting(1000), ahead=2, size=3, seed=0, last="pad")
    next(stream)
    stream.close()
    assert threading.active_count() == before


@pytest.mark.parametrize("ahead", [0, 2])
def test_an_error_while_reading_arrives(ahead):
    class Broken(Counting):
        def __getitem__(self, index):
            if index == 5:
                raise OSError("the disk is gone")
            return super().__getitem__(index)

    stream = batches(Broken(8), size=2, seed=None, last="pad", ahead=ahead)
    assert next(stream).indices.tolist() == [0, 1]
    assert next(stream).indices.tolist() == [2, 3]
    with pytest.raises(OSError, match="the disk is gone"):
        next(stream)


GIVEN = {"size": 4, "seed": 0, "last": "pad"}


@pytest.mark.parametrize(
    ("change", "kind", "match"),
    [
        ({"size": 0}, ValueError, "`size` must be at least 1"),
        ({"size": 2.0}, TypeError, "`size` must be a Python int"),
        ({"seed": -1}, ValueError, "`seed` must be at least 0"),
        ({"seed": 0.5}, TypeError, "`seed` must be a Python int"),
        ({"last": "keep"}, ValueError, "`last` must be 'pad' or 'drop'; got 'keep'"),
        ({"size": 12, "last": "drop"}, ValueError, "`size` must be at most 10"),
        ({"ahead": -1}, ValueError, "`ahead` must be at least 0"),
        ({"epochs": -1}, ValueError, "`epochs` must be at least 0"),
        ({"process_index": 0}, ValueError, "must be given together"),
        ({"process_index": 2, "process_count": 2}, ValueError, "`process_index` must be below"),
        ({"process_index": 0, "process_count": 3}, ValueError, "`size` must be a multiple of 3.*3"),
        ({"position": Position(0, 10)}, ValueError, "`position.index` must be below 10"),
        ({"position": Position(-1, 0)}, ValueError, "`position.epoch` must be at least 0"),
        ({"position": Position(0, 4, 0, 11)}, ValueError, "saved from one of 11.*`Position.1.`"),
        ({"position": Position(0, 4, 7, 10)}, ValueError, "`seed`=0; .* with seed 7"),
    ],
)
def test_errors(user_errors, change, kind, match):
    with pytest.raises(kind, match=match):
        batches(Counting(10), **(GIVEN | change))


def test_recordings_must_be_alike(user_errors):
    with pytest.raises(ValueError, match="`source` must hold at least one recording"):
        batches([], size=1, seed=0, last="pad")
    cases = [
        ([{"x": np.ones(2)}, {"x": np.ones(3)}], r"`source\[1\]\['x'\]` must have shape \(2,\)"),
        ([{"x": np.ones(2)}, {"x": np.ones(2, "f4")}], "dtype float64.*got .*float32"),
        ([{"x": np.ones(2)}, {"y": np.ones(2)}], r"`source\[1\]` must have the structure"),
    ]
    for source, match in cases:
        with pytest.raises(ValueError, match=match):
            next(batches(source, size=2, seed=None, last="pad"))


def test_takes_arrays_of_jax_and_memory_maps(tmp_path):
    table = np.arange(12.0).reshape(4, 3)
    np.save(tmp_path / "table.npy", table)
    for source in (jnp.asarray(table), np.load(tmp_path / "table.npy", mmap_mode="r")):
        batch = next(batches(source, size=3, seed=None, last="pad"))
        assert type(batch.recordings) is np.ndarray
        np.testing.assert_array_equal(batch.recordings, table[:3])
