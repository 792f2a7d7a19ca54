"""How the parameter arrays of every field are built and its state is checked."""

from typing import Any

import jax.numpy as jnp
from jaxtyping import Array

from .._validate import as_float, check_same_dtype, check_shape


def matching(name: str, value: Any, default: float, reference: tuple[str, Array]) -> Array:
    """Convert a parameter, or fill in its default, in the shape and dtype of a reference."""
    of, array = reference
    x = jnp.full_like(array, default) if value is None else as_float(value)
    check_shape(name, x, array.shape, f"that of `{of}`")
    check_same_dtype(name, x, of, array)
    return x


def scalar(name: str, value: Any, default: float, reference: tuple[str, Array]) -> Array:
    """Convert a scalar parameter, or fill in its default, in the dtype of a reference."""
    of, array = reference
    x = jnp.full((), default, array.dtype) if value is None else as_float(value)
    check_shape(name, x, (), "()")
    check_same_dtype(name, x, of, array)
    return x


def check_state(y: Array, components: int, reference: tuple[str, Array]) -> None:
    """Raise unless `y` has so many components, the nodes and the dtype of a parameter."""
    of, array = reference
    axes = "(component, node)" if array.ndim else "(component,)"
    check_shape("y", y, (components, *array.shape), axes)
    check_same_dtype("y", y, f"params.{of}", array)
