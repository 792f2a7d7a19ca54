"""Noise: its parameters, the exact Gaussian transition of a linear part, factors, and keys."""

from collections.abc import Callable
from typing import Any, TypeAlias

import equinox as eqx
import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float, Int

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Positive


# rate(noise) -> (size, size): covariance that noise adds per time unit to the flattened state
Rate: TypeAlias = Callable[[Any], Float[Array, "size size"]]

# A series of 17 terms reaches 1e-17 once the norm is halved below this.
_SMALL_NORM = 0.5
_TERMS = 17
# Allows norms up to 0.5 * 2^24 = 8e6; beyond, the result is NaN.
_MAX_DOUBLINGS = 24


class NoisyParams(eqx.Module):
    """Parameters of a noisy system: those of the field, and the intensity of its noise.

    Arguments:
        field: parameters of the field, any PyTree.
        noise: intensity, state units per square root of a time unit. With `planar_rate`, shape
            `(node,)`: node i is driven by `s_i (dWx + i dWy)`.

    Example:
        >>> from oscillib.fields import HopfParams
        >>> from oscillib.integrate import NoisyParams
        >>> NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1]).noise
        Array([0.1], dtype=float64)
    """

    field: Any
    noise: Float[Array, "..."]

    def __init__(self, field: Any, noise: Any):
        """Convert the intensity to an array."""
        self.field = field
        self.noise = as_float(noise)

    def constraints(self) -> "NoisyParams":
        """Return the field's own constraints, and a positive intensity.

        Example:
            >>> from oscillib.fields import HopfParams
            >>> from oscillib.integrate import NoisyParams
            >>> NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1]).constraints().noise
            Positive()
        """
        leaves: list[Constraint] = [*jax.tree.leaves(self.field.constraints()), Positive()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def planar_rate(noise: Float[Array, " node"]) -> Float[Array, "size size"]:
    """Return the covariance rate of independent isotropic noise on every planar node.

        Q = diag(s_1^2 ... s_n^2, s_1^2 ... s_n^2)

    on the state `(component, node)` flattened component by component.

    Arguments:
        noise: intensities `s`, shape `(node,)`, state units per square root of a time unit.

    Returns:
        Shape `(2 node, 2 node)`, squared state units per time unit.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import planar_rate
        >>> planar_rate(jnp.array([0.5]))
        Array([[0.25, 0.  ],
               [0.  , 0.25]], dtype=float64)
    """
    check_shape("noise", noise, (None,), "(node,)")
    return jnp.diag(jnp.concatenate([noise, noise]) ** 2)


def linear_transition(
    matrix: Float[Array, "size size"], rate: Float[Array, "size size"], h: Float[Array, ""] | float
) -> tuple[Float[Array, "size size"], Float[Array, "size size"]]:
    """Return the exact Gaussian transition of `dy = A y dt + noise` over a time `h`.

        propagator = e^(Ah),   covariance = integral from 0 to h of e^(As) Q e^(A's) ds

    Both are summed as series over `h / 2^k` and doubled k times,
    `covariance <- covariance + propagator covariance propagator'`. Nothing is subtracted, so the
    result stays accurate for damped and growing directions alike and over long gaps, where the
    usual exponential of the block matrix `[[-A, Q], [0, A']]` overflows. Differentiable
    everywhere, with no noise and at `h = 0` too.

    Arguments:
        matrix: `A`, shape `(size, size)`, per time unit.
        rate: `Q`, shape `(size, size)`, covariance added per time unit; symmetric.
        h: time, not negative, a scalar. Beyond `|A| h = 8e6` the result is NaN.

    Returns:
        Propagator and covariance, each `(size, size)`.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import linear_transition
        >>> propagator, covariance = linear_transition(-jnp.eye(1), jnp.eye(1), 1.0)
        >>> print(propagator.round(6), covariance.round(6))  # 1/e and (1 - e^-2) / 2
        [[0.367879]] [[0.432332]]

    Source: Van Loan 1978, IEEE Transactions on Automatic Control 23 (from memory), summed by
    doubling.
    """
    matrix, rate = jnp.asarray(matrix), jnp.asarray(rate)
    h = as_float(h) if hasattr(h, "dtype") else jnp.asarray(h, matrix.dtype)
    check_shape("matrix", matrix, (None, matrix.shape[0]), "(size, size)")
    check_shape("rate", rate, matrix.shape, "(size, size)")
    check_shape("h", h, (), "()")
    check_same_dtype("rate", rate, "matrix", matrix)
    check_same_dtype("h", h, "matrix", matrix)
    # Reverse mode recomputes the sums: inside a scan over irregular intervals they would be stored.
    return jax.checkpoint(_doubled)(matrix, rate, h)


def _doubled(matrix: Array, rate: Array, h: Array) -> tuple[Array, Array]:
    norm = lax.stop_gradient(jnp.max(jnp.sum(jnp.abs(matrix), axis=0)) * h)
    doublings = jnp.ceil(jnp.log2(jnp.maximum(norm / _SMALL_NORM, 1)))
    small = h * 2**-doublings

    def add(carry, j):
        power, term, propagator, covariance = carry
        power = small * (matrix @ power) / j
        half = small * (matrix @ term) / (j + 1)
        term = half + half.T
        return (power, term, propagator + power, covariance + term), None

    eye = jnp.eye(matrix.shape[0], dtype=matrix.dtype)
    order = jnp.arange(1, _TERMS + 1).astype(matrix.dtype)
    start = (eye, small * rate, eye, small * rate)
    (_, _, *transition), _ = lax.scan(add, start, order)

    def double(transition):
        propagator, covariance = transition
        carried = propagator @ covariance @ propagator.T
        # Rounding would let the two triangles drift apart over many doublings.
        return [propagator @ propagator, covariance + (carried + carried.T) / 2]

    def maybe(transition, i):
        return lax.cond(i < doublings, double, lambda x: x, transition), None

    index = jnp.arange(_MAX_DOUBLINGS).astype(matrix.dtype)
    (propagator, covariance), _ = lax.scan(maybe, transition, index)
    poison = jnp.where(doublings <= _MAX_DOUBLINGS, 0, jnp.nan).astype(matrix.dtype)
    return propagator + poison, covariance + poison


def covariance_factor(covariance: Float[Array, "size size"]) -> Float[Array, "size size"]:
    """Return a lower triangular `L` with `L L' = covariance`, which may be singular.

    Where nothing is left of the variance of an entry, its column is zero and so is the derivative:
    a Cholesky factor would be NaN there. `L z` with standard normal `z` draws from the covariance.

    Arguments:
        covariance: symmetric, no negative eigenvalue, shape `(size, size)`.

    Returns:
        Shape `(size, size)`; NaN if the covariance is indefinite beyond rounding or not finite.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import covariance_factor
        >>> covariance_factor(jnp.array([[4.0, 2.0], [2.0, 1.0]]))
        Array([[2., 0.],
               [1., 0.]], dtype=float64)

    Source: outer-product form of the Cholesky factorisation; common practice, no source.
    """
    covariance = jnp.asarray(covariance)
    size, dtype = covariance.shape[0], covariance.dtype
    tolerance = 8 * size * jnp.finfo(dtype).eps * jnp.abs(jnp.diag(covariance))

    def column(remaining, j):
        pivot = remaining[j, j]
        used = pivot > tolerance[j]
        scale = jnp.where(used, 1 / jnp.sqrt(jnp.where(used, pivot, 1)), 0)
        below = jnp.where(jnp.arange(size) >= j, remaining[:, j], 0) * scale
        bad = pivot < -tolerance[j]
        return remaining - jnp.outer(below, below), jnp.where(bad, jnp.nan, below)

    _, columns = lax.scan(column, covariance, jnp.arange(size))
    return columns.T + 0 * jnp.sum(lax.stop_gradient(covariance))


def noise_key(
    key: Array, index: Int[Array, ""] | int, *, window: Int[Array, ""] | int = 0
) -> Array:
    """Return the key of one step's noise, by window and step index, never by time.

    Arguments:
        key: key of the recording.
        index: number of the step within the recording, whatever window it is computed in.
        window: label of one of several independent continuations; default 0.

    Returns:
        A key.

    Example:
        >>> import jax
        >>> from oscillib.integrate import noise_key
        >>> noise_key(jax.random.key(0), 3).shape
        ()
    """
    return jax.random.fold_in(jax.random.fold_in(key, window), index)
