"""Gaussian beliefs about a state, and how a step carries them: by Jacobians or by points."""

from collections.abc import Callable
from typing import Any, Literal, NamedTuple, TypeAlias

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Inexact

from .._validate import as_float, check_same_dtype, check_shape
from ..integrate import NoisyAdvance, covariance_factor


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


def by_columns(linear: Callable[[Array], Array], shape: tuple[int, ...]) -> Push:
    """Let a linear map of states act on each column of a `(size, k)` matrix."""
    return jax.vmap(lambda v: linear(v.reshape(shape)).reshape(-1), in_axes=1, out_axes=1)


def jacobian(f: Callable[[Array], Array], y: Array) -> Float[Array, "image size"]:
    """Return the Jacobian of a map, on flattened states."""
    basis = jnp.eye(y.size, dtype=y.dtype).reshape(-1, *y.shape)
    image = jax.vmap(lambda v: jax.jvp(f, (y,), (v,))[1], out_axes=-1)(basis)
    return image.reshape(-1, y.size)


def local_blocks(f: Callable[[Array], Array], y: Array) -> tuple[Array, list[Array]]:
    """Return the image and the Jacobian of a map that acts on every node by itself.

    One derivative for each component, taken at all nodes at once, holds the whole Jacobian; block
    c, `(component, node)`, is the derivative by component c. Its cost, and that of differentiating
    it, do not grow with the square of the network.
    """
    nodes = y.shape[-1]
    size = y.size // nodes
    basis = jnp.eye(size, dtype=y.dtype)
    tangents = jnp.broadcast_to(basis[:, :, None], (size, size, nodes)).reshape(size, *y.shape)
    image, linear = jax.linearize(f, y)
    return image, [linear(v).reshape(size, nodes) for v in tangents]


def push_blocks(blocks: list[Array], columns: Array) -> Array:
    """Apply the Jacobian that `local_blocks` found to each column of a `(size, k)` matrix."""
    parts = columns.reshape(*blocks[0].shape, -1)
    image = jnp.zeros_like(parts)
    for block, part in zip(blocks, parts, strict=True):
        image = image + block[:, :, None] * part[None]
    return image.reshape(columns.shape)


def transport(f: Callable[[Array], Array], belief: Gaussian, method: Method, *, local: bool):
    """Carry a belief through a map; return it and the matrix of the linearised map as a push."""
    if method == "cubature":
        return _cubature(f, belief)
    if local:
        image, blocks = local_blocks(f, belief.mean)
        push: Push = lambda columns: push_blocks(blocks, columns)
    else:
        image, matrix = f(belief.mean), jacobian(f, belief.mean)
        push = lambda columns: matrix @ columns
    return Gaussian(image, push(push(belief.covariance).T)), push


def predict(advance: NoisyAdvance, t: Array, belief: Gaussian, method: Method):
    """Carry a belief through one noisy step; return it and the push of the whole step."""
    local, matrix = advance.local, advance.matrix
    middle, push_before = transport(lambda y: advance.before(t, y), belief, method, local=local)
    if matrix is None:
        spread = middle.covariance
    else:
        spread = matrix @ middle.covariance @ matrix.T
        mean = (matrix @ middle.mean.reshape(-1)).reshape(middle.mean.shape)
        middle = Gaussian(mean, spread)
    middle = Gaussian(middle.mean, spread + advance.covariance)
    after, push_after = transport(lambda y: advance.after(t, y), middle, method, local=local)

    def push(columns):
        columns = push_before(columns)
        return push_after(columns if matrix is None else matrix @ columns)

    return Gaussian(after.mean, (after.covariance + after.covariance.T) / 2), push


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
def whitener(covariance: Inexact[Array, "size size"]) -> Inexact[Array, "size size"]:
    """Return the lower triangular `W` with `W covariance W* = 1`: the inverse Cholesky factor.

    NaN unless the covariance is positive definite. With `W` alone, inverse `W* W` and
    log-determinant `-2 sum log diag W` follow by products; its derivative below is products too,
    where differentiating a factorisation takes several triangular solves.
    """
    factor = jnp.linalg.cholesky(covariance)
    eye = jnp.eye(covariance.shape[0], dtype=covariance.dtype)
    return jax.scipy.linalg.solve_triangular(factor, eye, lower=True)


@whitener.defjvp
def _(primals, tangents):
    white, (change,) = whitener(*primals), tangents
    inner = jnp.tril(white @ change @ white.conj().T)
    half = inner - jnp.diag(jnp.diag(inner)) / 2
    return white, -half @ white
