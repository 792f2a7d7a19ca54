"""Eigenvalues of a curvature matrix in units in which its diagonal is one."""

from typing import NamedTuple

import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float


_DAMPING_STEPS = 8


class Spectrum(NamedTuple):
    """Eigen-decomposition of `matrix / outer(scale, scale)`.

    Arguments:
        values: eigenvalues in increasing order, `(free,)`.
        vectors: eigenvectors in columns, `(free, free)`.
        scale: root of the diagonal's size, `(free,)`. An entry times its scale counts how many
            standard errors it is off, the other entries being known.
    """

    values: Float[Array, " free"]
    vectors: Float[Array, "free free"]
    scale: Float[Array, " free"]


def spectrum(matrix: Float[Array, "free free"]) -> Spectrum:
    """Decompose a symmetric matrix, scaled so that units and magnitudes do not matter."""
    size = jnp.abs(jnp.diagonal(matrix))
    top = jnp.max(size)
    floor = jnp.finfo(matrix.dtype).eps * top
    scale = jnp.sqrt(jnp.where(top > 0, jnp.maximum(size, floor), 1))
    values, vectors = jnp.linalg.eigh(matrix / scale[:, None] / scale[None, :])
    return Spectrum(values, vectors, scale)


def sizes(values: Float[Array, " free"]) -> Float[Array, " free"]:
    """Return sizes of eigenvalues, none below what rounding leaves of a vanishing one.

    The floor `eps^(2/3)` of the largest keeps a step along a direction that has no information
    from dividing rounding noise by rounding noise.
    """
    size = jnp.abs(values)
    top = jnp.max(size)
    floor = jnp.finfo(values.dtype).eps ** (2 / 3) * top
    return jnp.where(top > 0, jnp.maximum(size, floor), 1)


def bounded_step(
    size: Float[Array, " free"], pull: Float[Array, " free"], radius: Float[Array, ""]
) -> Float[Array, " free"]:
    """Minimise `-pull . p + p . (size p) / 2` over `|p| <= radius`.

    The solution is `p = pull / (size + damping)`; Newton's iteration for the damping climbs from 0
    towards it and never passes it.

    Source: More and Sorensen 1983, SIAM J. Sci. Stat. Comput. 4:553 (from memory).
    """

    def climb(_, damping):
        step = pull / (size + damping)
        length = jnp.linalg.norm(step)
        bend = jnp.sum(step**2 / (size + damping))
        too_long = (length > radius) & (bend > 0)
        more = (length - radius) / radius * length**2 / jnp.where(bend > 0, bend, 1)
        return damping + jnp.where(too_long, more, 0)

    damping = lax.fori_loop(0, _DAMPING_STEPS, climb, jnp.zeros_like(radius))
    step = pull / (size + damping)
    length = jnp.linalg.norm(step)
    return step * jnp.where(length > radius, radius / jnp.where(length > 0, length, 1), 1)
