"""Why a windowed loss or its gradient is not finite: a replay that names the first bad place."""

from collections.abc import Callable, Mapping
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np

from .._validate import as_float, check_shape
from ..integrate import Windows, gather
from ..parameters import all_finite, constrain, unconstrain
from ._trace_backward import bad_derivative
from ._trace_problem import (
    Found,
    Problem,
    Replay,
    bad_leaves,
    bad_state,
    first_true,
    leaf_name,
    spot,
)


class NonFinite(NamedTuple):
    """Where something first stops being finite; `str` puts it into words.

    Whatever does not apply is `None`.

    Attributes:
        found: False if loss and gradient are finite; all else is then empty.
        direction: `"forward"`, or `"backward"` where only the gradient is not finite.
        place: `"parameter"`, `"start"`, `"step"`, `"readout"`, `"value"`, `"scale"`, `"loss"`,
            `"gap"`, `"term"` or `"constraint"`.
        terms: terms of the loss whose value (backward: gradient) is not finite. Backward, what
            follows belongs to the first of them.
        window: window; for a gap the one before it.
        step: steps from the start of the window to the state concerned: forward the first that is
            not finite, backward the one at which a derivative is not.
        sample: its sample number.
        time: its time.
        channel: channel of a readout, value, scale or residual.
        index: entry within the state or parameter array concerned.
        leaf: parameter array at fault, such as `params['rate']`; backward the first one whose
            gradient breaks at this place, if one does.
        leaves: backward: all arrays whose gradient is not finite in the end, `starts` among them.
        message: all this in words.
    """

    found: bool
    direction: str | None = None
    place: str | None = None
    terms: tuple[str, ...] = ()
    window: int | None = None
    step: int | None = None
    sample: int | None = None
    time: float | None = None
    channel: int | None = None
    index: tuple[int, ...] | None = None
    leaf: str | None = None
    leaves: tuple[str, ...] = ()
    message: str = "The loss and its gradient are finite."

    def __str__(self):
        return self.message


def trace_nonfinite(
    step: Callable,
    readout: Callable,
    params: Any,
    starts: Any,
    windows: Windows,
    values: Any,
    *,
    scale: Any,
    mask: Any = None,
    continuity: Callable | None = None,
    terms: Mapping[str, Callable] | None = None,
    constraints: Any = None,
) -> NonFinite:
    """Replay a windowed loss and name the first place that is not finite. Host-side.

        loss = reconstruction(readout(states), values, mask, scale) + continuity(gaps) + sum terms

    with states and gaps as of `roll_windows`, and its gradient by `params` and `starts`. If both
    are finite, nothing is wrong. Otherwise places are searched in the order in which the
    computation meets them.

    * Forward: parameters, starts, states (lowest window first, in it the lowest step), readout,
      values, scale, residuals, gaps, other terms.
    * Backward, where the loss is finite and the gradient is not: states that nothing observes
      (they spoil a gradient: zero times an infinite derivative is NaN), then for the first term
      whose gradient is not finite the derivative of the loss, of the readout, of the steps (lowest
      window first, in it the step that reverse mode meets first, the last one), of the constraints.

    For one recording. Takes a few compilations: a diagnosis, not a part of a loop.

    Arguments:
        step: `step(params, h) -> advance`.
        readout: `readout(y, params) -> (channel,)`.
        params: PyTree of parameters at which the loss fails.
        starts: start state of each window, `(window, *state)`.
        windows: from `cut`.
        values: observed samples, `(time, channel)`; anything where `mask` is False.
        scale: standard deviation of the reading noise, `(channel,)`, channel units.
        mask: True where observed, `(time, channel)`; default: everywhere.
        continuity: `continuity(gaps) -> scalar`, such as a call of `losses.continuity`; default
            none.
        terms: further terms by name, each `term(params) -> scalar`, such as a prior.
        constraints: tree of constraints; the gradient is then taken by the unconstrained leaves.

    Returns:
        A `NonFinite`.

    Raises:
        ValueError: shapes that do not fit; a finite parameter outside its constraint.
        TypeError: dtypes differ; `mask` is not boolean.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import trace_nonfinite
        >>> from oscillib.integrate import cut
        >>> step = lambda params, h: lambda t, y: y + h * params["rate"] * y**3
        >>> windows = cut(jnp.arange(13.0), 6)
        >>> starts = jnp.array([[0.1], [3.0]])
        >>> found = trace_nonfinite(
        ...     step, lambda y, params: y, {"rate": jnp.asarray(1.0)}, starts, windows,
        ...     jnp.zeros((13, 1)), scale=jnp.ones(1),
        ... )
        >>> found.place, found.window, found.step
        ('step', 1, 6)
        >>> print(str(found).partition(", the")[0])
        Forward: in window 1, after step 6 (sample 12, time 12)

    Source: common practice, no source.
    """
    params = jax.tree.map(as_float, params)
    starts, values, scale = as_float(starts), as_float(values), as_float(scale)
    mask = jnp.ones(values.shape, bool) if mask is None else jnp.asarray(mask)
    check_shape("values", values, (windows.num_samples, None), "(time, channel)")
    check_shape("mask", mask, values.shape, "that of `values`")
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    taken = {"reconstruction", "continuity"} & set(terms or {})
    if taken:
        raise ValueError(f"`terms` must have names of their own; got {taken.pop()!r}. Fix: rename.")
    # A parameter that is not finite has no unconstrained value, and is named before any gradient.
    mapped = constraints is not None and bool(all_finite(params))
    problem = Problem(
        step=step,
        readout=readout,
        params=params,
        free=unconstrain(params, constraints) if mapped else params,
        to_params=(lambda free: constrain(free, constraints, params)) if mapped else lambda p: p,
        starts=starts,
        windows=windows,
        values=gather(values, windows),
        mask=gather(mask, windows) & windows.owned[..., None],
        scale=scale,
        continuity=continuity,
        terms={} if terms is None else dict(terms),
    )
    # A user who looks for NaN may have JAX raise at the first one, which would end the replay.
    with jax.debug_nans(False), jax.debug_infs(False):
        return _search(problem)


