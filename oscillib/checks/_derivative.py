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
    unmoved: tuple[str, ...] = (),
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
        unmoved: labels of leaves, as in messages, of which that is not asked.

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
    places = [k for k, leaf in enumerate(flat) if _floats(leaf) and np.size(leaf)]
    point = [jnp.asarray(flat[k]) for k in places]
    for k, leaf in zip(places, point, strict=True):
        if leaf.dtype != jnp.float64:
            raise TypeError(f"`{labels[k]}` is {leaf.dtype}; derivatives are checked in float64.")

    def along(xs: list[Array]) -> Array:
        leaves = list(flat)
        for k, x in zip(places, xs, strict=True):
            leaves[k] = x
        out = f(*jax.tree.unflatten(structure, leaves))
        parts = [jnp.ravel(jnp.asarray(o)) for o in jax.tree.leaves(out)]
        return jnp.concatenate([p.astype(jnp.float64) for p in parts])

    routes = jax.jit(partial(_routes, along))
    for i, k in enumerate(places):
        keys = jax.random.split(jax.random.fold_in(key, k), directions)
        moved = [_compare(routes, point, i, labels[k], one, rtol) for one in keys]
        if labels[k] not in unmoved and must_move and not any(moved):
            fail(
                f"influence of {labels[k]}", expected="a derivative somewhere",
                got="0 everywhere",
                hint="does the function use it, and inside what is differentiated?",
            )  # fmt: skip


def _floats(leaf: Any) -> bool:
    return jnp.issubdtype(jnp.result_type(leaf), jnp.floating)


def _routes(along: Callable, xs: list[Array], vs: list[Array], weight_key: Array, step: Array):
    """Return result, weight, and the derivative forward, in reverse, and by differences."""
    out, forward = jax.jvp(along, (xs,), (vs,))
    w = jax.random.normal(weight_key, out.shape, out.dtype)
    (backs,) = jax.vjp(along, xs)[1](w)
    # Leaf by leaf: a NaN of one that is held must not spoil the sum.
    behind = sum(jnp.sum(jnp.where(v == 0, 0, v * b)) for v, b in zip(vs, backs, strict=True))

    def difference(e: Array) -> Array:
        ahead = along([x + e * v for x, v in zip(xs, vs, strict=True)])
        return (ahead - along([x - e * v for x, v in zip(xs, vs, strict=True)])) / (2 * e)

    slope = (4 * difference(step / 2) - difference(step)) / 3
    return out, w, forward, behind, slope


def _compare(
    routes: Callable, point: list[Array], i: int, label: str, key: Array, rtol: float
) -> bool:
    """Compare the three along one direction of leaf `i`; tell whether anything moved."""
    __tracebackhide__ = True
    direction_key, weight_key = jax.random.split(key)
    vs = [jnp.zeros_like(x) for x in point]
    vs[i] = jax.random.normal(direction_key, point[i].shape, point[i].dtype)
    step = np.finfo(float).eps ** (1 / 4) * max(1.0, float(jnp.max(jnp.abs(point[i]))))
    out, w, forward, behind, slope = routes(point, vs, weight_key, jnp.asarray(step))
    ahead, behind, apart = float(w @ forward), float(behind), float(w @ slope)
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
    # A difference that is only rounding is no movement.
    return bool(jnp.any(forward != 0) | (abs(apart) > allowed))


def _worst(forward: Array, slope: Array) -> tuple[int, ...]:
    off = np.abs(np.asarray(forward - slope))
    return (int(np.argmax(np.where(np.isnan(off), np.inf, off))),)
