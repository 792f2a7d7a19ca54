"""Recordings to and from CSV files; host-side."""

import csv
import math
import os
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from ._recording import Recording, host_arrays, recording


TIME = "time"


def read_csv(path: str | os.PathLike[str]) -> Recording:
    """Read a recording from a comma-separated file; host-side.

    The first line names the columns, the first column is the time and every other one a channel.
    An empty cell, or NaN in any case, is a missing value. Times may have any spacing. Blank lines
    are passed over; spaces around a cell do not count.

    Arguments:
        path: a UTF-8 file, with or without a byte order mark. Times are plain numbers in the user's
            own time unit.

    Returns:
        A `Recording` in the default float dtype.

    Raises:
        ValueError: the file is empty or has no header, no channel, or no samples; a column has no
            name or another one's; a row has too many or too few cells; a cell is no finite number;
            a time is missing or does not increase; a channel has no sample. The message names file,
            line, column and cell.

    Example:
        >>> import pathlib, tempfile
        >>> from oscillib.recordings import read_csv
        >>> path = pathlib.Path(tempfile.mkdtemp()) / "two.csv"
        >>> _ = path.write_text("time,left,right\\n0.0,1.5,\\n0.5,nan,2.5\\n")
        >>> r = read_csv(path)
        >>> r.channels, r.mask.tolist()
        (('left', 'right'), [[True, False], [False, True]])
    """
    rows = _rows(Path(path))
    where, header = next(rows, (str(path), None))
    if header is None:
        raise ValueError(f"{path}: the file is empty. Fix: {_WANTED}.")
    _check_header(where, header)
    samples: list[list[float]] = []
    for where, row in rows:
        samples.append(_sample(where, row, header))
        if len(samples) > 1 and not samples[-2][0] < samples[-1][0]:
            raise ValueError(
                f"{where}, column {header[0]!r}: times must increase strictly; got {row[0]!r} "
                f"after {samples[-2][0]!r}. Fix: sort the rows by time and keep one a time."
            )
    if not samples:
        raise ValueError(f"{path}: there are no samples below the header. Fix: {_WANTED}.")
    table = np.array(samples)
    try:
        return recording(table[:, 0], table[:, 1:], channels=header[1:])
    except ValueError as error:
        raise ValueError(f"{path}: {error}") from error


def write_csv(path: str | os.PathLike[str], recording: Recording) -> None:
    """Write a recording as a comma-separated file that `read_csv` gives back exactly; host-side.

    The first line is `time` and the names of the channels; missing entries are empty cells. Every
    number is written with the digits that tell it from its neighbours. An existing file is
    replaced.

    Arguments:
        path: where to write, in UTF-8.
        recording: one recording with known values.

    Raises:
        TypeError: `recording` is no `Recording`, or is traced.
        ValueError: `recording` is a stack, or has a channel called `time`.

    Example:
        >>> import pathlib, tempfile
        >>> from oscillib.recordings import recording, write_csv
        >>> path = pathlib.Path(tempfile.mkdtemp()) / "one.csv"
        >>> write_csv(path, recording([0.0, 0.1], [[1.0], [float("nan")]], channels=["left"]))
        >>> path.read_text().splitlines()
        ['time,left', '0.0,1.0', '0.1,']
    """
    times, values, mask = host_arrays("recording", recording)
    if TIME in recording.channels:
        raise ValueError(
            f"`recording.channels` must not contain {TIME!r}, the name of the first column; got "
            f"{recording.channels}. Fix: rename that channel."
        )
    with Path(path).open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow([TIME, *recording.channels])
        for time, row, seen in zip(times.tolist(), values.tolist(), mask.tolist(), strict=True):
            cells = [repr(v) if s else "" for v, s in zip(row, seen, strict=True)]
            writer.writerow([repr(time), *cells])


_WANTED = "a first line of column names, then one line a sample: the time, then the channels"


def _rows(path: Path) -> Iterator[tuple[str, list[str]]]:
    """Yield 'file, line n' and the stripped cells of each line that is not blank."""
    with path.open(encoding="utf-8-sig", newline="") as file:
        reader = csv.reader(file)
        try:
            for row in reader:
                if row:
                    yield f"{path}, line {reader.line_num}", [cell.strip() for cell in row]
        except UnicodeDecodeError as error:
            raise ValueError(
                f"{path}: the file is not UTF-8 text ({error}). Fix: save it as UTF-8 CSV."
            ) from error


def _check_header(where: str, header: list[str]) -> None:
    if _number(header[0]) is not None:
        raise ValueError(
            f"{where}: the first line must name the columns; its first cell is the number "
            f"{header[0]!r}. Fix: add a header, such as `time,left,right`."
        )
    if len(header) < 2:
        raise ValueError(
            f"{where}: there is only one column, {header[0]!r}, the time. Fix: add a column for "
            "each channel; cells are separated by commas, not semicolons or tabs."
        )
    for i, name in enumerate(header):
        # A table exported with its row labels has no name above the times; none is needed there.
        if i and not name:
            raise ValueError(
                f"{where}: column {i + 1} has no name. Fix: name it, or remove the trailing comma."
            )
        if name in header[:i]:
            raise ValueError(
                f"{where}: columns {header.index(name) + 1} and {i + 1} are both called {name!r}. "
                "Fix: rename one."
            )


def _sample(where: str, row: list[str], header: list[str]) -> list[float]:
    """Return the numbers of one line, NaN where missing."""
    if len(row) != len(header):
        raise ValueError(
            f"{where}: expected {len(header)} cells, as in the header; got {len(row)}: {row}. "
            "Fix: leave a missing cell empty but keep its comma; write decimals with a point."
        )
    time = _number(row[0])
    if time is None or not math.isfinite(time):
        raise ValueError(
            f"{where}, column {header[0]!r}: expected the time as a plain number; got {row[0]!r}. "
            "Fix: give every sample a time, counted from the first one, such as seconds; no dates."
        )
    return [time, *(_value(where, *pair) for pair in zip(header[1:], row[1:], strict=True))]


def _value(where: str, name: str, cell: str) -> float:
    """Return the number of one cell, NaN where missing."""
    number = math.nan if not cell else _number(cell)
    if number is None or math.isinf(number):
        raise ValueError(
            f"{where}, column {name!r}: expected a finite number; got {cell!r}. "
            "Fix: write it with a decimal point, or leave the cell empty if it is missing."
        )
    return number


def _number(cell: str) -> float | None:
    """Return the number a cell holds, or None where it holds something else."""
    # Python's own numbers may hold underscores; in a table they are a sign of text.
    try:
        return None if "_" in cell else float(cell)
    except ValueError:
        return None
