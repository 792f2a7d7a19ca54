"""Losses: what is masked does not count, and the truth is a minimum."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import check_count, check_floating, check_shape
from ._derivative import check_derivatives
from ._failure import fail, named_leaves


def check_mask(
    loss: Callable[[Any, Any, Any], Float[Array, ""]],
    params: Any,
    values: Float[Array, "*sample channel"],
    mask: Bool[Array, "*sample channel"] | Bool[np.ndarray, "*sample channel"],
    *,
    key: Array,
) -> None:
    """Check that masked entries change neither the value of a loss nor its gradient by one bit.

    They are set in turn to 0, NaN, both infinities, numbers so large that their squares overflow,
    and random numbers; value and gradient are compared as they are stored, and must be finite.
    The gradient is taken in every floating-point array of `params`. All this under `jit`, and with
    NaN outside it too: the compiler may turn a product with the mask into a choice, and hide a
    leak that other code would show. One observed entry is changed as well, and must change value or
    gradient: a loss that ignores its values would pass otherwise.

    Arguments:
        loss: `loss(params, values, mask) -> scalar`; bind what else it takes.
        params: PyTree of parameters.
        values: shape `(..., channel)`; what masked entries hold does not matter.
        mask: same shape, True where observed; some of both.
        key: random key of the random numbers.

    Raises:
        AssertionError: a masked entry counts, an observed one does not, or value or gradient is not
            finite.
        ValueError: shapes differ; the mask is all True or all False.
        TypeError: `values` is not floating, or `mask` not boolean.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.checks import check_mask
        >>> from oscillib.losses import reconstruction
        >>> loss = lambda params, values, mask: reconstruction(
        ...     jnp.broadcast_to(params, values.shape), values, mask, scale=jnp.ones(1))
        >>> mask = jnp.array([[True], [False], [True]])
        >>> check_mask(loss, jnp.array([0.5]), jnp.ones((3, 1)), mask, key=jax.random.key(0))
    """
    check_floating("values", values)
    values, mask = jnp.asarray(values), np.asarray(mask)
    check_shape("mask", mask, values.shape, "that of `values`")
    if mask.dtype != np.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    if mask.all() or not mask.any():
        raise ValueError("`mask` must hold observed and masked entries; got only one of them.")
    huge = float(jnp.finfo(values.dtype).max) / 4
    noise = generator(key).normal(size=values.shape)
    fills = {
        "NaN": jnp.nan,
        "inf": jnp.inf,
        "-inf": -jnp.inf,
        f"{huge:.2g}": huge,
        f"{-huge:.2g}": -huge,
        "random numbers": noise,
    }
    with_masked = lambda fill: jnp.where(mask, values, jnp.asarray(fill, values.dtype))
    evaluate = lambda x: _compiled(loss, params, x, jnp.asarray(mask))
    first = evaluate(with_masked(0))
    _check_finite(first, "0")
    for name, fill in fills.items():
        _check_same(evaluate(with_masked(fill)), first, name)
    plain = lambda fill: _evaluate(loss, params, with_masked(fill), jnp.asarray(mask))
    _check_same(plain(jnp.nan), plain(0), "NaN (outside jit)")
    index = tuple(int(i) for i in np.argwhere(mask)[0])
    changed = evaluate(with_masked(0).at[index].add(1))
    if _bits(changed[0]) == _bits(first[0]) and all(
        _bits(a) == _bits(b)
        for a, b in zip(jax.tree.leaves(changed[1]), jax.tree.leaves(first[1]), strict=True)
    ):
        fail(
            "observed entries count",
            leaf="values",
            index=index,
            expected="another value or gradient once this observed entry is changed by 1",
            got="the very same",
            hint="is the mask turned round? True is observed",
        )


def check_minimum(
    loss: Callable[[Any], Float[Array, ""]],
    truth: Any,
    *,
    key: Array,
    directions: int = 4,
    displacement: float = 1e-4,
) -> None:
    """Check that a loss on noise-free data has its minimum at the parameters that made the data.

        curvature d' H d >= 0,   minimum along d: |g'd| <= displacement d' H d

    along random directions `d`, each entry of which is as large as that parameter (1 where it is
    0); `g` and `H` are gradient and Hessian at `truth`. In some of them every parameter moves, in
    the others one leaf by itself: a stiff leaf hides nothing in a sloppy one. `displacement` is how
    far the minimum may be from the truth, relative to the parameters. The gradient itself is
    checked beside the truth by `check_derivatives`, if the parameters are in float64.

    Arguments:
        loss: `loss(params) -> scalar`, with noise-free data of `truth` bound.
        truth: PyTree of parameters; its floating-point arrays are what is varied.
        key: random key of the directions.
        directions: how many of all parameters together, and of each leaf; default 4.
        displacement: default 1e-4. In float32 rounding of the data alone may exceed it.

    Raises:
        AssertionError: the minimum is elsewhere; the truth is a maximum or saddle; the loss does
            not depend on any parameter, is not finite, or has a wrong gradient.
        ValueError: `directions` is below 1; the loss is not a scalar.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.checks import check_minimum
        >>> data = 3 * jnp.arange(4.0)
        >>> loss = lambda slope: jnp.sum((slope * jnp.arange(4.0) - data) ** 2)
        >>> check_minimum(loss, jnp.asarray(3.0), key=jax.random.key(0))
    """
    directions = check_count("directions", directions)
    random = generator(key)
    moving, fixed = eqx.partition(truth, eqx.is_inexact_array)
    scale = jax.tree.map(lambda x: np.where(np.asarray(x) == 0, 1, np.abs(x)), moving)
    draw = lambda x: jnp.asarray(x * random.normal(size=x.shape), x.dtype)
    beside = jax.tree.map(lambda x, size: x + 0.03 * draw(size), moving, scale)
    leaves, structure = jax.tree.flatten(scale)
    names = ["all parameters", *(name for name, _ in named_leaves(scale, "params"))]
    groups = np.repeat(np.arange(len(names)), directions)
    masks = [(groups == 0) | (groups == k + 1) for k in range(len(leaves))]
    along = [
        jnp.asarray(np.stack([m * x * random.normal(size=x.shape) for m in mask]), x.dtype)
        for x, mask in zip(leaves, masks, strict=True)
    ]
    value, gradient, slopes, curvatures, elsewhere = _second_order(
        loss, moving, fixed, beside, jax.tree.unflatten(structure, along)
    )
    _check_finite((value, gradient), "noise-free data")
    slopes, curvatures = np.asarray(slopes, float), np.asarray(curvatures, float)
    largest = np.max(np.abs(curvatures))
    if largest == 0 and not np.any(slopes):
        _no_minimum(
            "the loss depends on the parameters",
            "curvature along random directions",
            "a loss that is constant at the truth",
            "bind the data, and use every parameter",
        )
    own = np.abs(curvatures).reshape(-1, directions).max(axis=1)[groups]
    k = int(np.argmin(curvatures + 1e-6 * own + 1e-10 * largest))
    if curvatures[k] < -1e-6 * own[k] - 1e-10 * largest:
        got = f"curvature {curvatures[k]:.3g} along a direction of {names[groups[k]]}"
        hint = "the truth is a maximum or a saddle: check the sign"
        _no_minimum("curvature at the truth", "no negative curvature", got, hint)
    # A flat direction leaves the rounding of terms that cancel at the truth, not beside it.
    blur = 1e3 * float(np.finfo(value.dtype).eps) * float(np.max(np.abs(elsewhere)))
    with np.errstate(divide="ignore", invalid="ignore"):
        away = np.maximum(np.abs(slopes) - blur, 0) / np.abs(curvatures)
    away = np.nan_to_num(away, nan=0.0, posinf=np.inf)
    k = int(np.argmax(away))
    if away[k] > displacement:
        where = gradient if groups[k] == 0 else jax.tree.leaves(gradient)[groups[k] - 1]
        sizes = scale if groups[k] == 0 else leaves[groups[k] - 1]
        leaf, index, worst = _steepest(where, sizes)
        fail(
            "gradient at the truth",
            leaf=leaf if groups[k] == 0 else names[groups[k]],
            index=index,
            expected=f"0 (minimum within {displacement:.1g} of the truth)",
            got=f"{worst:.6g} (minimum {away[k]:.3g} of the parameters away)",
            hint="the data must be noise-free data of `truth`; look for an offset in the loss",
        )
    # Differences mean nothing in single precision.
    if all(x.dtype == jnp.float64 for x in jax.tree.leaves(moving)):
        compiled = eqx.filter_jit(loss)
        point = eqx.combine(beside, fixed)
        check_derivatives(compiled, point, key=jax.random.fold_in(key, 0), names=("params",))


def _evaluate(loss: Any, params: Any, values: Array, mask: Array) -> tuple[Array, Any]:
    return eqx.filter_value_and_grad(lambda p: _scalar(loss(p, values, mask)))(params)


_compiled = eqx.filter_jit(_evaluate)


def generator(key: Array) -> np.random.Generator:
    """Return a generator of the host: draws of many shapes, with nothing to compile."""
    return np.random.default_rng(np.asarray(jax.random.key_data(key)).ravel())


@eqx.filter_jit
def _second_order(
    loss: Any, moving: Any, fixed: Any, beside: Any, along: Any
) -> tuple[Any, Any, Array, Array, Array]:
    at = lambda p: _scalar(loss(eqx.combine(p, fixed)))
    value, gradient = jax.value_and_grad(at)(moving)
    elsewhere = jax.grad(at)(beside)

    def one(d):
        slope, bend = jax.jvp(jax.grad(at), (moving,), (d,))
        return _inner(slope, d), _inner(bend, d), _inner(elsewhere, d)

    return value, gradient, *jax.vmap(one)(along)


def _scalar(value: Any) -> Array:
    value = jnp.asarray(value)
    if value.shape != ():
        raise ValueError(f"`loss` must return a scalar, shape (); got shape {value.shape}.")
    return value


def _inner(a: Any, b: Any) -> Array:
    parts = [jnp.sum(x * y) for x, y in zip(jax.tree.leaves(a), jax.tree.leaves(b), strict=True)]
    return sum(parts[1:], parts[0])


def _named(tree: Any) -> list[tuple[str, np.ndarray]]:
    return [(name, np.asarray(leaf)) for name, leaf in named_leaves(tree, "params")]


def _steepest(gradient: Any, scale: Any) -> tuple[str, tuple[int, ...], float]:
    best: tuple[str, tuple[int, ...], float] = ("params", (), 0.0)
    most = -1.0
    for (name, g), (_, size) in zip(_named(gradient), _named(scale), strict=True):
        if g.size and np.max(np.abs(g * size)) > most:
            index = tuple(int(i) for i in np.unravel_index(np.argmax(np.abs(g * size)), g.shape))
            best, most = (name, index, float(g[index])), float(np.max(np.abs(g * size)))
    return best


def _bits(x: Any) -> bytes:
    return np.asarray(x).tobytes()


def _check_finite(out: tuple[Array, Any], fill: str) -> None:
    for what, tree in (("value", out[0]), ("gradient", out[1])):
        for name, leaf in _named(tree):
            if not np.all(np.isfinite(leaf)):
                index = tuple(int(i) for i in np.argwhere(~np.isfinite(leaf))[0])
                fail(
                    f"finite {what}",
                    leaf="loss" if what == "value" else name,
                    index=index,
                    expected=f"a finite {what} with {fill}",
                    got=leaf[index],
                    hint="look for a division, logarithm or root of zero",
                )


def _check_same(out: tuple[Array, Any], first: tuple[Array, Any], fill: str) -> None:
    for what, tree, base in (("value", out[0], first[0]), ("gradient", out[1], first[1])):
        for (name, got), (_, expected) in zip(_named(tree), _named(base), strict=True):
            if _bits(got) == _bits(expected):
                continue
            differ = np.atleast_1d((got != expected) | (np.signbit(got) != np.signbit(expected)))
            index = tuple(int(i) for i in np.argwhere(differ)[0])[: got.ndim]
            fail(
                f"masked entries do not change the {what}",
                leaf="loss" if what == "value" else name,
                index=index,
                expected=f"{expected[index]} to the bit, as with 0 in masked entries",
                got=f"{got[index]} with {fill} in masked entries",
                hint="replace masked entries before the arithmetic with `jnp.where`, and mask the "
                "terms again after it",
            )


def _no_minimum(prop: str, expected: str, got: str, hint: str) -> None:
    fail(prop, leaf="loss", index=None, expected=expected, got=got, hint=hint)
