"""Leaves of a tree as plain numpy arrays with a description, and back; host-side."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax.core import Tracer


NATIVE = "biufc"


class Kind(NamedTuple):
    """What makes two leaves interchangeable.

    Attributes:
        kind: `array`, `key` (of random numbers), or `bool`, `int`, `float`, `complex` (Python's).
        shape: of the array, or of the array of keys.
        dtype: its name; of a key that of its data.
        impl: name of a key's implementation, otherwise empty.
    """

    kind: str
    shape: tuple[int, ...]
    dtype: str
    impl: str = ""

    def __str__(self) -> str:
        """Return it in words."""
        if self.kind == "array":
            return f"{self.dtype} of shape {self.shape}"
        if self.kind == "key":
            return f"random keys {self.impl!r} of shape {self.shape}"
        return f"a Python {self.kind}"


def is_data(leaf: Any) -> bool:
    """Tell whether a leaf is saved; anything else (a function, a text) is structure."""
    return isinstance(
        leaf, jax.Array | np.ndarray | np.generic | bool | int | float | complex
    ) or isinstance(leaf, jax.ShapeDtypeStruct)


def is_key(leaf: Any) -> bool:
    """Tell whether a leaf holds typed keys of random numbers."""
    return isinstance(leaf, jax.Array) and jnp.issubdtype(leaf.dtype, jax.dtypes.prng_key)


def is_weak(leaf: Any) -> bool:
    """Tell whether an array gives way to other dtypes, as one made from a Python number does."""
    return isinstance(leaf, jax.Array) and not is_key(leaf) and jax.typeof(leaf).weak_type


def kind_of(name: str, leaf: Any) -> Kind:
    """Describe a leaf, or raise where it is of a kind that cannot be saved."""
    if isinstance(leaf, Tracer):
        raise TypeError(
            f"`{name}` must hold known values, because this function runs on the host; got a "
            "traced array. Fix: call it outside `jit`."
        )
    if is_key(leaf):
        data = jax.random.key_data(leaf)
        return Kind("key", leaf.shape, data.dtype.name, str(jax.random.key_impl(leaf)))
    if isinstance(leaf, bool | int | float | complex) and not isinstance(leaf, np.generic):
        return Kind(type(leaf).__name__, (), "")
    dtype = np.dtype(leaf.dtype) if not isinstance(leaf, jax.ShapeDtypeStruct) else leaf.dtype
    masked = isinstance(leaf, np.ma.MaskedArray)
    if masked or jnp.issubdtype(dtype, jax.dtypes.extended) or not _is_number(dtype):
        raise TypeError(
            f"`{name}` must hold numbers; got {'a masked array' if masked else dtype}. Fix: an "
            "array of numbers; keep everything else out of the tree, or as a static field."
        )
    return Kind("array", tuple(leaf.shape), dtype.name)


def to_numpy(name: str, leaf: Any) -> np.ndarray:
    """Return the values of a leaf in a dtype that numpy's file format knows."""
    if is_key(leaf):
        leaf = jax.random.key_data(leaf)
    if isinstance(leaf, jax.Array) and not (leaf.is_fully_addressable or leaf.is_fully_replicated):
        raise ValueError(
            f"`{name}` must be known to this process; it is spread over several. Fix: gather it "
            "first, such as by `jax.jit(lambda x: x, out_shardings=replicated)`."
        )
    values = np.asarray(leaf)
    if values.dtype == object:  # a Python int of more than 64 bits
        raise ValueError(f"`{name}` must fit into 64 bits; got {leaf}.")
    if values.dtype.kind in NATIVE:
        return values.astype(values.dtype.newbyteorder("="), copy=False)
    # Formats that numpy does not know (bfloat16, 8-bit floats) are written as their bits.
    return values.view(f"u{values.dtype.itemsize}")


def from_numpy(values: np.ndarray, like: Any, weak: bool) -> Any:
    """Return values as a leaf of the kind of `like`, where `like` is placed."""
    if is_key(like):
        data = from_numpy(values, jax.random.key_data(like), False)
        return jax.random.wrap_key_data(data, impl=jax.random.key_impl(like))
    if isinstance(like, bool | int | float | complex) and not isinstance(like, np.generic):
        return type(like)(values.item())
    if values.dtype != like.dtype:
        values = values.view(like.dtype)
    if isinstance(like, np.generic):
        return values[()]
    if isinstance(like, np.ndarray):
        return values
    if isinstance(like, jax.ShapeDtypeStruct) or not like.committed:
        return _weak(values) if weak else jnp.asarray(values)
    if like.is_fully_addressable:
        return jax.device_put(_weak(values) if weak else values, like.sharding)
    return jax.make_array_from_callback(values.shape, like.sharding, lambda index: values[index])


def _weak(values: np.ndarray) -> jax.Array:
    """Return values as an array that gives way to other dtypes."""
    array = jnp.full(values.shape, values.dtype.type(0).item())
    return array.at[...].set(values) if array.dtype == values.dtype else jnp.asarray(values)


def _is_number(dtype: Any) -> bool:
    return jnp.issubdtype(dtype, jnp.number) or jnp.issubdtype(dtype, jnp.bool_)
