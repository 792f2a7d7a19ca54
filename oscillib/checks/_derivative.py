"""Derivatives: forward, reverse and central differences must agree, leaf by leaf."""

from collections.abc import Callable
from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array

from .._validate import check_count
from ._failure import fail, named_leaves


def check_derivatives(
    f: Callable[..., Any],
    *args: Any,
    key: Array,
    directions: int = 2,
    rtol: float = 1e-6,
    names: tuple[str, ...] | None = None,
    must_move: bool = False,
) -> None:
    """Check that forward and reverse mode and central differences agree, for each leaf by itself.

    Along a random direction v of one leaf, and for a random weight w on the result,

        forward w.(J v) = reverse v.(J' w) = w.(f(x + e v) - f(x - e v)) / (2 e) + O(e^2)

    with e the fourth root of the precision times the size of the leaf, and the error of O(e^2)
    removed by a second difference with e/2 (Richardson). The tolerance is relative to the terms
    that are summed, plus what rounding leaves in a difference.

    Arguments:
        f: function of arrays or trees of arrays to one array or tree of arrays.
        args: the point, in 64-bit floats; integer and boolean leaves are held.
        key: random key of the directions.
        directions: directions for each leaf, default 2.
        rtol: tolerance relative to the terms of `w.(J v)`, default 1e-6.
        names: what to call the arguments in messages; default `argument 0`, ...
        must_move: fail too where no direction of a leaf changes the result: a parameter that is
            not used, or cut off from the derivative; default False.

    Raises:
        AssertionError: the derivatives disagree or are not finite; the message names the leaf.
        TypeError: a floating leaf is not in 64 bits.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_derivatives
        >>> x, key = jnp.array([0.3, 1.0]), jax.random.key(0)
        >>> check_derivatives(jnp.sin, x, key=key)
        >>> try:
        ...     check_derivatives(lambda x: jnp.sin(jax.lax.stop_gradient(x)), x, key=key)
        ... except AssertionError as problem:
        ...     print(str(problem)[:51])
        derivative along argument 0: result[0]: expected 0.

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    directions = check_count("directions", directions)
    names = tuple(f"argument {i}" for i in range(len(args))) if names is None else names
    flat, structure = jax.tree.flatten(args)
    labels = [n for arg, root in zip(args, names, strict=True) for n, _ in named_leaves(arg, root)]
    keys = jax.random.split(key, len(flat) * directions).reshape(len(flat), directions)
    for k, (leaf, label) in enumerate(zip(flat, labels, strict=True)):
        leaf = jnp.asarray(leaf)
        if not jnp.issubdtype(leaf.dtype, jnp.floating) or leaf.size == 0:
            continue
        if leaf.dtype != jnp.float64:
            raise TypeError(f"`{label}` is {leaf.dtype}; derivatives are checked in float64.")

        def along(x: Any, k: int = k) -> Array:
            out = f(*jax.tree.unflatten(structure, [*flat[:k], x, *flat[k + 1 :]]))
            parts = [jnp.ravel(jnp.asarray(o)) for o in jax.tree.leaves(out)]
            return jnp.concatenate([p.astype(jnp.float64) for p in parts])

        routes = jax.jit(partial(_routes, along))
        moved = [_compare(routes, leaf, label, one, rtol) for one in keys[k]]
        if must_move and not any(moved):
            fail(
                f"influence of {label}", expected="a derivative somewhere", got="0 everywhere",
                hint="does the function use it, and inside what is differentiated?",
            )  # fmt: skip


def _routes(along: Callable[[Any], Array], x: Array, v: Array, weight_key: Array, step: Array):
    """Return result, weight, and the derivative forward, in reverse, and by differences."""
    out, forward = jax.jvp(along, (x,), (v,))
    w = jax.random.normal(weight_key, out.shape, out.dtype)
    (back,) = jax.vjp(along, x)[1](w)

    def difference(e: Array) -> Array:
        return (along(x + e * v) - along(x - e * v)) / (2 * e)

    slope = (4 * difference(step / 2) - difference(step)) / 3
    return out, w, forward, back, slope


def _compare(routes: Callable, x: Array, label: str, key: Array, rtol: float) -> bool:
    """Compare the three along one direction; tell whether anything moved."""
    __tracebackhide__ = True
    direction_key, weight_key = jax.random.split(key)
    v = jax.random.normal(direction_key, x.shape, x.dtype)
    step = np.finfo(float).eps ** (1 / 4) * max(1.0, float(jnp.max(jnp.abs(x))))
    out, w, forward, back, slope = routes(x, v, weight_key, jnp.asarray(step))
    ahead, behind, apart = float(w @ forward), float(jnp.sum(v * back)), float(w @ slope)
    size = float(jnp.sum(jnp.abs(w * slope)) + jnp.sum(jnp.abs(w * forward)))
    # What rounding of the function's values leaves in the differences.
    blur = 100 * np.finfo(float).eps * float(jnp.sum(jnp.abs(w * out))) / step
    allowed = rtol * size + blur
    for name, got in {"forward mode": ahead, "reverse mode": behind}.items():
        if not np.isfinite(got) or not abs(got - apart) <= allowed:
            worst = _worst(forward, slope) if name == "forward mode" else None
            fail(
                f"derivative along {label}", leaf="result" if worst else "", index=worst,
                expected=f"{apart:.8g} of central differences, within {allowed:.1g}",
                got=f"{got:.8g} of {name}",
                hint="a custom rule, a stopped gradient, a kink, or an operation such as a root or "
                "an angle whose derivative is not finite here?",
            )  # fmt: skip
    return bool(jnp.any(forward != 0)) or apart != 0


def _worst(forward: Array, slope: Array) -> tuple[int, ...]:
    off = np.abs(np.asarray(forward - slope))
    return (int(np.argmax(np.where(np.isnan(off), np.inf, off))),)
