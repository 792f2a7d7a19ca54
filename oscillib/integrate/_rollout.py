"""Rollout over a fixed grid, in segments that bound the memory of reverse mode."""

from collections.abc import Callable
from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float

from .._validate import as_float, check_count, check_floating, check_same_dtype, check_shape
from ._types import Scalar, State, Step


def rollout(
    step: Step,
    params: Any,
    y0: State,
    h: Float[Array, "..."] | float,
    steps: int | None = None,
    *,
    t0: Scalar | float = 0.0,
    segment: int | None = None,
) -> Float[Array, "time *state"]:
    """Roll a step out from one start: `y_(k+1) = advance(t_k, y_k)`.

    Time is the step index times `h`, counted from `t0`, so no digits are lost at late times.

    Arguments:
        step: `step(params, h) -> advance`, from this room or your own.
        params: PyTree of parameters, handed to `step`.
        y0: start, shape `(*state)`.
        h: step size in time units: a scalar, or one for each step, shape `(steps,)`. A scalar lets
            the step prepare itself once; an array makes it prepare anew at each step.
        steps: number of steps; required with a scalar `h`, otherwise taken from its length.
        t0: time of `y0`, handed on to the field; default 0.
        segment: number of steps between stored states in reverse mode, which then recomputes
            within a segment: memory for `steps / segment + segment` states instead of `steps`,
            least near the square root of `steps`. Default `None`: store all. Same values.

    Returns:
        States at the start and after each step, shape `(steps + 1, *state)`.

    Raises:
        ValueError: shape of `h`; `steps` missing or contradicting `h`; `advance` returns another
            shape than `y0`.
        TypeError: `y0` is not floating; `h` differs from it in dtype; `steps` or `segment` is not
            an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import rk4, rollout
        >>> ys = rollout(rk4(lambda t, y, params: -y), None, jnp.array([1.0]), 0.5, 2)
        >>> print(ys.ravel().round(4))
        [1.     0.6068 0.3682]
    """
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    h = _matching("h", h, y0)
    t0 = _matching("t0", t0, y0)
    check_shape("t0", t0, (), "()")
    steps = _count_steps(h, steps)
    check_advance(step, params, y0, h)

    if h.ndim == 0:
        prepared = step(params, h)
        xs = (t0 + h * jnp.arange(steps).astype(h.dtype), None)
    else:
        prepared = None
        before = jnp.concatenate([jnp.zeros_like(h[:1]), jnp.cumsum(h)[:-1]])
        xs = (t0 + before, h)

    # Reverse mode computes a step again from its start rather than store all that is within it:
    # less memory, and on the CPU also faster. A scan needs no guard against common subexpressions.
    @partial(jax.checkpoint, prevent_cse=False)
    def body(y, x):
        t, interval = x
        advance = step(params, interval) if prepared is None else prepared
        y = advance(t, y)
        return y, y

    _, ys = segmented_scan(body, y0, xs, segment=segment)
    return jnp.concatenate([y0[None], ys])


def segmented_scan(
    body: Callable, carry: Any, xs: Any, *, segment: int | None = None
) -> tuple[Any, Any]:
    """Scan as `jax.lax.scan` does, storing only one carry a segment for reverse mode.

    Arguments:
        body: `body(carry, x) -> (carry, y)`.
        carry: initial carry, any PyTree.
        xs: PyTree of arrays whose first axis is scanned over; at least one array.
        segment: steps a segment, the last one may be shorter; default `None`: a plain scan.

    Returns:
        The last carry, and the `y`s stacked along the first axis.

    Raises:
        ValueError: `xs` holds no array, or arrays of several lengths; `segment` is below 1.
        TypeError: `segment` is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import segmented_scan
        >>> body = lambda total, x: (total + x, total + x)
        >>> segmented_scan(body, 0.0, jnp.arange(5.0), segment=2)[1]
        Array([ 0.,  1.,  3.,  6., 10.], dtype=float64)

    Source: common practice, no source.
    """
    leaves = jax.tree.leaves(xs)
    if not leaves:
        raise ValueError("`xs` must hold at least one array to scan over; got none.")
    lengths = {leaf.shape[0] for leaf in leaves}
    if len(lengths) > 1:
        raise ValueError(f"`xs` must hold arrays of one length; got {sorted(lengths)}.")
    length = leaves[0].shape[0]
    if segment is None or check_count("segment", segment) >= length:
        return lax.scan(body, carry, xs)

    full = length // segment * segment
    head = jax.tree.map(lambda x: x[:full].reshape(full // segment, segment, *x.shape[1:]), xs)
    tail = jax.tree.map(lambda x: x[full:], xs)
    inner = jax.checkpoint(lambda c, x: lax.scan(body, c, x))
    carry, ys = lax.scan(inner, carry, head)
    ys = jax.tree.map(lambda y: y.reshape(full, *y.shape[2:]), ys)
    if full == length:
        return carry, ys
    carry, rest = inner(carry, tail)
    return carry, jax.tree.map(lambda a, b: jnp.concatenate([a, b]), ys, rest)


def check_advance(step: Step, params: Any, y0: Array, h: Array) -> None:
    """Raise unless one step of `step` keeps the shape and dtype of the state."""
    first = h if h.ndim == 0 else h[0]
    out = jax.eval_shape(lambda p, y, k: step(p, k)(k, y), params, y0, first)
    if getattr(out, "shape", None) != y0.shape or out.dtype != y0.dtype:
        got = f"{out.shape} {out.dtype}" if hasattr(out, "shape") else type(out).__name__
        raise ValueError(
            f"`step(params, h)(t, y)` must keep the shape and dtype of `y0`, {y0.shape} "
            f"{y0.dtype}; got {got}. Fix: build state, parameters and constants in one precision."
        )


def _matching(name: str, x: Any, y0: Array) -> Array:
    # A Python or integer scalar takes the state's precision; an array must already have it.
    if isinstance(x, jax.Array) or hasattr(x, "dtype"):
        x = as_float(x)
        check_same_dtype(name, x, "y0", y0)
        return x
    return jnp.asarray(x, dtype=y0.dtype)


def _count_steps(h: Array, steps: int | None) -> int:
    if h.ndim == 0:
        if steps is None:
            raise ValueError("`steps` must be given when `h` is a scalar; got None.")
        return check_count("steps", steps)
    if h.ndim != 1 or h.shape[0] == 0:
        raise ValueError(f"`h` must be a scalar or have shape (steps,); got shape {h.shape}.")
    if steps is not None and steps != h.shape[0]:
        raise ValueError(f"`steps` must agree with `h` of shape {h.shape}; got steps={steps}.")
    return h.shape[0]
