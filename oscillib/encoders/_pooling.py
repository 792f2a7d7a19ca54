"""From the outputs along a recording to one vector: mean, both ends, or attention.

All poolings are called alike, `pooling(outputs, inside) -> Pooled`, and give a vector as long as
one output, so that one takes the place of another without any other change.
"""

from typing import NamedTuple

import equinox as eqx
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float

from .._validate import check_count, check_shape
from ._network import Network
from ._rows import by_row, check_rows, sum_rows


class Pooled(NamedTuple):
    """What a pooling returns.

    Attributes:
        features: shape `(feature,)`; zeros if no row is inside.
        weights: how much of each row each head took, shape `(head, time)`, for plotting; the rows
            sum to 1, or are zeros if no row is inside.
    """

    features: Float[Array, " feature"]
    weights: Float[Array, "head time"]


def attention_weights(
    scores: Float[Array, "head time"], inside: Bool[Array, " time"]
) -> Float[Array, "head time"]:
    """Return the softmax of scores over the rows that are inside.

        weights_hk = exp(scores_hk) / sum over rows j inside of exp(scores_hj)

    Arguments:
        scores: shape `(head, time)`; anything, also NaN, outside.
        inside: True within the recording, shape `(time,)`.

    Returns:
        Same shape; exactly 0 outside, and everywhere if no row is inside. Gradients are finite.

    Raises:
        ValueError: shapes do not fit.
        TypeError: `inside` is not boolean.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import attention_weights
        >>> scores = jnp.array([[0.0, jnp.log(3.0), jnp.nan]])
        >>> attention_weights(scores, jnp.array([True, True, False])).round(12)
        Array([[0.25, 0.75, 0.  ]], dtype=float64)

    Source: softmax; common practice, no source.
    """
    scores = jnp.asarray(scores)
    check_shape("scores", scores, (None, None), "(head, time)")
    inside = check_rows("scores.T", scores.T, "inside", inside)[None]
    top = jnp.max(jnp.where(inside, scores, -jnp.inf), axis=1, initial=-jnp.inf, keepdims=True)
    # The weights do not depend on what is taken off, so it needs no gradient.
    top = lax.stop_gradient(jnp.where(jnp.any(inside), top, 0))
    raised = jnp.where(inside, jnp.exp(jnp.where(inside, scores - top, 0)), 0)
    total = sum_rows(raised.T)
    return raised / jnp.where(jnp.any(inside), total, 1)[:, None]


class MeanPool(eqx.Module):
    """Average over the rows inside; one head.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import MeanPool
        >>> outputs = jnp.array([[1.0, 2.0], [3.0, 6.0], [jnp.nan, 9.0]])
        >>> MeanPool()(outputs, jnp.array([True, True, False])).features
        Array([2., 4.], dtype=float64)
    """

    def __call__(
        self, outputs: Float[Array, "time feature"], inside: Bool[Array, " time"]
    ) -> Pooled:
        """Return features `(feature,)` and weights `(1, time)`."""
        inside = check_rows("outputs", outputs, "inside", inside)
        flat = jnp.zeros((1, outputs.shape[0]), outputs.dtype)
        return _pooled(outputs, inside, attention_weights(flat, inside))


class LastPool(eqx.Module):
    """Where each direction ends: forward at the last row inside, backward at the first; two heads.

    The first half of the features must be those of the forward direction, as `Recurrence` has it.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import LastPool
        >>> outputs = jnp.array([[1.0, 2.0], [3.0, 6.0], [8.0, 9.0]])
        >>> LastPool()(outputs, jnp.array([True, True, False])).features
        Array([3., 2.], dtype=float64)
    """

    def __call__(
        self, outputs: Float[Array, "time feature"], inside: Bool[Array, " time"]
    ) -> Pooled:
        """Return features `(feature,)` and weights `(2, time)`."""
        inside = check_rows("outputs", outputs, "inside", inside)
        if outputs.shape[1] % 2:
            raise ValueError(
                "`outputs` must have an even number of features, half of them of each direction; "
                f"got shape {outputs.shape}. Fix: `Recurrence`, or another pooling."
            )
        count = jnp.cumsum(inside)
        last, first = inside & (count == count[-1:]), inside & (count == 1)
        # Rows outside repeat the count of the row before, so `inside` keeps a single one of each.
        weights = jnp.stack([last, first]).astype(outputs.dtype)
        half = outputs.shape[1] // 2
        return _pooled(outputs, inside, weights, heads=[0] * half + [1] * half)


class AttentionPool(eqx.Module):
    """Weighted average with learned weights; several heads, each for its share of the features.

        scores_hk = network(outputs_k)_h,    weights = softmax over the rows inside
        features_f = sum_k weights_hk outputs_kf,    h = f mod heads

    A score looks at all features of both directions. The network's last layer starts at zero, so
    that attention starts as the mean.

    Arguments:
        features: entries of an output.
        heads: heads, at most `features`; default 1.
        width: units of a hidden layer; default 32.
        depth: hidden layers of tanh units; default 1; 0 for linear scores.
        key: random key of the first weights.
        dtype: precision of the weights; default that of JAX.

    Raises:
        ValueError: a size is out of range; on a call, shapes do not fit.
        TypeError: a size is not an int; on a call, dtypes differ.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import AttentionPool
        >>> pooling = AttentionPool(2, heads=2, key=jax.random.key(0))
        >>> outputs = jnp.array([[1.0, 2.0], [3.0, 6.0], [jnp.nan, 9.0]])
        >>> out = pooling(outputs, jnp.array([True, True, False]))
        >>> out.features, out.weights.shape
        (Array([2., 4.], dtype=float64), (2, 3))

    Source: additive attention, Bahdanau et al. 2015 (from memory).
    """

    network: Network

    def __init__(
        self,
        features: int,
        *,
        heads: int = 1,
        width: int = 32,
        depth: int = 1,
        key: Array,
        dtype=None,
    ):
        """Draw the weights; set the last layer to zero."""
        features, heads = check_count("features", features), check_count("heads", heads)
        if heads > features:
            raise ValueError(f"`heads` must be at most `features`, {features}; got {heads}.")
        self.network = Network(
            features, heads, width=width, depth=depth, zero=True, key=key, dtype=dtype
        )

    def __call__(
        self, outputs: Float[Array, "time feature"], inside: Bool[Array, " time"]
    ) -> Pooled:
        """Return features `(feature,)` and weights `(head, time)`."""
        inside = check_rows("outputs", outputs, "inside", inside)
        check_shape("outputs", outputs, (None, self.network.inputs), "(time, feature)")
        scores = by_row(self.network, jnp.where(inside[:, None], outputs, 0))
        heads = [f % self.network.outputs for f in range(outputs.shape[1])]
        return _pooled(outputs, inside, attention_weights(scores.T, inside), heads=heads)


def _pooled(
    outputs: Array, inside: Array, weights: Array, heads: list[int] | None = None
) -> Pooled:
    """Return the sums of the outputs under the weights, feature f under those of `heads[f]`."""
    own = jnp.asarray([0] * outputs.shape[1] if heads is None else heads)
    clean = jnp.where(inside[:, None], outputs, 0)
    return Pooled(sum_rows(weights[own].T * clean), weights)