def _search(problem: Problem) -> NonFinite:
    replay = jax.jit(problem.replay)(problem.free, problem.starts)
    replay = jax.tree.map(np.asarray, replay)
    if not np.isfinite(sum(replay.terms)):
        return _forward(problem, replay)

    # One after the other: a term that counts for nothing would still spoil a common gradient.
    def slopes(*unknowns):
        each = [lambda *x, k=k: problem.replay(*x).terms[k] for k in range(len(problem.names))]
        each = [jax.grad(term, argnums=(0, 1))(*unknowns) for term in each]
        return each, jax.tree.map(lambda *x: sum(x), *each)

    each, total = jax.jit(slopes)(problem.free, problem.starts)
    if bool(all_finite(total)):
        return NonFinite(False)
    return _backward(problem, replay, each, total)


def _forward(problem: Problem, replay: Replay) -> NonFinite:
    pairs = zip(problem.names, replay.terms, strict=True)
    terms = tuple(name for name, value in pairs if not np.isfinite(value))
    found = (
        _bad_input(problem)
        or bad_state(problem, replay, padding=False)
        or _bad_sample(problem, replay)
        or _bad_gap(problem, replay, terms)
    )
    if found is None:
        # Nothing but a sum or a term of the user's own is left.
        words = f"the term `{terms[0]}` is not finite" if terms else "the sum of terms overflows"
        found = Found("term", words, {})
    place, words, where = found
    words = f"Forward: {words}. Terms that are not finite: {', '.join(terms) or 'none'}."
    return NonFinite(True, "forward", place, terms, message=words, **where)


def _bad_input(problem: Problem) -> Found | None:
    for path, leaf in jax.tree_util.tree_leaves_with_path(problem.params):
        leaf = np.asarray(leaf)
        index = first_true(~np.isfinite(leaf))
        if index is not None:
            name = leaf_name(path)
            words = f"`{name}` is {leaf[index]}" + (f" at index {index}" if index else "")
            return Found("parameter", words, {"leaf": name, "index": index})
    starts = np.asarray(problem.starts)
    index = first_true(~np.isfinite(starts))
    if index is None:
        return None
    words = f"the start of window {index[0]} is {starts[index]} at index {index[1:]}"
    return Found("start", words, problem.at(index[0], 0) | {"index": index[1:]})


def _bad_sample(problem: Problem, replay: Replay) -> Found | None:
    """Look at what is observed, sample by sample."""
    counted = np.asarray(problem.mask)
    values, scale = np.asarray(problem.values), np.asarray(problem.scale)
    scale = np.broadcast_to(scale, values.shape)
    with np.errstate(all="ignore"):
        square = ((values - replay.predicted) / scale) ** 2
    for place, bad, text in (
        ("readout", ~np.isfinite(replay.predicted), "the readout of channel {c} is {p}"),
        ("value", ~np.isfinite(values), "the value of channel {c} is {v} where `mask` is True"),
        ("scale", ~((scale > 0) & (scale < np.inf)), "`scale` of channel {c} is {s}"),
        ("loss", ~np.isfinite(square), "the squared residual overflows in channel {c}: {p} - {v}"),
    ):
        index = first_true(bad & counted)
        if index is None:
            continue
        where = problem.at(*index[:2])
        said = text.format(c=index[2], p=replay.predicted[index], v=values[index], s=scale[index])
        if place == "scale":  # the same for all samples
            words = f"{said}; it must be positive and finite"
            return Found(place, words, {"channel": index[2]})
        return Found(place, f"{spot(problem, where)} {said}", where | {"channel": index[2]})
    return None


def _bad_gap(problem: Problem, replay: Replay, terms: tuple[str, ...]) -> Found | None:
    if problem.continuity is None or "continuity" not in terms:
        return None
    for joint, gap in enumerate(replay.gaps):
        alone = np.zeros_like(replay.gaps)
        if not np.isfinite(problem.continuity(jnp.asarray(alone))):
            return Found("term", "the term `continuity` is not finite even without a gap", {})
        alone[joint] = gap
        if not np.isfinite(problem.continuity(jnp.asarray(alone))):
            index = first_true(~np.isfinite(gap)) or first_true(np.abs(gap) == np.max(np.abs(gap)))
            words = f"the gap after window {joint} makes `continuity` overflow"
            return Found("gap", words, {"window": joint, "index": index})
    return None


def _backward(problem: Problem, replay: Replay, each: list[Any], total: Any) -> NonFinite:
    pairs = zip(problem.names, each, strict=True)
    broken = {name: slope for name, slope in pairs if not bool(all_finite(slope))}
    terms = tuple(broken)
    words = "the sum of the gradients of all terms overflows"
    found, leaves = Found("term", words, {}), bad_leaves(total)
    if terms:
        name, leaves = terms[0], bad_leaves(broken[terms[0]])
        found = (
            _bad_input(problem)
            or bad_state(problem, replay, padding=True)
            or bad_derivative(problem, replay, name)
        )
    place, words, where = found
    words = (
        f"Backward: {words}. Terms whose gradient is not finite: {', '.join(terms) or 'none'}; "
        f"it reaches {', '.join(f'`{leaf}`' for leaf in leaves)}."
    )
    return NonFinite(True, "backward", place, terms, leaves=leaves, message=words, **where)
