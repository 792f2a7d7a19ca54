"""Trees with other numbers in them: the same point in another precision, or beside itself."""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np


def is_float(x: Any) -> bool:
    """Tell whether a leaf is a floating number or an array of them; whole numbers are held."""
    numeric = isinstance(x, (float, int, np.ndarray, np.generic, jax.Array))
    return numeric and bool(jnp.issubdtype(jnp.result_type(x), jnp.floating))


def cast(tree: Any, dtype: Any) -> Any:
    """Convert floating leaves."""
    return jax.tree.map(lambda x: jnp.asarray(x, dtype) if is_float(x) else x, tree)


def scaled(tree: Any, by: float) -> Any:
    """Multiply floating leaves."""
    return jax.tree.map(lambda x: x * by if is_float(x) else x, tree)


def aside(y: Any, by: Any) -> Any:
    """Return states beside one, each entry moved by up to a half of itself.

    No entry changes its sign, since a field may be defined for positive ones only; one at zero
    moves up.
    """
    size = jnp.where(y == 0, jnp.max(jnp.abs(y), initial=0), y)
    return y + 0.5 * jnp.where(y == 0, jnp.abs(jnp.tanh(by)), jnp.tanh(by)) * size
