"""A windowed loss laid out for a replay, and the words for a place in it."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, NamedTuple

import jax
import numpy as np
from jaxtyping import Array

from .._validate import check_shape
from ..integrate import Windows, roll_windows
from ..losses import reconstruction


class Found(NamedTuple):
    """What is at fault, in words, and the fields of `NonFinite` that say where."""

    place: str
    words: str
    where: dict[str, Any]


def first_true(bad: Any) -> tuple[int, ...] | None:
    """Return the first True, the leading axis slowest."""
    places = np.argwhere(np.asarray(bad))
    return tuple(int(i) for i in places[0]) if len(places) else None


class Replay(NamedTuple):
    """What a loss computes on its way."""

    states: Any
    predicted: Any
    gaps: Any
    terms: tuple[Any, ...]


@dataclass(frozen=True)
class Problem:
    """A windowed loss, laid out by window."""

    step: Callable
    readout: Callable
    params: Any
    free: Any
    to_params: Callable
    starts: Array
    windows: Windows
    values: Array
    mask: Array
    scale: Array
    continuity: Callable | None
    terms: dict[str, Callable]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of all terms, in the order of their values in a replay."""
        joined = () if self.continuity is None else ("continuity",)
        return ("reconstruction", *joined, *self.terms)

    def replay(self, free: Any, starts: Array) -> Replay:
        """Compute the terms of the loss, and what leads to them."""
        params = self.to_params(free)
        rolled = roll_windows(self.step, params, starts, self.windows)
        predicted = jax.vmap(jax.vmap(self.readout, (0, None)), (0, None))(rolled.states, params)
        terms = [self.misfit(predicted)]
        if self.continuity is not None:
            terms.append(self.continuity(rolled.gaps))
            check_shape("continuity(gaps)", terms[1], (), "()")
        for name, term in self.terms.items():
            terms.append(term(params))
            check_shape(f"terms[{name!r}](params)", terms[-1], (), "()")
        return Replay(rolled.states, predicted, rolled.gaps, tuple(terms))

    def misfit(self, predicted: Array) -> Array:
        """Return the reconstruction loss."""
        return reconstruction(predicted, self.values, self.mask, scale=self.scale)

    def grid(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the intervals `(window, length)` and the times `(window, length + 1)`."""
        t0 = np.asarray(self.windows.t0)[:, None]
        h = np.asarray(self.windows.intervals)
        if h.ndim == 0:
            steps = np.arange(self.windows.length + 1).astype(h.dtype)
            return np.broadcast_to(h, (len(t0), len(steps) - 1)), t0 + h * steps
        return h, np.concatenate([t0, t0 + np.cumsum(h, axis=1)], axis=1)

    def at(self, window: int, place: int) -> dict[str, Any]:
        """Describe a state by its place in a window."""
        sample = window * self.windows.length + place
        time = float(self.grid()[1][window, place])
        return {"window": window, "step": place, "sample": sample, "time": time}


def bad_state(problem: Problem, replay: Replay, *, padding: bool) -> Found | None:
    """Look for the first state that is not finite."""
    bad = ~np.isfinite(replay.states)
    if not padding:
        place = np.arange(bad.shape[0])[:, None] * problem.windows.length + np.arange(bad.shape[1])
        bad[place >= problem.windows.num_samples] = False
    index = first_true(bad)
    if index is None:
        return None
    where = problem.at(*index[:2])
    before = replay.states[(index[0], index[1] - 1, *index[2:])]
    words = (
        f"{spot(problem, where)} the state becomes {replay.states[index]} at index {index[2:]}; "
        f"one step before it was {before:.3g}"
    )
    return Found("step", words, where | {"index": index[2:]})


def spot(problem: Problem, where: dict[str, Any]) -> str:
    """Put a place in a window into words."""
    text = "in window {window}, after step {step} (sample {sample}, time {time:.6g}),"
    if where["sample"] >= problem.windows.num_samples:
        text = "in window {window}, after step {step} (padding beyond the recording's end),"
    return text.format(**where)


def leaf_name(path: Any) -> str:
    """Name a parameter array by the way to it."""
    return f"params{jax.tree_util.keystr(path)}"


def bad_leaves(slope: Any) -> tuple[str, ...]:
    """Name the arrays of `(params, starts)` that are not finite."""
    params, starts = slope
    paths = jax.tree_util.tree_leaves_with_path(params)
    names = [leaf_name(path) for path, leaf in paths if not np.isfinite(leaf).all()]
    if starts is not None and not np.isfinite(starts).all():
        names.append("starts")
    return tuple(names)
