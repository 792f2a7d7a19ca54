"""Gaussian beliefs about a state, and how a step carries them: by Jacobians or by points."""

from collections.abc import Callable
from typing import Any, Literal, NamedTuple, TypeAlias

import jax
import jax.numpy as jnp
from jax import lax
from jax.ad_checkpoint import checkpoint_name
from jaxtyping import Array, Float, Inexact

from .._validate import as_float, check_same_dtype, check_shape
from ..integrate import NoisyAdvance, covariance_factor


# Label of what the filter keeps for reverse mode.
KEPT = "kept by the filter"

Method: TypeAlias = Literal["extended", "cubature"]
# push(columns) -> columns: the matrix of the linearised map, applied to each column
Push: TypeAlias = Callable[[Array], Array]


class Gaussian(NamedTuple):
    """A Gaussian belief about one state.

    Attributes:
        mean: shape `(*state)`.
        covariance: of the flattened state, shape `(size, size)`.
    """

    mean: Float[Array, "*state"]
    covariance: Float[Array, "size size"]


def wide_start(shape: tuple[int, ...], scale: Float[Array, ""] | float) -> Gaussian:
    """Return a belief that knows little: mean zero, the same standard deviation everywhere.

        y ~ N(0, scale^2 I)

    Proper, not diffuse: the likelihood keeps the term of the start, so compare models with one and
    the same `scale`. Several times the amplitude of the rhythm is wide enough; a linearising filter
    suffers where the start is far wider than that.

    Arguments:
        shape: of one state, such as `(2, node)`.
        scale: standard deviation, state units, positive.

    Returns:
        The belief, in the precision of `scale`.

    Example:
        >>> from oscillib.likelihood import wide_start
        >>> wide_start((2, 1), 3.0).covariance
        Array([[9., 0.],
               [0., 9.]], dtype=float64)
    """
    scale = as_float(scale)
    check_shape("scale", scale, (), "()")
    mean = jnp.zeros(shape, scale.dtype)
    return Gaussian(mean, scale**2 * jnp.eye(mean.size, dtype=scale.dtype))


def check_belief(name: str, belief: Gaussian) -> None:
    """Raise unless mean and covariance fit each other in shape and dtype."""
    size = belief.mean.size
    check_shape(f"{name}.covariance", belief.covariance, (size, size), "(size, size)")
    check_same_dtype(f"{name}.covariance", belief.covariance, f"{name}.mean", belief.mean)


def check_method(method: Any) -> None:
    """Raise unless the method is one of the two."""
    if method not in ("extended", "cubature"):
        raise ValueError(f"`method` must be 'extended' or 'cubature'; got {method!r}.")


def jacobian(f: Callable[[Array], Array], y: Array) -> Float[Array, "image size"]:
    """Return the Jacobian of a map, on flattened states."""
    basis = jnp.eye(y.size, dtype=y.dtype).reshape(-1, *y.shape)
    image = jax.vmap(lambda v: jax.jvp(f, (y,), (v,))[1], out_axes=-1)(basis)
    return image.reshape(-1, y.size)


def local_blocks(f: Callable[[Array], Array], y: Array) -> tuple[Array, list[list[Array]]]:
    """Return the image and the Jacobian of a map that acts on every node by itself.

    One derivative for each component, taken at all nodes at once, holds the whole Jacobian: entry
    `[a][c]`, shape `(node,)`, is the derivative of component a by component c. Its cost, and that
    of differentiating it, do not grow with the square of the network.
    """
    nodes = y.shape[-1]
    size = y.size // nodes
    basis = jnp.eye(size, dtype=y.dtype)
    tangents = jnp.broadcast_to(basis[:, :, None], (size, size, nodes)).reshape(size, *y.shape)
    image, linear = jax.linearize(f, y)
    columns = [linear(v).reshape(size, nodes) for v in tangents]
    # The compiler would else work these few numbers out anew for every entry that they multiply.
    columns = lax.optimization_barrier(columns)
    return image, [[column[a] for column in columns] for a in range(size)]


def push_blocks(blocks: list[list[Array]], matrix: Array) -> Array:
    """Return `J matrix` for the Jacobian that `local_blocks` found."""
    parts = jnp.split(matrix, len(blocks))
    rows = [[d[:, None] * x for d, x in zip(row, parts, strict=True)] for row in blocks]
    return jnp.concatenate([sum(row[1:], row[0]) for row in rows])


def pull_blocks(blocks: list[list[Array]], matrix: Array) -> Array:
    """Return `matrix J'`; written out, because a transpose on either side costs more than this."""
    parts = jnp.split(matrix, len(blocks), axis=1)
    columns = [[d[None] * x for d, x in zip(row, parts, strict=True)] for row in blocks]
    return jnp.concatenate([sum(column[1:], column[0]) for column in columns], axis=1)


@jax.custom_jvp
def sandwich_blocks(blocks: list[list[Array]], covariance: Array) -> Array:
    """Return `J covariance J'` for the Jacobian that `local_blocks` found."""
    return pull_blocks(blocks, push_blocks(blocks, covariance))


