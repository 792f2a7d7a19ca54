"""Roots of small systems by a damped Newton method that never raises and has exact derivatives."""

from collections.abc import Callable
from enum import IntEnum
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jax.scipy.linalg import lu_factor, lu_solve
from jaxtyping import Array, Float, Int


class RootStatus(IntEnum):
    """How the search for a fixed point or a cycle ended; only `CONVERGED` is a success.

    Small integers, so that they travel through `jit` and `vmap` as arrays. `describe_root` puts one
    into words.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import RootStatus
        >>> jnp.array([0, 3]) == RootStatus.CONVERGED
        Array([ True, False], dtype=bool)
    """

    RUNNING = -1
    CONVERGED = 0
    STEP_LIMIT = 1
    NON_FINITE = 2
    STALLED = 3
    AT_REST = 4


_WORDS = {
    RootStatus.RUNNING: "running: no verdict yet",
    RootStatus.CONVERGED: "converged: the remaining Newton step is below the tolerance",
    RootStatus.STEP_LIMIT: "step limit: not converged after the greatest number of steps",
    RootStatus.NON_FINITE: "non-finite: the function or its derivative is not finite at the start",
    RootStatus.STALLED: "stalled: no step comes closer to a root; there may be none nearby",
    RootStatus.AT_REST: "at rest: the search for a cycle shrank to a single state",
}


def describe_root(status: Any) -> Any:
    """Put a status into words. Host-side.

    Arguments:
        status: a `RootStatus`, or codes as an integer array of any shape.

    Returns:
        A string for a single code, nested lists of strings in the shape of an array.

    Raises:
        ValueError: a code is not one of `RootStatus`.

    Example:
        >>> from oscillib.analysis import RootStatus, describe_root
        >>> describe_root(RootStatus.STEP_LIMIT)
        'step limit: not converged after the greatest number of steps'
    """
    codes = np.asarray(status)
    unknown = ~np.isin(codes, list(RootStatus))
    if unknown.any():
        raise ValueError(
            f"`status` must hold codes of `RootStatus`, {int(min(RootStatus))} to "
            f"{int(max(RootStatus))}; got {codes[unknown].flat[0]}."
        )
    return np.vectorize(lambda code: _WORDS[RootStatus(code)], otypes=[object])(codes).tolist()


class Root(NamedTuple):
    """What `find_root` found.

    Attributes:
        x: the root, or the best point met.
        status: code of `RootStatus`.
        steps: Newton steps tried.
    """

    x: Float[Array, " n"]
    status: Int[Array, ""]
    steps: Int[Array, ""]


class _Search(NamedTuple):
    x: Array
    value: Array
    slope: Array
    length: Array
    steps: Array
    status: Array


# A refused step is tried again at a quarter of its length; each success doubles the next one.
_SHORTER, _LONGER = 0.25, 2.0
_SHORTEST = 1e-9


def default_tolerance(dtype: Any) -> float:
    """Return the relative size of a Newton step that rounding allows one to ask for."""
    return float(jnp.finfo(dtype).eps) ** 0.75


def find_root(
    residual: Callable[[Array], Array],
    x0: Float[Array, " n"],
    tolerance: Float[Array, " n"],
    max_steps: int,
) -> Root:
    """Find a root of as many functions as unknowns, close to `x0`.

    Damped Newton: `x + length p` with `J p = -F`, accepted where it comes nearer to the root as
    measured by the old slope, `|J^-1 F|` in units of `tolerance`. That measure is indifferent to
    the units of functions and unknowns, and falls along p wherever J is regular. Converged when p
    is below `tolerance`, which is positive, in every entry.

    Derivatives, in both modes and of any order, are those of the implicit function theorem,
    `dx = -J^-1 dF`; they do not see the iteration, nor `x0`.
    """
    dtype = x0.dtype
    tolerance = lax.stop_gradient(tolerance)

    def solve(function, x0):
        end = _search(function, x0, tolerance, max_steps)
        # Integers have no tangents, which the derivative of the whole cannot handle.
        return end.x, jnp.stack([end.status, end.steps]).astype(dtype)

    def tangent_solve(linear, rhs):
        slope = jax.jacfwd(linear)(jnp.zeros_like(rhs))
        return jnp.linalg.solve(slope, rhs)

    x0 = lax.stop_gradient(x0)
    x, counts = lax.custom_root(residual, x0, solve, tangent_solve, has_aux=True)
    status, steps = lax.stop_gradient(counts).astype(jnp.int32)
    return Root(x, status, steps)


def _search(function, x0: Array, tolerance: Array, max_steps: int) -> _Search:
    def evaluate(x):
        slope, value = jax.jacfwd(lambda x: (function(x),) * 2, has_aux=True)(x)
        return value, slope

    def improve(now: _Search) -> _Search:
        # The start has not been evaluated yet: doing it here compiles the function only once.
        first = now.steps == 0
        correct, solvable = _corrections(now.slope, now.value, tolerance)
        full = correct(now.value)
        x = now.x + jnp.where(first, 0, now.length) * full
        value, slope = evaluate(x)
        finite = jnp.all(jnp.isfinite(value)) & jnp.all(jnp.isfinite(slope))
        size = lambda step: jnp.linalg.norm(step / tolerance)
        better = first | (finite & solvable & (size(correct(value)) <= size(full)))
        pick = lambda new, old: jnp.where(better, new, old)
        length = pick(jnp.minimum(_LONGER * now.length, 1), _SHORTER * now.length)
        close = solvable & jnp.all(jnp.abs(full) <= tolerance) & ~first
        status = jnp.where(now.steps >= max_steps, RootStatus.STEP_LIMIT, RootStatus.RUNNING)
        status = jnp.where(length < _SHORTEST, RootStatus.STALLED, status)
        status = jnp.where(close, RootStatus.CONVERGED, status)
        status = jnp.where(first & ~finite, RootStatus.NON_FINITE, status).astype(jnp.int32)
        best = pick(x, now.x), pick(value, now.value), pick(slope, now.slope)
        return _Search(*best, length, now.steps + 1, status)

    count = jnp.asarray(0, jnp.int32)
    eye = jnp.eye(x0.shape[0], dtype=x0.dtype)
    start = _Search(x0, x0, eye, jnp.ones((), x0.dtype), count, count + int(RootStatus.RUNNING))
    end = lax.while_loop(lambda now: now.status == RootStatus.RUNNING, improve, start)
    return end._replace(steps=end.steps - 1)


def _corrections(slope: Array, value: Array, tolerance: Array):
    """Return `value -> -J^-1 value` and whether J, scaled by its rows and columns, is regular."""
    row = jnp.abs(slope) @ tolerance
    row = jnp.where(row > 0, row, 1)
    factors = lu_factor(slope * tolerance[None] / row[:, None])
    correct = lambda value: -tolerance * lu_solve(factors, value / row)
    step = correct(value)
    left, whole = (value + slope @ step) / row, value / row
    solvable = jnp.all(jnp.isfinite(step)) & (jnp.linalg.norm(left) <= jnp.linalg.norm(whole) / 2)
    return correct, solvable
