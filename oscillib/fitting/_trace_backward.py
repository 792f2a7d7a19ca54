"""Reverse mode through a windowed loss, place by place, until a derivative is not finite."""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jaxtyping import Array

from ..parameters import all_finite
from ._trace_problem import (
    Found,
    Problem,
    Replay,
    bad_leaves,
    first_true,
    leaf_name,
    spot,
)


def bad_derivative(problem: Problem, replay: Replay, name: str) -> Found:
    """Follow reverse mode through one term."""
    states = jnp.asarray(replay.states)
    pulled, found = jnp.zeros_like(states), None
    if name == "reconstruction":
        predicted = jnp.asarray(replay.predicted)
        pull = jax.grad(problem.misfit)(predicted)
        index = first_true(~np.isfinite(pull))
        if index is not None:
            where = problem.at(*index[:2])
            words = f"{spot(problem, where)} the derivative of the loss by channel {index[2]}"
            return Found("loss", f"{words} is not finite", where | {"channel": index[2]})
        pulled, found = _through_readout(problem, states, pull)
    elif name == "continuity" and problem.continuity is not None:
        pull = jax.grad(problem.continuity)(jnp.asarray(replay.gaps))
        index = first_true(~np.isfinite(pull))
        if index is not None:
            words = f"the derivative of `continuity` by the gap after window {index[0]}"
            return Found("gap", f"{words} is not finite", {"window": index[0], "index": index[1:]})
        pulled = pulled.at[:-1, -1].set(pull)
    elif name in problem.terms:
        slope = jax.grad(problem.terms[name])(problem.params)
        leaf = next(iter(bad_leaves((slope, None))), None)
        if leaf is not None:
            words = f"the derivative of `{name}` by `{leaf}` is not finite"
            return Found("term", words, {"leaf": leaf})
    if found is None and name in ("reconstruction", "continuity"):
        found = _through_steps(problem, states, pulled)
    if found is None:
        # What is left lies between the parameters and the leaves that are fitted.
        words = f"the gradient of `{name}` breaks in a constraint, or in a sum over windows"
        found = Found("constraint", words, {})
    return found


def _through_readout(problem: Problem, states: Array, pull: Array) -> tuple[Array, Found | None]:
    """Pull derivatives by channels back to states, and look for the first that breaks."""

    def one(y, pull):
        back, slope = jax.vjp(problem.readout, y, problem.params)[1](pull)
        return back, jax.tree.map(lambda s: ~jnp.all(jnp.isfinite(s)), slope)

    pulled, broken = jax.jit(jax.vmap(jax.vmap(one)))(states, pull)
    bad = ~np.isfinite(pulled).all(axis=tuple(range(2, pulled.ndim)))
    index = first_true(_any_leaf(broken, bad))
    if index is None:
        return pulled, None
    where = problem.at(*index)
    # Forward mode keeps channels apart.
    both = jax.jit(jax.jacfwd(problem.readout, argnums=(0, 1)))(states[index], problem.params)
    rows = [~np.isfinite(leaf).reshape(pull.shape[-1], -1) for leaf in jax.tree.leaves(both)]
    channel = first_true(np.concatenate(rows, axis=1).any(axis=1))
    words = f"{spot(problem, where)} the derivative of the readout is not finite"
    if channel is not None:
        where["channel"] = channel[0]
        words += f" in channel {channel[0]}"
        if not bool(problem.mask[(*index, *channel)]):
            words += " (not observed there, but zero times infinity is NaN)"
    entry = first_true(~np.isfinite(pulled[index]))
    where |= {"leaf": _leaf_at(broken, index), "index": entry}
    return pulled, Found("readout", words, where)


def _through_steps(problem: Problem, states: Array, pulled: Array) -> Found | None:
    """Pull derivatives back through every window, last step first, as reverse mode does."""
    h, times = (jnp.asarray(x) for x in problem.grid())

    def back(t, h, y, pull):
        def advance(params, y):
            return problem.step(params, h)(t, y)

        return jax.vjp(advance, problem.params, y)[1](pull)

    def window(h, times, states, pulled):
        def body(after, x):
            t, h, y, own = x
            slope, before = back(t, h, y, after)
            broken = jax.tree.map(lambda s: ~jnp.all(jnp.isfinite(s)), slope)
            return before + own, (before, broken)

        xs = (times[:-1], h, states[:-1], pulled[:-1])
        return lax.scan(body, pulled[-1], xs, reverse=True)[1]

    before, broken = jax.jit(jax.vmap(window))(h, times, states, pulled)
    bad = ~np.isfinite(before).all(axis=tuple(range(2, before.ndim)))
    bad = _any_leaf(broken, bad)
    lowest = first_true(bad)
    if lowest is None:
        return None
    index = (lowest[0], int(np.flatnonzero(bad[lowest[0]])[-1]))
    where = problem.at(*index)

    def advance(params, y):
        return problem.step(params, h[index])(times[index], y)

    local = jax.jit(jax.jacrev(advance, argnums=(0, 1)))(problem.params, states[index])
    words = f"{spot(problem, where)} the derivative of the next step is not finite"
    if bool(all_finite(local)):
        words = f"{spot(problem, where)} the gradient, growing backward, overflows"
    entry = first_true(~np.isfinite(before[index]))
    return Found("step", words, where | {"leaf": _leaf_at(broken, index), "index": entry})


def _any_leaf(broken: Any, bad: np.ndarray) -> np.ndarray:
    for leaf in jax.tree.leaves(broken):
        bad = bad | np.asarray(leaf)
    return bad


def _leaf_at(broken: Any, index: tuple[int, ...]) -> str | None:
    paths = jax.tree_util.tree_leaves_with_path(broken)
    return next((leaf_name(path) for path, leaf in paths if bool(leaf[index])), None)
