"""What every check raises: an AssertionError that names property, leaf, index, expected and got."""

from typing import Any, NoReturn

import jax
import numpy as np


def fail(
    prop: str,
    *,
    leaf: str = "",
    index: tuple[int, ...] | None = None,
    expected: Any,
    got: Any,
    hint: str = "",
) -> NoReturn:
    """Raise AssertionError: `<property>: <leaf>[index]: expected ..., got .... <hint>`."""
    __tracebackhide__ = True
    place = leaf
    if index:
        place += f"[{','.join(map(str, index))}]"
    where = f"{place}: " if place else ""
    tail = f"\n  {hint}" if hint else ""
    raise AssertionError(f"{prop}: {where}expected {expected}, got {got}.{tail}")


def assert_close(
    prop: str, actual: Any, expected: Any, *, rtol: float, atol: float, hint: str = ""
) -> None:
    """Fail unless both trees agree in structure, shapes, dtypes and, leaf by leaf, in values.

    A NaN is a failure, expected or not. The worst entry is the one farthest beyond its tolerance
    `atol + rtol |expected|`.
    """
    __tracebackhide__ = True
    structures = jax.tree.structure(actual), jax.tree.structure(expected)
    if structures[0] != structures[1]:
        fail(prop, expected=f"structure {structures[1]}", got=f"{structures[0]}", hint=hint)
    pairs = zip(named_leaves(actual), jax.tree.leaves(expected), strict=True)
    for (name, x), y in pairs:
        same_type(prop, name, x, y, hint)
        x, y = np.asarray(x, float), np.asarray(y, float)
        with np.errstate(invalid="ignore"):  # infinities
            excess = np.abs(x - y) - (atol + rtol * np.abs(y))
        excess = np.where(x == y, -np.inf, np.where(np.isnan(excess), np.inf, excess))
        if excess.size and excess.max() > 0:
            index = np.unravel_index(int(np.argmax(excess)), excess.shape)
            where = tuple(int(i) for i in index)
            got, want = (f"{v[index]:.6g}" for v in (x, y))
            if got == want:  # they differ further on
                got, want = (f"{v[index]:.17g}" for v in (x, y))
            text = f"{want} within {atol + rtol * abs(float(y[index])):.1g}"
            fail(prop, leaf=name, index=where, expected=text, got=got, hint=hint)


def same_type(prop: str, name: str, actual: Any, expected: Any, hint: str = "") -> None:
    """Fail unless shape and dtype agree."""
    __tracebackhide__ = True
    kinds = [
        f"shape {np.shape(x)}, {getattr(x, 'dtype', type(x).__name__)}" for x in (actual, expected)
    ]
    if kinds[0] != kinds[1]:
        fail(prop, leaf=name, expected=kinds[1], got=kinds[0], hint=hint)


def named_leaves(tree: Any, root: str = "") -> list[tuple[str, Any]]:
    """Return every leaf with its way from the root, such as `params.growth`."""
    found = jax.tree_util.tree_leaves_with_path(tree)
    return [(f"{root}{jax.tree_util.keystr(path)}", leaf) for path, leaf in found]
