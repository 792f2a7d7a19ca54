"""A folder of CSV files as a cohort."""

import numpy as np
import pytest

from oscillib.cohort import batches, folder
from oscillib.recordings import Recording, pad, recording, write_csv


@pytest.fixture
def slices(tmp_path):
    """Three recordings of 2, 4 and 3 samples, one with a gap; and a file of another kind."""
    made = []
    for i, rows in enumerate((2, 4, 3)):
        values = np.random.default_rng(i).normal(size=(rows, 2))
        values[1, 0] = np.nan
        made.append(recording(0.5 * np.arange(rows), values, channels=["left", "right"]))
        write_csv(tmp_path / f"slice_{i}.csv", made[-1])
    (tmp_path / "notes.txt").write_text("treated: 1")
    return tmp_path, made


def test_gives_padded_recordings_in_the_order_of_names(slices):
    path, made = slices
    source = folder(path, length=4)
    assert len(source) == 3
    assert [p.name for p in source.paths] == ["slice_0.csv", "slice_1.csv", "slice_2.csv"]
    for i, one in enumerate(made):
        got, expected = source[i], pad(one, 4)
        assert isinstance(got, Recording)
        assert got.channels == ("left", "right")
        for name in ("times", "values", "mask"):
            assert type(getattr(got, name)) is np.ndarray
            np.testing.assert_array_equal(getattr(got, name), getattr(expected, name))


def test_streams(slices):
    source = folder(str(slices[0]), length=4)
    (batch,) = batches(source, size=4, seed=0, last="pad", epochs=1)
    assert batch.recordings.values.shape == (4, 4, 2)
    assert batch.recordings.channels == ("left", "right")
    for row, i in enumerate(batch.indices):
        np.testing.assert_array_equal(batch.recordings.mask[row], source[int(i)].mask)


def test_reads_a_file_when_it_is_its_turn(slices):
    path, _ = slices
    stream = batches(folder(path, length=4), size=1, seed=None, last="pad")
    next(stream)
    (path / "slice_1.csv").write_text("time,left\n0,broken\n")
    with pytest.raises(ValueError, match=r"slice_1.csv, line 2, column 'left'"):
        next(stream)


def test_pattern_looks_into_folders(slices):
    path, made = slices
    (path / "more").mkdir()
    write_csv(path / "more" / "a.csv", made[0])
    assert len(folder(path, length=4, pattern="**/*.csv")) == 4
    assert len(folder(path, length=4, pattern="*_1.csv")) == 1


def test_errors(user_errors, slices):
    path, made = slices
    with pytest.raises(ValueError, match="`path` must be a folder"):
        folder(path / "none", length=4)
    with pytest.raises(ValueError, match="must hold files that match 'x'"):
        folder(path, length=4, pattern="x")
    with pytest.raises(ValueError, match="`length` must be at least 1"):
        folder(path, length=0)
    with pytest.raises(ValueError, match=r"slice_1.csv: `length` must be at least 4.*got 3"):
        folder(path, length=3)[1]
    other = recording(made[0].times, made[0].nan_values, channels=["left", "deep"])
    write_csv(path / "slice_9.csv", other)
    with pytest.raises(ValueError, match=r"`source\[3\]` must have the structure"):
        next(batches(folder(path, length=4), size=4, seed=None, last="pad"))
