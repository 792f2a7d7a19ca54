"""Batches from a cohort that may be larger than memory, in an order that a position can resume."""

from collections import deque
from collections.abc import Generator, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from typing import Any, Literal, NamedTuple, Protocol, runtime_checkable

import jax
import numpy as np

from .._validate import check_count


@runtime_checkable
class Source(Protocol):
    """What recordings can be read from: anything with a length and an index, such as a list."""

    def __len__(self) -> int:
        """Return the number of recordings."""
        ...

    def __getitem__(self, index: int, /) -> Any:
        """Return one recording: a PyTree of arrays, every one with the shapes of the others."""
        ...


class Position(NamedTuple):
    """Where a stream stands: plain integers, for a checkpoint.

    Attributes:
        epoch: how often the whole cohort has been gone through.
        index: how many recordings of this epoch, over all processes, have been given out.
        seed: the seed of the stream that gave this position; `None` where there was none.
        recordings: the number of recordings of its source; `None` at a start.
    """

    epoch: int = 0
    index: int = 0
    seed: int | None = None
    recordings: int | None = None


class Batch(NamedTuple):
    """Some recordings of a cohort, as this process sees them.

    Attributes:
        recordings: as the source gives them, stacked as numpy arrays along an axis `recording`.
        indices: where each stands in the source, shape `(recording,)`; noise drawn by
            `jax.random.fold_in(key, index)` is the same however the batch is shared out.
        present: False at a row that only fills up the last batch, shape `(recording,)`; such a row
            repeats a recording of the same batch and must not count.
        position: where the stream stands after this batch; save it to go on with the next one.
    """

    recordings: Any
    indices: np.ndarray
    present: np.ndarray
    position: Position


