"""Checks of arguments that every room shares: each returns the value or names what is wrong.

Shapes, dtypes and structure are known while a function is traced, so these raise under `jit` too.
Checks of values apply only where the values are known (`is_concrete`); inside `jit` a bad value
comes back as a status of the result instead.
"""

from collections.abc import Callable
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jax.core import Tracer


def is_concrete(*arrays: Any) -> bool:
    """Tell whether the values of all arrays are known now (none is a tracer)."""
    return not any(isinstance(a, Tracer) for a in arrays)


def as_float(x: Any) -> jax.Array:
    """Convert to a strongly typed float array: floats keep their dtype, others get the default.

    A weakly typed scalar would make a compiled function trace again for the first strong one.
    """
    if not isinstance(x, jax.Array | np.ndarray):
        # A list may hold arrays that are being traced, which numpy cannot take.
        traced = any(isinstance(leaf, Tracer) for leaf in jax.tree.leaves(x))
        x = jnp.asarray(x) if traced else np.asarray(x)
    default = jnp.zeros(()).dtype
    dtype = x.dtype if jnp.issubdtype(x.dtype, jnp.floating) else default
    return jnp.asarray(x, dtype=jax.dtypes.canonicalize_dtype(dtype))


def check_shape(name: str, x: Any, expected: tuple[int | None, ...], axes: str) -> None:
    """Raise ValueError unless `x` has the expected shape; `None` in `expected` allows any length.

    `axes` is how the documentation writes the shape, such as `(time, channel)`.
    """
    got = jnp.shape(x)
    fits = len(got) == len(expected) and all(
        e is None or e == g for e, g in zip(expected, got, strict=True)
    )
    if not fits:
        sizes = ", ".join("any" if e is None else str(e) for e in expected)
        raise ValueError(f"`{name}` must have shape {axes} = ({sizes}); got shape {got}.")


def check_same_dtype(name: str, x: Any, reference_name: str, reference: Any) -> None:
    """Raise TypeError unless both arrays have one dtype: nothing is promoted silently."""
    got, expected = jnp.asarray(x).dtype, jnp.asarray(reference).dtype
    if got != expected:
        raise TypeError(
            f"`{name}` is {got} but `{reference_name}` is {expected}; they must agree. "
            f"Fix: `{name}.astype({reference_name}.dtype)`, or build both in one precision."
        )


def check_floating(name: str, x: Any) -> None:
    """Raise TypeError unless the array holds real floating-point numbers."""
    dtype = jnp.asarray(x).dtype
    if not jnp.issubdtype(dtype, jnp.floating):
        raise TypeError(
            f"`{name}` must hold real floating-point numbers; got dtype {dtype}. "
            f"Fix: `jnp.asarray({name}, dtype=float)`."
        )


def check_count(name: str, n: Any, *, least: int = 1) -> int:
    """Return `n` as an int, or raise unless it is a whole number of at least `least`."""
    if isinstance(n, bool) or not isinstance(n, int | np.integer):
        raise TypeError(
            f"`{name}` must be a Python int, because it sets array shapes; got {type(n).__name__}."
        )
    if n < least:
        raise ValueError(f"`{name}` must be at least {least}; got {n}.")
    return int(n)


def check_values(name: str, x: Any, good: Callable[[Any], Any], expected: str) -> None:
    """Raise ValueError naming the first entry for which `good` is False; silent on tracers."""
    if not is_concrete(x):
        return
    x = np.asarray(x)
    bad = np.argwhere(~np.asarray(good(x), dtype=bool).reshape(x.shape))
    if len(bad):
        index = tuple(int(i) for i in bad[0])
        where = f" at index {', '.join(map(str, index))}" if index else ""
        raise ValueError(f"`{name}` must be {expected}; got {x[index]}{where}.")