@sandwich_blocks.defjvp
def _(primals, tangents):
    # Both factors of a symmetric product change alike: half the work of differentiating each.
    (blocks, covariance), (changes, change) = primals, tangents
    pulled = pull_blocks(blocks, covariance)
    half = push_blocks(changes, pulled)
    return push_blocks(blocks, pulled), half + half.T + sandwich_blocks(blocks, change)


@jax.custom_jvp
def sandwich(matrix: Array, covariance: Array) -> Array:
    """Return `matrix covariance matrix'` of a symmetric covariance."""
    return matrix @ covariance @ matrix.T


@sandwich.defjvp
def _(primals, tangents):
    (matrix, covariance), (move, change) = primals, tangents
    # Products with a transposed matrix are slow, so it is transposed once and for all; the last
    # term is written so that reverse mode meets no other kind.
    transposed = lax.optimization_barrier(matrix.T)
    pulled = covariance @ transposed
    half = move @ pulled
    return matrix @ pulled, half + half.T + transposed.T @ (change @ matrix.T)


def transport(f: Callable[[Array], Array], belief: Gaussian, method: Method, *, local: bool):
    """Carry a belief through a map; return it and the matrix of the linearised map as a push."""
    if method == "cubature":
        return _cubature(f, belief)
    if local:
        image, blocks = local_blocks(f, belief.mean)
        spread = sandwich_blocks(blocks, belief.covariance)
        return Gaussian(image, spread), lambda columns: push_blocks(blocks, columns)
    matrix = jacobian(f, belief.mean)
    spread = sandwich(matrix, belief.covariance)
    return Gaussian(f(belief.mean), spread), lambda columns: matrix @ columns


def predict(advance: NoisyAdvance, t: Array, belief: Gaussian, method: Method):
    """Carry a belief through one noisy step; return it and the push of the whole step."""
    local, matrix = advance.local, advance.matrix
    middle, push_before = transport(lambda y: advance.before(t, y), belief, method, local=local)
    if matrix is None:
        spread = middle.covariance
    else:
        spread = sandwich(matrix, middle.covariance)
        mean = (matrix @ middle.mean.reshape(-1)).reshape(middle.mean.shape)
        middle = Gaussian(mean, spread)
    middle = Gaussian(middle.mean, spread + advance.covariance)
    after, push_after = transport(lambda y: advance.after(t, y), middle, method, local=local)

    def push(columns):
        columns = push_before(columns)
        return push_after(columns if matrix is None else matrix @ columns)

    return after, push


def _cubature(f: Callable[[Array], Array], belief: Gaussian):
    """Carry 2 size points at sqrt(size) standard deviations: exact for cubic polynomials' means."""
    mean = belief.mean
    factor = covariance_factor(belief.covariance)
    size = mean.size
    width = jnp.asarray(size, mean.dtype)
    offsets = jnp.sqrt(width) * factor.T
    points = mean[None] + jnp.concatenate([offsets, -offsets]).reshape(-1, *mean.shape)
    images = jax.vmap(f)(points)
    image = jnp.mean(images, axis=0)
    spread = (images - image[None]).reshape(2 * size, size) / jnp.sqrt(2 * width)
    # Regression of the images on the standardised points; its solve is removed unless used.
    slope = (spread[:size] - spread[size:]).T / jnp.sqrt(jnp.asarray(2, mean.dtype))

    def push(columns):
        return slope @ jax.scipy.linalg.solve_triangular(factor, columns, lower=True)

    return Gaussian(image, spread.T @ spread), push


@jax.custom_jvp
def square(matrix: Array) -> Array:
    """Return `matrix matrix'`."""
    return matrix @ matrix.T


@square.defjvp
def _(primals, tangents):
    (matrix,), (move,) = primals, tangents
    half = move @ matrix.T
    return square(matrix), half + half.T


@jax.custom_jvp
def whitener(covariance: Inexact[Array, "size size"]) -> Inexact[Array, "size size"]:
    """Return the lower triangular `W` with `W covariance W* = 1`: the inverse Cholesky factor.

    NaN unless the covariance is positive definite. With `W` alone, inverse `W* W` and
    log-determinant `-2 sum log diag W` follow by products; its derivative below is products too,
    where differentiating a factorisation takes several triangular solves.
    """
    return _inverse_factor(covariance)


@whitener.defjvp
def _(primals, tangents):
    # Not `whitener` itself: inside a custom rule the label of what is kept would not be seen.
    white, (change,) = _inverse_factor(*primals), tangents
    inner = white @ change @ white.conj().T
    place = jnp.arange(white.shape[0])
    weight = jnp.where(place[:, None] > place[None], 1.0, 0.0) + jnp.eye(place.size) / 2
    return white, -(inner * weight.astype(white.dtype)) @ white


def _inverse_factor(covariance: Array) -> Array:
    factor = jnp.linalg.cholesky(covariance)
    eye = jnp.eye(covariance.shape[0], dtype=covariance.dtype)
    return checkpoint_name(jax.scipy.linalg.solve_triangular(factor, eye, lower=True), KEPT)
