"""From one recording to a distribution over parameters, put together from the blocks."""

from collections.abc import Callable
from typing import NamedTuple

import equinox as eqx
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from ._gaussian import FreeGaussian
from ._head import GaussianHead
from ._pooling import Pooled
from ._prior import Prior
from ._recurrence import Recurrence
from ._samples import Mask, SampleMap, extent


class Proposal(NamedTuple):
    """What an encoder proposes for one recording.

    Attributes:
        law: Gaussian over the unconstrained parameters; `prior.params` maps a draw back.
        weights: how much of each row each head of the pooling took, shape `(head, time)`.
        informed: False where nothing was observed; then `law` is exactly the prior's and the
            weights are 0.
    """

    law: FreeGaussian
    weights: Float[Array, "head time"]
    informed: Bool[Array, ""]


class Encoder(eqx.Module):
    """From one recording to a distribution over parameters.

        samples -> recurrence -> pooling -> head

    Each block is a module with arrays for leaves that you may exchange, alone, for another one or
    for a callable of your own with the same arguments. Rows before the first and after the last
    sample are padding and change no bit; missing values within are seen as missing. States are no
    part of it: where a window starts is known better by a filter or by shooting.

    Arguments:
        samples: `samples(times, values, mask) -> (time, row)`, such as a `SampleMap`.
        recurrence: `recurrence(rows, inside) -> (time, feature)`, such as a `Recurrence`.
        pooling: `pooling(outputs, inside) -> Pooled`: `MeanPool()`, `LastPool()`, `AttentionPool`.
        head: `head(features, informed, prior) -> FreeGaussian`, such as a `GaussianHead`.

    Raises:
        ValueError, TypeError: on a call, shapes or dtypes do not fit; a block names them.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import (
        ...     AttentionPool, Encoder, GaussianHead, Prior, Recurrence, SampleMap)
        >>> from oscillib.fields import HopfParams
        >>> params = HopfParams(growth=[0.1], frequency=[6.0])
        >>> prior = Prior(params, params.constraints(), sd=0.5)
        >>> keys = jax.random.split(jax.random.key(0), 4)
        >>> encoder = Encoder(
        ...     SampleMap(1, 8, key=keys[0]),
        ...     Recurrence(8, 16, key=keys[1]),
        ...     AttentionPool(32, heads=4, key=keys[2]),  # or MeanPool(), or LastPool()
        ...     GaussianHead(32, prior.size, key=keys[3]),
        ... )
        >>> times = jnp.linspace(0.0, 3.0, 7)
        >>> values = jnp.cos(6 * times)[:, None]
        >>> out = encoder(times, values, jnp.ones((7, 1), bool), prior)
        >>> print(prior.params(out.law.mean).frequency, out.weights.shape, bool(out.informed))
        [6.] (4, 7) True

    Source: a recurrent network whose attention pools a recording; common practice, no source.
    """

    samples: SampleMap | Callable[..., Float[Array, "time row"]]
    recurrence: Recurrence | Callable[..., Float[Array, "time feature"]]
    pooling: Callable[..., Pooled]
    head: GaussianHead | Callable[..., FreeGaussian]

    def __call__(
        self,
        times: Float[Array, " time"] | None,
        values: Float[Array, "time channel"],
        mask: Mask,
        prior: Prior,
    ) -> Proposal:
        """Return the proposal for one recording; `vmap` with `in_axes=(0, 0, 0, None)` over many.

        Arguments:
            times: shape `(time,)`, or `None` where evenly spaced.
            values: shape `(time, channel)`; anything, also NaN, where `mask` is False.
            mask: True where observed, same shape.
            prior: what is believed before, and the head's starting point.
        """
        inside = extent(mask)
        informed = jnp.any(inside)
        rows = self.samples(times, values, mask)
        features, weights = self.pooling(self.recurrence(rows, inside), inside)
        return Proposal(self.head(features, informed, prior), weights, informed)
