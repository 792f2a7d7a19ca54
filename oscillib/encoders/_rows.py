"""Work along time whose rounding does not depend on how many rows there are."""

from collections.abc import Callable

import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float


def by_row(
    function: Callable[[Array], Array], rows: Float[Array, "time input"]
) -> Float[Array, "time output"]:
    """Apply a function to every row, one after the other.

    A product of all rows with a matrix at once may round a row otherwise when there are more of
    them, and a padded recording would then differ from the bare one in the last digit.
    """
    return lax.map(function, rows)


def sum_rows(rows: Float[Array, "time *shape"]) -> Float[Array, "*shape"]:
    """Add up rows from the first to the last, so that rows of zeros change no bit.

    A sum over all rows at once is cut into lanes by their number, and rounds accordingly.
    """
    return lax.scan(lambda total, row: (total + row, None), jnp.zeros_like(rows[0]), rows)[0]


def check_rows(name: str, rows: Array, inside_name: str, inside: Array) -> Array:
    """Raise unless `inside` has one boolean for each row; return it as an array."""
    inside = jnp.asarray(inside)
    if rows.ndim != 2:
        raise ValueError(
            f"`{name}` must have shape (time, feature); got shape {rows.shape}. "
            "Fix: one recording at a time, `vmap` over a batch."
        )
    if inside.shape != rows.shape[:1]:
        raise ValueError(
            f"`{inside_name}` must have shape (time,) = {rows.shape[:1]}, one entry a row of "
            f"`{name}`; got shape {inside.shape}."
        )
    if inside.dtype != jnp.bool_:
        raise TypeError(
            f"`{inside_name}` must be boolean, True within the recording; got {inside.dtype}. "
            "Fix: `extent(mask)`."
        )
    return inside
