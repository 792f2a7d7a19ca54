"""From a pooled vector to a Gaussian over unconstrained parameters."""

from typing import Literal

import equinox as eqx
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import check_count, check_same_dtype, check_shape
from ._gaussian import FreeGaussian
from ._network import Network
from ._prior import Prior


class GaussianHead(eqx.Module):
    """A network that moves the prior: a Gaussian over unconstrained parameters.

        (m, s) = network(features)
        mean = mean_0 + factor_0 m,    factor = factor_0 L,    L lower triangular

    with the prior's `mean_0` and `factor_0`. The diagonal of `L` is the exponential of its part of
    `s`, so it is positive; off it, `L` is its part of `s` (`"full"`) or 0 (`"diagonal"`). The
    network works in units of the prior's widths, and its last layer starts at zero: untrained, it
    gives the prior itself.

    Arguments:
        features: entries of the pooled vector.
        free: unconstrained parameters, `prior.size`.
        kind: `"full"` (default), or `"diagonal"`: no correlations beyond the prior's own.
        width: units of a hidden layer; default 32.
        depth: hidden layers; default 1.
        key: random key of the first weights.
        dtype: precision of the weights; default that of JAX.

    Raises:
        ValueError: a size is out of range, `kind` is neither; on a call, shapes do not fit.
        TypeError: a size is not an int; on a call, dtypes differ.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import GaussianHead, Prior
        >>> from oscillib.parameters import Positive
        >>> prior = Prior({"rate": jnp.array([2.0])}, {"rate": Positive()}, sd=0.3)
        >>> head = GaussianHead(4, prior.size, key=jax.random.key(0))
        >>> law = head(jnp.ones(4), jnp.asarray(True), prior)
        >>> print(prior.params(law.mean)["rate"], law.factor)
        [2.] [[0.3]]

    Source: common practice, no source.
    """

    network: Network
    free: int = eqx.field(static=True)
    kind: Literal["diagonal", "full"] = eqx.field(static=True)

    def __init__(
        self,
        features: int,
        free: int,
        *,
        kind: Literal["diagonal", "full"] = "full",
        width: int = 32,
        depth: int = 1,
        key: Array,
        dtype=None,
    ):
        """Draw the weights; set the last layer to zero."""
        free = check_count("free", free)
        if kind not in ("diagonal", "full"):
            raise ValueError(f"`kind` must be 'diagonal' or 'full'; got {kind!r}.")
        below = free * (free - 1) // 2 if kind == "full" else 0
        self.network = Network(
            features, 2 * free + below, width=width, depth=depth, zero=True, key=key, dtype=dtype
        )
        self.free, self.kind = free, kind

    def __call__(
        self, features: Float[Array, " feature"], informed: Bool[Array, ""], prior: Prior
    ) -> FreeGaussian:
        """Return the Gaussian; exactly the prior where `informed` is False."""
        law = prior.law
        check_shape("prior.law.mean", law.mean, (self.free,), "(free,)")
        check_same_dtype("features", features, "prior.law.mean", law.mean)
        out = self.network(features)
        shift, log_scale, below = jnp.split(out, [self.free, 2 * self.free])
        lower = jnp.diag(jnp.exp(log_scale))
        if self.kind == "full":
            lower = lower.at[np.tril_indices(self.free, -1)].set(below)
        # An accelerator would otherwise multiply 32-bit floats with fewer digits.
        mean = law.mean + jnp.matmul(law.factor, shift, precision="highest")
        factor = jnp.matmul(law.factor, lower, precision="highest")
        return FreeGaussian(
            jnp.where(informed, mean, law.mean), jnp.where(informed, factor, law.factor)
        )
