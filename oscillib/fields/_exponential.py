"""The matrix exponential, by products alone."""

import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float


# A matrix of norm 1/2 needs this many terms of the Taylor series in float64.
_TERMS = 16
_MOST_SQUARINGS = 20


def expm(matrix: Float[Array, "n n"]) -> Float[Array, "n n"]:
    """Return `exp(matrix)` by scaling and squaring of its Taylor series.

    As accurate as the usual rational approximation, but without its linear solves: those make the
    gradient tens of times slower, and several of them under one `vmap` can wait for each other for
    ever, because on the CPU each batched solve holds a thread while it asks for more of the same
    few. NaN where the norm exceeds half a million.

    Source: scaling and squaring; Higham, Functions of Matrices, 2008 (from memory).
    """
    norm = lax.stop_gradient(jnp.max(jnp.sum(jnp.abs(matrix), axis=0)))
    squarings = jnp.ceil(jnp.maximum(jnp.log2(norm), -1) + 1)
    small = matrix / 2**squarings
    identity = jnp.eye(matrix.shape[0], dtype=matrix.dtype)

    def add_term(total, k):
        return identity + small @ total / k, None

    def square(total, k):
        return jnp.where(k < squarings, total @ total, total), None

    # Scans rather than Python loops: the program stays small, whatever is differentiated.
    terms = jnp.arange(_TERMS, 0, -1).astype(matrix.dtype)
    total, _ = lax.scan(add_term, identity, terms)
    total, _ = lax.scan(square, total, jnp.arange(_MOST_SQUARINGS).astype(matrix.dtype))
    return jnp.where(squarings <= _MOST_SQUARINGS, total, jnp.nan)