def batches(
    source: Source,
    *,
    size: int,
    seed: int | None,
    last: Literal["pad", "drop"],
    position: Position | None = None,
    epochs: int | None = None,
    ahead: int = 0,
    process_index: int | None = None,
    process_count: int | None = None,
) -> Generator[Batch, None, None]:
    """Go through a cohort batch by batch, in a new order each epoch; host-side.

    A recording is read when its batch is made and not before, so that the cohort need not fit into
    memory. The order is a function of `seed` and the epoch alone (a stable sort by a counter-based
    generator's bits): not of the batch size, the process, or what was read before. So a stream that
    starts at a saved position gives exactly what the first one would have given.

    Of several processes each reads its own part of every batch: process `p` of `P` gets rows
    `p * size / P` and following, `size / P` of them. All together are the batch of one process.

    Arguments:
        source: has a length and gives recording `i` at index `i`: a list, a `folder`, a memory map,
            or a class of yours. A recording is any PyTree of arrays, such as a `Recording` or a
            tuple of one and its label; all must have the same shapes, dtypes and channels.
        size: recordings in a batch, over all processes; a multiple of `process_count`.
        seed: for the order; `None` takes the recordings as they come.
        last: what to do where the last batch of an epoch is not full: `"pad"` fills it up with rows
            that `present` marks as absent; `"drop"` leaves its recordings out (in the next epoch
            other ones).
        position: where to start, default (`None`) the beginning.
        epochs: the stream ends before this epoch begins; default `None`: it never ends.
        ahead: batches that a thread reads before they are asked for, default 0: no thread.
        process_index: which part to read, default `jax.process_index()`.
        process_count: how many parts there are, default `jax.process_count()`.

    Returns:
        A generator of `Batch`es, its arguments checked when it is made. Its `close()` ends the
        thread of `ahead`, and so does its last batch.

    Raises:
        TypeError: a number is no int; `seed` is neither an int nor `None`.
        ValueError: an empty source; a number out of range; `size` is no multiple of
            `process_count`, or above the number of recordings, so that `"drop"` would leave out all
            of them; `position` belongs to another seed or number of recordings, or lies outside the
            epoch; when a batch is read, recordings that differ in shape, dtype or structure.

    Example:
        >>> import numpy as np
        >>> from oscillib.cohort import batches
        >>> cohort = [np.full(3, i) for i in range(5)]
        >>> for b in batches(cohort, size=2, seed=0, last="pad", epochs=1):
        ...     print(b.indices, b.present, b.recordings.shape, b.position[:2])
        [0 3] [ True  True] (2, 3) (0, 2)
        [1 2] [ True  True] (2, 3) (0, 4)
        [4 4] [ True False] (2, 3) (1, 0)

    Source: common practice, no source.
    """
    count = len(source)
    if not count:
        raise ValueError("`source` must hold at least one recording; got none.")
    size = check_count("size", size)
    ahead = check_count("ahead", ahead, least=0)
    if seed is not None:
        seed = check_count("seed", seed, least=0)
    if last not in ("pad", "drop"):
        raise ValueError(f"`last` must be 'pad' or 'drop'; got {last!r}.")
    if last == "drop" and size > count:
        raise ValueError(
            f"`size` must be at most {count}, the number of recordings, where a batch that is not "
            f"full is dropped; got {size}. Fix: a smaller `size`, or `last='pad'`."
        )
    end = None if epochs is None else check_count("epochs", epochs, least=0)
    process, processes = _check_process(process_index, process_count, size)
    start = _check_position(position or Position(), seed, count)
    least = size if last == "drop" else 1  # recordings without which there is no further batch
    own = slice(process * size // processes, (process + 1) * size // processes)

    def plan() -> Iterator[tuple[np.ndarray, np.ndarray, Position]]:
        """Give the rows of each batch: all that is known without reading a recording."""
        epoch, index = start.epoch, start.index
        while end is None or epoch < end:
            order = _order(count, seed, epoch)
            while index + least <= count:
                rows = order[index : index + size]
                present = np.arange(size) < len(rows)
                rows = np.concatenate([rows, np.full(size - len(rows), rows[0])])
                index += size
                over = index + least > count
                after = Position(epoch + over, 0 if over else index, seed, count)
                yield rows[own], present[own], after
            epoch, index = epoch + 1, 0

    return _read(source, plan(), ahead)


def _read(source: Any, plan: Iterator[Any], ahead: int) -> Generator[Batch, None, None]:
    def read(rows, present, after):
        return Batch(_stack([source[int(i)] for i in rows], rows), rows, present, after)

    if not ahead:
        for task in plan:
            yield read(*task)
        return
    # A batch depends on its place in the plan alone, so reading early changes nothing.
    waiting: deque[Future[Batch]] = deque()
    with ThreadPoolExecutor(1) as reader:
        try:
            for task in plan:
                waiting.append(reader.submit(read, *task))
                if len(waiting) > ahead:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()
        finally:
            reader.shutdown(cancel_futures=True)


def _order(count: int, seed: int | None, epoch: int) -> np.ndarray:
    """Return a permutation; raw bits and a stable sort stay the same in all versions of numpy."""
    if seed is None:
        return np.arange(count)
    bits = np.random.Philox(np.random.SeedSequence([seed, epoch])).random_raw(count)
    return np.argsort(bits, kind="stable")


def _stack(recordings: list[Any], rows: np.ndarray) -> Any:
    trees = [jax.tree.map(np.asarray, r) for r in recordings]
    first = jax.tree_util.tree_flatten_with_path(trees[0])
    for i, tree in zip(rows, trees, strict=True):
        if jax.tree.structure(tree) != first[1]:
            raise ValueError(
                f"`source[{i}]` must have the structure of `source[{rows[0]}]`, {first[1]}; got "
                f"{jax.tree.structure(tree)}. Fix: the same channels and fields everywhere."
            )
        for (path, a), b in zip(first[0], jax.tree.leaves(tree), strict=True):
            if (a.shape, a.dtype) != (b.shape, b.dtype):
                raise ValueError(
                    f"`source[{i}]{jax.tree_util.keystr(path)}` must have shape {a.shape} and "
                    f"dtype {a.dtype}, as in `source[{rows[0]}]`; got {b.shape}, {b.dtype}. Fix: "
                    "`recordings.pad` to one length, or a stream for each length."
                )
    return jax.tree.map(lambda *xs: np.stack(xs), *trees)


def _check_process(index: int | None, count: int | None, size: int) -> tuple[int, int]:
    if (index is None) != (count is None):
        raise ValueError(
            "`process_index` and `process_count` must be given together, or neither; got "
            f"{index} and {count}."
        )
    if index is None or count is None:
        index, count = jax.process_index(), jax.process_count()
    count = check_count("process_count", count)
    index = check_count("process_index", index, least=0)
    if index >= count:
        raise ValueError(f"`process_index` must be below `process_count`={count}; got {index}.")
    if size % count:
        raise ValueError(
            f"`size` must be a multiple of {count}, the number of processes; got {size}. "
            f"Fix: {size // count * count or count}."
        )
    return index, count


def _check_position(position: Any, seed: int | None, recordings: int) -> Position:
    position = Position(*position)
    epoch = check_count("position.epoch", position.epoch, least=0)
    index = check_count("position.index", position.index, least=0)
    if position.recordings is not None and position.recordings != recordings:
        raise ValueError(
            f"`position` must belong to this source of {recordings} recordings; it was saved from "
            f"one of {position.recordings}, and the rest of its epoch is another one here. Fix: "
            f"the same recordings, or start an epoch anew with `Position({epoch + 1})`."
        )
    if position.recordings is not None and position.seed != seed:
        raise ValueError(
            f"`position` must belong to `seed`={seed}; it was saved from a stream with seed "
            f"{position.seed}. Fix: that seed, or start an epoch anew with `Position({epoch + 1})`."
        )
    if index >= recordings:
        raise ValueError(
            f"`position.index` must be below {recordings}, the number of recordings; got {index}."
        )
    return Position(epoch, index)
