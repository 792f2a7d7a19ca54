"""Recordings of unequal length, padded to a few lengths so that little has to be compiled."""

from collections.abc import Sequence
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from .._validate import check_count, is_concrete
from ._recording import Recording, check_recording, check_times


class Group(NamedTuple):
    """Recordings padded to one length and stacked.

    Arguments:
        recordings: a `Recording` whose arrays have a leading `recording` axis, for `jax.vmap`.
        indices: where each stood in the list given to `bucket`.
    """

    recordings: Recording
    indices: tuple[int, ...]


class Buckets(NamedTuple):
    """What `bucket` returns.

    Arguments:
        groups: the groups, by increasing length.
        waste: fraction of all rows that are padding, from 0 to below 1.
    """

    groups: list[Group]
    waste: float


def pad(recording: Recording, length: int) -> Recording:
    """Lengthen a recording with missing rows at its end.

    The mask of the added rows is False and their values are 0. Their times go on by the mean
    interval of the recording (by 1 after a single sample), so that every interval stays positive.

    Arguments:
        recording: one recording.
        length: number of rows wanted, at least those there are.

    Returns:
        A `Recording` of `length` rows.

    Raises:
        TypeError: `recording` is no `Recording`; `length` is no Python int.
        ValueError: `recording` is a stack; `length` is below its number of rows; its times are so
            large that the dtype cannot tell the added ones apart.

    Example:
        >>> from oscillib.recordings import pad, recording
        >>> r = pad(recording([0.0, 0.5], [[1.0], [2.0]]), 4)
        >>> r.times.tolist(), r.mask[:, 0].tolist()
        ([0.0, 0.5, 1.0, 1.5], [True, True, False, False])
    """
    check_recording("recording", recording)
    # Known recordings are padded on the host, where a new length compiles nothing.
    if is_concrete(*jax.tree.leaves(recording)):
        times, values, mask = _padded(np, jax.tree.map(np.asarray, recording), length)
        check_times("recording.times, continued,", times)
    else:
        times, values, mask = _padded(jnp, recording, length)
    return Recording(jnp.asarray(times), jnp.asarray(values), jnp.asarray(mask), recording.channels)


def bucket(recordings: Sequence[Recording], *, max_shapes: int = 3) -> Buckets:
    """Group recordings by length, pad and stack each group, with as little padding as possible.

    A compiled function compiles once for each length. The lengths are those that make the total
    number of padded rows least, found exactly by dynamic programming over the sorted lengths.
    Host-side: call it once, outside `jit`.

    Arguments:
        recordings: recordings with the same channels and dtype, at least one.
        max_shapes: greatest number of groups; fewer come back only where fewer lengths occur.

    Returns:
        `groups`, each with stacked `recordings` (times `(recording, time)`, values and mask
        `(recording, time, channel)`) and the `indices` into the list given, and `waste`, the
        fraction of rows that are padding.

    Raises:
        TypeError: an entry is no `Recording`, or is traced; dtypes differ; `max_shapes` is no int.
        ValueError: no recordings, an entry that is a stack, other channels than the first's, or
            `max_shapes` below 1.

    Example:
        >>> from oscillib.recordings import bucket, recording
        >>> rs = [recording(jnp.arange(1.0 * n), jnp.ones((n, 1))) for n in (2, 9, 3, 10)]
        >>> b = bucket(rs, max_shapes=2)
        >>> [(g.indices, g.recordings.values.shape) for g in b.groups], round(b.waste, 3)
        ([((0, 2), (2, 3, 1)), ((1, 3), (2, 10, 1))], 0.077)

    Source: from memory (the optimal segmentation of a sorted list by dynamic programming).
    """
    _check_alike(recordings)
    max_shapes = check_count("max_shapes", max_shapes)
    lengths = np.array([r.times.shape[0] for r in recordings])
    groups = []
    shortest = 0
    for longest in _best_lengths(lengths, max_shapes):
        indices = np.flatnonzero((lengths > shortest) & (lengths <= longest)).tolist()
        padded = [pad(recordings[i], longest) for i in indices]
        stack = jax.tree.map(lambda *xs: jnp.asarray(np.stack(xs)), *padded)
        groups.append(Group(stack, tuple(indices)))
        shortest = longest
    rows = sum(g.recordings.times.size for g in groups)
    return Buckets(groups, 1 - int(lengths.sum()) / rows)


def _padded(xp: Any, recording: Recording, length: int) -> tuple[Any, Any, Any]:
    """Return padded times, values and mask; `xp` is the array module, numpy or jax.numpy."""
    times, n = recording.times, recording.times.shape[0]
    extra = check_count("length", length, least=n) - n
    step = (times[-1] - times[0]) / (n - 1) if n > 1 else xp.ones_like(times[0])
    added = times[-1] + step * xp.arange(1, extra + 1, dtype=times.dtype)
    rows = ((0, extra), (0, 0))
    return (
        xp.concatenate([times, added]),
        xp.pad(recording.values, rows),
        xp.pad(recording.mask, rows),
    )


def _best_lengths(lengths: np.ndarray, max_shapes: int) -> list[int]:
    """Return the increasing group lengths whose total of padded rows is least."""
    sizes, counts = np.unique(lengths, return_counts=True)
    upto = np.concatenate([[0], np.cumsum(counts)])
    n = len(sizes)
    # rows[j]: fewest rows that hold the j shortest sizes in the groups made so far; `cuts` tells
    # where the last of those groups begins. More groups never cost rows, so all allowed are used.
    rows = np.where(np.arange(n + 1) == 0, 0.0, np.inf)
    cuts = []
    for _ in range(min(max_shapes, n)):
        total = rows[:, None] + (upto[None, 1:] - upto[:, None]) * sizes
        begins_before_end = np.arange(n + 1)[:, None] <= np.arange(n)
        total = np.where(begins_before_end, total, np.inf)
        cuts.append(total.argmin(axis=0))
        rows = np.concatenate([[np.inf], total.min(axis=0)])
    best, end = [], n
    for cut in reversed(cuts):
        best.append(int(sizes[end - 1]))
        end = int(cut[end - 1])
    return best[::-1]


def _check_alike(recordings: Sequence[Recording]) -> None:
    if isinstance(recordings, Recording) or len(recordings) == 0:
        raise ValueError(
            "`recordings` must be a sequence of at least one Recording; got "
            f"{'a single one' if isinstance(recordings, Recording) else 'none'}. "
            "Fix: a list, such as `[r1, r2]`."
        )
    first = recordings[0]
    for i, r in enumerate(recordings):
        check_recording(f"recordings[{i}]", r)
        if not is_concrete(*jax.tree.leaves(r)):
            raise TypeError(
                f"`recordings[{i}]` must hold known values; got a traced array. "
                "Fix: call `bucket` outside `jit`."
            )
        if r.channels != first.channels:
            raise ValueError(
                f"`recordings[{i}].channels` must be those of the first, {len(first.channels)}: "
                f"{first.channels}; got {len(r.channels)}: {r.channels}. "
                "Fix: bucket recordings of other channels by themselves, or rename them."
            )
        if r.values.dtype != first.values.dtype:
            raise TypeError(
                f"`recordings[{i}].values` must be {first.values.dtype}, as in the first; got "
                f"{r.values.dtype}. Fix: build all in one precision."
            )
