"""Roots of small systems by a damped Newton method that never raises and has exact derivatives."""

from collections.abc import Callable
from enum import IntEnum
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jax.scipy.linalg import solve_triangular
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
    RootStatus.AT_REST: "at rest: the search for a cycle ended at a fixed point",
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
    damping: Array
    steps: Array
    status: Array


# The first steps are short where the slopes nearly cancel; each success makes them bolder.
_FIRST_DAMPING = 1e-3
_CHANGE = 10.0
# Beyond this the steps are too short to get anywhere.
_GREATEST_DAMPING = 1e8


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

    Levenberg-Marquardt with unknowns scaled by their slopes: each step solves
    `min |F + J p|^2 + damping |D p|^2`. Converged when the undamped step is below `tolerance` in
    every entry. Derivatives, in both modes and of any order, are those of the implicit function
    theorem, `dx = -J^-1 dF`; they do not see the iteration, nor `x0`.
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
        step = _damped_step(now.slope, now.value, now.damping)
        remaining = _damped_step(now.slope, now.value, jnp.zeros_like(now.damping))
        x = now.x + step
        value, slope = evaluate(x)
        better = _finite(value, slope) & (jnp.sum(value**2) <= jnp.sum(now.value**2))
        pick = lambda new, old: jnp.where(better, new, old)
        damping = pick(now.damping / _CHANGE, now.damping * _CHANGE)
        steps = now.steps + 1
        status = jnp.where(steps >= max_steps, RootStatus.STEP_LIMIT, RootStatus.RUNNING)
        status = jnp.where(damping > _GREATEST_DAMPING, RootStatus.STALLED, status)
        close = jnp.all(jnp.abs(remaining) <= tolerance)
        status = jnp.where(close, RootStatus.CONVERGED, status).astype(jnp.int32)
        return _Search(
            pick(x, now.x), pick(value, now.value), pick(slope, now.slope), damping, steps, status
        )

    value, slope = evaluate(x0)
    status = jnp.where(_finite(value, slope), RootStatus.RUNNING, RootStatus.NON_FINITE)
    start = _Search(
        x0,
        value,
        slope,
        jnp.asarray(_FIRST_DAMPING, x0.dtype),
        jnp.asarray(0, jnp.int32),
        status.astype(jnp.int32),
    )
    return lax.while_loop(lambda now: now.status == RootStatus.RUNNING, improve, start)


def _damped_step(slope: Array, value: Array, damping: Array) -> Array:
    """Minimise `|value + slope p|^2 + damping |scale p|^2`, without squaring the condition."""
    n, eps = value.shape[0], jnp.finfo(value.dtype).eps
    scale = jnp.linalg.norm(slope, axis=0)
    scale = jnp.where(scale > 0, scale, 1)
    # The floor lets a singular slope give a long step that is then refused, rather than NaN.
    root = jnp.maximum(jnp.sqrt(damping), eps)
    stacked = jnp.concatenate([slope / scale[None], root * jnp.eye(n, dtype=value.dtype)])
    q, r = jnp.linalg.qr(stacked)
    return -solve_triangular(r, q[:n].T @ value) / scale


def _finite(value: Array, slope: Array) -> Array:
    return jnp.all(jnp.isfinite(value)) & jnp.all(jnp.isfinite(slope))
