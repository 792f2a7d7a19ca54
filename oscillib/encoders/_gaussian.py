"""A Gaussian over the flat vector of unconstrained parameters."""

import math
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape


class FreeGaussian(eqx.Module):
    """Gaussian over unconstrained parameters, given by its mean and a Cholesky factor.

        free ~ N(mean, factor factor')

    Arguments:
        mean: shape `(free,)`.
        factor: lower triangular with a positive diagonal, shape `(free, free)`; whatever is above
            the diagonal is ignored, also where an optimiser has put it there.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import FreeGaussian
        >>> law = FreeGaussian(jnp.zeros(2), 2 * jnp.eye(2))
        >>> print(law.log_prob(jnp.zeros(2)).round(3), law.entropy().round(3))
        -3.224 4.224
        >>> law.sample(key=jax.random.key(0)).shape
        (2,)
    """

    mean: Float[Array, " free"]
    factor: Float[Array, "free free"]

    def __init__(self, mean: Any, factor: Any):
        """Convert both and check them."""
        self.mean, factor = as_float(mean), as_float(factor)
        check_shape("mean", self.mean, (None,), "(free,)")
        check_shape("factor", factor, (self.size, self.size), "(free, free)")
        check_same_dtype("factor", factor, "mean", self.mean)
        self.factor = jnp.tril(factor)

    @property
    def size(self) -> int:
        """Number of unconstrained parameters."""
        return self.mean.shape[0]

    @property
    def covariance(self) -> Float[Array, "free free"]:
        """`factor factor'`."""
        lower = jnp.tril(self.factor)
        return _times(lower, lower.T)

    def sample(self, *, key: Array) -> Float[Array, " free"]:
        """Draw one vector, `mean + factor e` with `e` standard normal: differentiable in both."""
        e = jax.random.normal(key, self.mean.shape, self.mean.dtype)
        return self.mean + _times(jnp.tril(self.factor), e)

    def whiten(self, free: Float[Array, " free"]) -> Float[Array, " free"]:
        """Return the `e` of which `free` is `mean + factor e`."""
        check_shape("free", free, self.mean.shape, "(free,)")
        return _solve(self.factor, free - self.mean)

    def log_prob(self, free: Float[Array, " free"]) -> Float[Array, ""]:
        """Return the log-density at `free`, in nats."""
        e = self.whiten(free)
        return -jnp.sum(e**2) / 2 - self._log_volume() - self.size / 2 * math.log(2 * math.pi)

    def entropy(self) -> Float[Array, ""]:
        """Return the differential entropy, in nats."""
        return self._log_volume() + self.size / 2 * (1 + math.log(2 * math.pi))

    def divergence(self, other: "FreeGaussian") -> Float[Array, " free"]:
        """Return the Kullback-Leibler divergence from `other`, one term a parameter, in nats.

        With `d = other.whiten(mean)` and `A = other.factor^-1 factor`,

            term_i = (sum_j A_ij^2 + d_i^2 - 1) / 2 - log A_ii

        is what entry i, given those before it, adds on average: none is negative, and their sum is
        the divergence. Where both covariances are diagonal, it is the divergence of entry i.

        Example:
            >>> import jax.numpy as jnp
            >>> from oscillib.encoders import FreeGaussian
            >>> prior = FreeGaussian(jnp.zeros(2), jnp.eye(2))
            >>> FreeGaussian(jnp.array([1.0, 0.0]), jnp.eye(2)).divergence(prior)
            Array([0.5, 0. ], dtype=float64)
        """
        check_shape("other.mean", other.mean, self.mean.shape, "(free,)")
        check_same_dtype("other.mean", other.mean, "mean", self.mean)
        shift = other.whiten(self.mean)
        ratio = _solve(other.factor, jnp.tril(self.factor))
        log_scale = jnp.log(jnp.diagonal(ratio))
        return (jnp.sum(ratio**2, axis=1) + shift**2 - 1) / 2 - log_scale

    def _log_volume(self) -> Float[Array, ""]:
        return jnp.sum(jnp.log(jnp.diagonal(self.factor)))


def _solve(factor: Array, x: Array) -> Array:
    return jax.scipy.linalg.solve_triangular(factor, x, lower=True)  # ignores what is above


def _times(a: Array, b: Array) -> Array:
    # An accelerator would otherwise multiply 32-bit floats with fewer digits.
    return jnp.matmul(a, b, precision="highest")
