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
from ._tree import is_float


def check_derivatives(
    f: Callable[..., Any],
    *args: Any,
    key: Array,
    directions: int = 2,
    rtol: float = 1e-6,
    names: tuple[str, ...] | None = None,
) -> None:
    """Check that forward and reverse mode and central differences agree, for each leaf by itself.

    Along a random direction v of one leaf, and for a random weight w on the result,

        forward w.(J v) = reverse v.(J' w) = w.(f(x + e v) - f(x - e v)) / (2 e) + O(e^2)

    with e the fourth root of the precision times the size of the leaf, and the error of O(e^2)
    removed by a second difference with e/2 (Richardson). Forward mode and differences are compared
    entry by entry of the result, each within the tolerance relative to itself, plus what rounding
    leaves in a difference and what both differences disagree by.

    Arguments:
        f: function of arrays or trees of arrays to one array or tree of arrays.
        args: the point, in 64-bit floats; integer and boolean leaves are held.
        key: random key of the directions.
        directions: directions for each leaf, default 2.
        rtol: tolerance relative to each entry of `J v`, default 1e-6.
        names: what to call the arguments in messages; default `argument 0`, ...

    Raises:
        AssertionError: the derivatives disagree or are not finite; the message names the leaf.
        TypeError: a floating leaf is not in 64 bits.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_derivatives
        >>> x, key = jnp.array([0.3]), jax.random.key(0)
        >>> check_derivatives(jnp.sin, x, key=key)
        >>> try:
        ...     check_derivatives(lambda x: jnp.sin(jax.lax.stop_gradient(x)), x, key=key)
        ... except AssertionError as problem:
        ...     print(str(problem)[:39])
        derivative along argument 0: result[0]:

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    directions = check_count("directions", directions)
    names = tuple(f"argument {i}" for i in range(len(args))) if names is None else names
    flat, structure = jax.tree.flatten(args)
    labels = [n for arg, root in zip(args, names, strict=True) for n, _ in named_leaves(arg, root)]
    places = [k for k, leaf in enumerate(flat) if is_float(leaf) and np.size(leaf)]
    point = [jnp.asarray(flat[k]) for k in places]
    for k, leaf in zip(places, point, strict=True):
        if leaf.dtype != jnp.float64:
            raise TypeError(f"`{labels[k]}` is {leaf.dtype}; derivatives are checked in float64.")

    def whole(xs: list[Array]) -> Any:
        leaves = list(flat)
        for k, x in zip(places, xs, strict=True):
            leaves[k] = x
        return f(*jax.tree.unflatten(structure, leaves))

    def along(xs: list[Array]) -> Array:
        parts = [jnp.ravel(jnp.asarray(o)) for o in jax.tree.leaves(whole(xs))]
        return jnp.concatenate([p.astype(jnp.float64) for p in parts])

    # A place in the flat result, by its name.
    where = [
        (name, index)
        for name, out in named_leaves(jax.eval_shape(whole, point), "result")
        for index in np.ndindex(*out.shape)
    ]
    routes = jax.jit(partial(_routes, along))
    for i, k in enumerate(places):
        for one in jax.random.split(jax.random.fold_in(key, k), directions):
            _compare(routes, point, i, labels[k], one, rtol, where)


def _routes(along: Callable, xs: list[Array], vs: list[Array], weight_key: Array, step: Array):
    """Return result, weight, the derivative forward, in reverse, and by differences, its error."""
    out, forward = jax.jvp(along, (xs,), (vs,))
    w = jax.random.normal(weight_key, out.shape, out.dtype)
    (backs,) = jax.vjp(along, xs)[1](w)
    # Leaf by leaf: a NaN of one that is held must not spoil the sum.
    terms = [jnp.where(v == 0, 0, v * b) for v, b in zip(vs, backs, strict=True)]
    behind = sum(jnp.sum(x) for x in terms), sum(jnp.sum(jnp.abs(x)) for x in terms)

    def difference(e: Array) -> Array:
        ahead = along([x + e * v for x, v in zip(xs, vs, strict=True)])
        return (ahead - along([x - e * v for x, v in zip(xs, vs, strict=True)])) / (2 * e)

    wide, narrow = difference(step), difference(step / 2)
    return out, w, forward, behind, (4 * narrow - wide) / 3, jnp.abs(wide - narrow)


def _compare(
    routes: Callable,
    point: list[Array],
    i: int,
    label: str,
    key: Array,
    rtol: float,
    where: list[tuple[str, tuple[int, ...]]],
) -> None:
    """Compare the three along one direction of leaf `i`."""
    __tracebackhide__ = True
    direction_key, weight_key = jax.random.split(key)
    vs = [jnp.zeros_like(x) for x in point]
    vs[i] = jax.random.normal(direction_key, point[i].shape, point[i].dtype)
    prop = f"derivative along {label}"
    hint = (
        "a custom rule, a stopped gradient, a kink, or an operation such as a root or an angle "
        "whose derivative is not finite here?"
    )
    sizes = _sizes(float(jnp.max(jnp.abs(point[i]))))
    tries = [
        jax.tree.map(np.asarray, routes(point, vs, weight_key, jnp.asarray(_STEP * size)))
        for size in sizes
    ]
    _, w, forward, (behind, reach), *_ = tries[0]
    with np.errstate(all="ignore"):  # infinities
        slope, allowed = _most_trustworthy(tries, sizes, rtol)
        off = np.abs(forward - slope)
        bad = ~(np.isfinite(forward) & (off <= allowed))
        excess = np.where(bad, np.nan_to_num(off / allowed, nan=np.inf), -1)
    if np.any(bad):
        worst = int(np.argmax(excess))
        fail(
            prop, leaf=where[worst][0], index=where[worst][1],
            expected=f"{slope[worst]:.8g} of central differences, within {allowed[worst]:.1g}",
            got=f"{forward[worst]:.8g} of forward mode", hint=hint,
        )  # fmt: skip
    # The two modes differ by rounding only.
    ahead, rounding = float(w @ forward), 1e-9 * float(np.abs(w) @ np.abs(forward) + reach)
    if not abs(behind - ahead) <= rounding:
        fail(
            prop, expected=f"{ahead:.8g} of forward mode, within {rounding:.1g}",
            got=f"{behind:.8g} of reverse mode", hint=hint,
        )  # fmt: skip


def _most_trustworthy(tries: list, sizes: tuple[float, ...], rtol: float) -> tuple[Any, Any]:
    """Return differences and their tolerances: of several steps the better, entry by entry."""
    slopes, errors, bounds = [], [], []
    for size, (out, *_, slope, spread) in zip(sizes, tries, strict=True):
        # What rounding of the values leaves, each entry by itself: a small one must not hide
        # behind a large one.
        blur = np.finfo(float).eps * (100 * np.abs(out) + 10 * np.max(np.abs(out), initial=0))
        known = rtol * np.abs(slope) + blur / (_STEP * size)
        # Of a smooth function two differences agree to a few digits at least; steps do not.
        most = 1e-3 * (np.abs(slope) + np.max(np.abs(slope), initial=0))
        slopes.append(slope)
        errors.append(known + 10 * spread)
        bounds.append(known + np.minimum(10 * spread, most))
    better = np.argmin(np.nan_to_num(errors, nan=np.inf), axis=0)
    return np.choose(better, slopes), np.choose(better, bounds)


def _sizes(largest: float) -> tuple[float, ...]:
    """Return the sizes that the steps are scaled to.

    Small numbers may be what they are (a short time constant) or stand near zero on a scale of 1.
    """
    return (1.0, largest) if 0 < largest < 0.1 else (max(1.0, largest),)


_STEP = float(np.finfo(float).eps ** (1 / 4))
