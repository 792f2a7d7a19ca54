"""A folder of CSV files as a source of recordings that are read one at a time."""

import os
from dataclasses import dataclass
from pathlib import Path

import jax
import numpy as np

from .._validate import check_count
from ..recordings import Recording, pad, read_csv


@dataclass(frozen=True)
class Folder:
    """Recordings in files, read one at a time by index; made by `folder`, for `batches`.

    Arguments:
        paths: the files, in the order of their indices.
        length: rows of every recording, shorter ones being padded.
    """

    paths: tuple[Path, ...]
    length: int

    def __len__(self) -> int:
        """Return the number of recordings."""
        return len(self.paths)

    def __getitem__(self, index: int, /) -> Recording:
        """Read recording `index`, pad it, and return it with numpy arrays."""
        path = self.paths[index]
        whole = read_csv(path)
        rows = whole.times.shape[0]
        if rows > self.length:
            raise ValueError(
                f"{path}: `length` must be at least {rows}, the number of its samples; got "
                f"{self.length}. Fix: a greater `length`, or a folder of its own for each length."
            )
        return jax.tree.map(np.asarray, pad(whole, self.length))


def folder(path: str | os.PathLike[str], *, length: int, pattern: str = "*.csv") -> Folder:
    """Make a source of all CSV files in a folder, read with `read_csv` when they are needed.

    Shorter recordings are padded to `length` by `recordings.pad`: rows without an observed sample.
    Files are taken in the order of their names; note which they are (`paths`) to match them with
    labels. Host-side. Add what else belongs to a recording by a class with `__len__` and
    `__getitem__` of your own around it; keep lengths that differ much in folders of their own, so
    that little is padding.

    Arguments:
        path: the folder.
        length: rows of every recording, at least those of the longest.
        pattern: which names to take, default `*.csv`; `**/*.csv` takes those in sub-folders too.

    Returns:
        A `Folder`: `len(f)` recordings, `f[i]` a `Recording` of `length` rows with numpy arrays.

    Raises:
        TypeError: `length` is no int.
        ValueError: no such folder, or no such file in it; `length` is below 1; when a recording is
            read, whatever `read_csv` refuses, and one that is longer than `length`.

    Example:
        >>> import pathlib, tempfile
        >>> from oscillib.cohort import batches, folder
        >>> path = pathlib.Path(tempfile.mkdtemp())
        >>> _ = (path / "slice_1.csv").write_text("time,left\\n0.0,1.5\\n0.5,2.5\\n")
        >>> _ = (path / "slice_2.csv").write_text("time,left\\n0.0,1.0\\n")
        >>> source = folder(path, length=2)
        >>> batch = next(batches(source, size=2, seed=None, last="pad"))
        >>> batch.recordings.mask[:, :, 0].tolist()
        [[True, True], [True, False]]
    """
    length = check_count("length", length)
    root = Path(path)
    if not root.is_dir():
        raise ValueError(f"`path` must be a folder; got {root}, which is none.")
    paths = tuple(sorted(p for p in root.glob(pattern) if p.is_file()))
    if not paths:
        raise ValueError(f"`path` must hold files that match {pattern!r}; {root} holds none.")
    return Folder(paths, length)
