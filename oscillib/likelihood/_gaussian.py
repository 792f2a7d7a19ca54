"""Gaussian beliefs about a state, and how a map carries them: by linearisation or by points."""

from collections.abc import Callable
from typing import Literal, NamedTuple, TypeAlias

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

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


def check_method(method: str) -> None:
    """Raise unless the method is one of the two."""
    if method not in ("extended", "cubature"):
        raise ValueError(f"`method` must be 'extended' or 'cubature'; got {method!r}.")


def by_columns(linear: Callable[[Array], Array], shape: tuple[int, ...]) -> Push:
    """Let a linear map of states act on each column of a `(size, k)` matrix.

    Jacobians are only ever needed as products. Pushing columns leaves elementwise flows cheap.
    """
    return jax.vmap(lambda v: linear(v.reshape(shape)).reshape(-1), in_axes=1, out_axes=1)


def transport(f: Callable[[Array], Array], belief: Gaussian, method: Method):
    """Carry a belief through a map; return it and the matrix of the linearised map as a push."""
    mean, covariance = belief
    if method == "extended":
        image, linear = jax.linearize(f, mean)
        push = by_columns(linear, mean.shape)
        return Gaussian(image, push(push(covariance).T)), push
    factor = covariance_factor(covariance)
    size = mean.size
    offsets = jnp.sqrt(jnp.asarray(size, mean.dtype)) * factor.T
    # Third-degree cubature: 2 size points at sqrt(size) standard deviations, equal weights.
    points = mean[None] + jnp.concatenate([offsets, -offsets]).reshape(-1, *mean.shape)
    images = jax.vmap(f)(points)
    image = jnp.mean(images, axis=0)
    spread = (images - image[None]).reshape(2 * size, size) / jnp.sqrt(
        jnp.asarray(2 * size, mean.dtype)
    )
    # Regression of the images on the standardised points; its solve is removed unless used.
    slope = (spread[:size] - spread[size:]).T / jnp.sqrt(jnp.asarray(2, mean.dtype))

    def push(columns):
        return slope @ jax.scipy.linalg.solve_triangular(factor, columns, lower=True)

    return Gaussian(image, spread.T @ spread), push


def predict(advance: NoisyAdvance, t: Array, belief: Gaussian, method: Method):
    """Carry a belief through one noisy step; return it and the push of the whole step."""
    middle, push_before = transport(lambda y: advance.before(t, y), belief, method)
    middle = Gaussian(middle.mean, middle.covariance + advance.covariance)
    after, push_after = transport(lambda y: advance.after(t, y), middle, method)
    covariance = (after.covariance + after.covariance.T) / 2
    return Gaussian(after.mean, covariance), lambda columns: push_after(push_before(columns))
