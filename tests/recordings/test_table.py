"""CSV files: exact round trip, and errors that name the place."""

from importlib import resources

import jax
import numpy as np
import pytest
from hypothesis import given, settings, strategies as st

from oscillib.recordings import read_csv, recording, write_csv


NAN = float("nan")
NAMES = st.text(st.characters(exclude_categories=["C", "Z"]), min_size=1, max_size=4)
VALUES = st.one_of(st.just(NAN), st.floats(allow_nan=False, allow_infinity=False))


@st.composite
def arrays(draw):
    times = draw(st.lists(VALUES.filter(np.isfinite), min_size=1, max_size=6, unique=True))
    names = draw(st.lists(NAMES.filter(lambda n: n != "time"), min_size=1, max_size=3, unique=True))
    row = st.lists(VALUES, min_size=len(names), max_size=len(names))
    values = np.array(draw(st.lists(row, min_size=len(times), max_size=len(times))))
    values[0, np.isnan(values).all(axis=0)] = 1.0
    return np.sort(times), values, names


@pytest.fixture(scope="module")
def path(tmp_path_factory):
    return tmp_path_factory.mktemp("table") / "slice.csv"


@settings(max_examples=60, deadline=None)
@given(arrays=arrays())
def test_round_trip_is_exact(path, arrays):
    times, values, names = arrays
    r = recording(times, values, channels=names)
    write_csv(path, r)
    back = read_csv(str(path))
    assert back.channels == r.channels
    for a, b in zip(jax.tree.leaves(back), jax.tree.leaves(r), strict=True):
        # As bytes: the sign of zero comes back too.
        assert np.asarray(a).tobytes() == np.asarray(b).tobytes()


def test_round_trip_in_single_precision(path):
    values = np.array([[0.1], [NAN], [1e-38]], np.float32)
    with jax.enable_x64(False):
        r = recording(np.array([0.1, 0.2, 0.3], np.float32), values)
        write_csv(path, r)
        back = read_csv(path)
        assert back.values.dtype == np.float32
        np.testing.assert_array_equal(back.nan_values, r.nan_values)
        np.testing.assert_array_equal(back.times, r.times)


# Shapes and sums of the files in the wheel of statsmodels: of sunspots and nile from memory, of
# elnino no second source.
@pytest.mark.parametrize(
    "name, shape, first, total",
    [
        ("sunspots", (309, 1), 1700.0, 15373.4),
        ("nile", (100, 1), 1871.0, 91935.0),
        ("elnino", (61, 12), 1950.0, 16903.80),
    ],
)
def test_reads_real_files(name, shape, first, total):
    data = resources.files("statsmodels") / "datasets" / name / f"{name}.csv"
    with resources.as_file(data) as path:
        r = read_csv(path)
    assert r.values.shape == shape and bool(np.all(r.mask)) and r.times[0] == first
    assert abs(np.sum(r.values) - total) < 1e-6


def test_reads_what_people_write(path):
    # A byte order mark, Windows line ends, spaces, a quoted name, blank lines, NaN of any case.
    text = '\ufeff t , left ,"right, deep"\r\n0,1, 2e0\r\n\r\n1.5,NaN,\r\n2,nan,-3\r\n\r\n'
    path.write_bytes(text.encode())
    r = read_csv(path)
    assert r.channels == ("left", "right, deep")
    np.testing.assert_array_equal(r.times, [0, 1.5, 2])
    np.testing.assert_array_equal(r.nan_values, [[1, 2], [NAN, NAN], [NAN, -3]])


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "slice.csv: the file is empty"),
        ("\n\n", "slice.csv: the file is empty"),
        ("time,left\n", "slice.csv: there are no samples below the header"),
        ("time\n0\n", "line 1: there is only one column, 'time'"),
        ("time;left\n0;1\n", "only one column, 'time;left'.*commas, not semicolons"),
        ("0.0,1.0\n1.0,2.0\n", "line 1: the first line must name the columns.*number '0.0'"),
        ("time,a,a\n0,1,2\n", "line 1: columns 2 and 3 are both called 'a'"),
        ("time,time\n0,1\n", "columns 1 and 2 are both called 'time'"),
        ("time,a,\n0,1,\n", "line 1: column 3 has no name.*trailing comma"),
        ("time,a\n0,1\n1,low\n", "line 3, column 'a': expected a finite number; got 'low'"),
        ("time,a\n0,1_0\n", "line 2, column 'a'.*got '1_0'"),
        ("time,a\n0,inf\n", "line 2, column 'a'.*got 'inf'"),
        ("time,a\n0,1e999\n", "got '1e999'"),
        ("time,a\n0,1\n\n1\n", r"line 4: expected 2 cells, as in the header; got 1: \['1'\]"),
        ("time,a\n0,1,5\n", "line 2: expected 2 cells.*decimals with a point"),
        ("time,a\n0,1\n,2\n", "line 3, column 'time': expected the time as a plain number; got ''"),
        ("time,a\nnan,2\n", "line 2, column 'time'.*got 'nan'"),
        ("day,a\n2020-01-01,2\n", "line 2, column 'day'.*got '2020-01-01'.*no dates"),
        ("time,a\n0,1\n2,1\n1,1\n", "line 4, column 'time': times must increase.*'1' after 2.0"),
        ("time,a\n0,1\n0,1\n", "line 3, column 'time': times must increase strictly"),
        ("time,a,b\n0,1,\n1,2,nan\n", "slice.csv: .*channel 'b' is missing .* at all 2 times"),
    ],
)
def test_errors_name_the_place(path, text, message):
    path.write_text(text)
    with pytest.raises(ValueError, match=message) as caught:
        read_csv(path)
    assert str(path) in str(caught.value)
    assert "Fix: " in str(caught.value)


def test_other_encodings_are_refused(path):
    path.write_bytes("time,µ\n0,1\n".encode("latin-1"))
    with pytest.raises(ValueError, match=r"slice\.csv: the file is not UTF-8"):
        read_csv(path)


def test_errors_of_writing(path, user_errors):
    with pytest.raises(ValueError, match="must not contain 'time'"):
        write_csv(path, recording([0.0], [[1.0]], channels=["time"]))
    with pytest.raises(TypeError, match="`recording` must be a Recording; got list"):
        write_csv(path, [1.0])  # pyright: ignore[reportArgumentType]
    with pytest.raises(TypeError, match="runs on the host"):
        jax.jit(lambda r: write_csv(path, r))(recording([0.0], [[1.0]]))
