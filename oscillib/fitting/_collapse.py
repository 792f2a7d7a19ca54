"""A check whether a fit has given up the rhythm and settled on its time average."""

from typing import Any, NamedTuple

import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from .._validate import check_floating, check_same_dtype, check_shape


class Collapse(NamedTuple):
    """What `collapse` found, per channel.

    Arguments:
        variance_ratio: variance of the prediction over that of the observation, `(channel,)`;
            NaN where it cannot be judged.
        correlation: correlation of prediction and observation, `(channel,)`; NaN where either is
            constant or not finite.
        collapsed: True unless the ratio is known to reach the threshold, `(channel,)`.
        finite: whether every prediction that has an observation is finite, `(channel,)`.
    """

    variance_ratio: Float[Array, " channel"]
    correlation: Float[Array, " channel"]
    collapsed: Bool[Array, " channel"]
    finite: Bool[Array, " channel"]


def collapse(predicted: Any, observed: Any, mask: Any, *, threshold: float = 0.1) -> Collapse:
    """Compare how much prediction and observation vary.

    Over the observed entries of each channel, about each one's own mean,

        variance_ratio = var(predicted) / var(observed),    collapsed = not (ratio >= threshold)

    A free fit of an oscillation tends to settle on its time average: a constant has a finite loss
    below that of a rhythm out of phase, and the ratio shows it where the loss does not.

    Arguments:
        predicted: predicted values, `(time, channel)`.
        observed: observed values, `(time, channel)`.
        mask: True where a value was observed, `(time, channel)`. What either array holds
            elsewhere, NaN included, has no effect.
        threshold: least ratio of a prediction that has not collapsed, default 0.1. A prediction
            that is optimal in least squares has a ratio equal to the fraction of variance it
            explains: below 0.1 it explains less than a tenth.

    Returns:
        A `Collapse` with arrays of shape `(channel,)`. A non-finite prediction, or a channel
        whose observations are missing or constant, counts as collapsed; `finite` tells the first.

    Raises:
        ValueError: shapes differ, or `threshold` is not positive.
        TypeError: dtypes differ, or `mask` is not boolean.

    Example:
        >>> from oscillib.fitting import collapse
        >>> observed = jnp.sin(jnp.arange(20.0))[:, None]
        >>> collapse(0.1 * observed, observed, jnp.ones((20, 1), bool)).collapsed
        Array([ True], dtype=bool)

    Source: common practice, no source.
    """
    predicted, observed, mask = jnp.asarray(predicted), jnp.asarray(observed), jnp.asarray(mask)
    check_shape("predicted", predicted, (None, None), "(time, channel)")
    check_shape("observed", observed, predicted.shape, "(time, channel)")
    check_shape("mask", mask, predicted.shape, "(time, channel)")
    check_floating("predicted", predicted)
    check_same_dtype("observed", observed, "predicted", predicted)
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean; got {mask.dtype}. Fix: `mask.astype(bool)`.")
    if not threshold > 0:
        raise ValueError(f"`threshold` must be positive; got {threshold}.")
    finite = jnp.all(~mask | jnp.isfinite(predicted), axis=0)
    p, o = _deviations(predicted, mask), _deviations(observed, mask)
    pp, oo, po = (p * p).sum(0), (o * o).sum(0), (p * o).sum(0)
    ratio = jnp.where(oo > 0, pp / jnp.where(oo > 0, oo, 1), jnp.nan)
    both = (pp > 0) & (oo > 0)
    correlation = jnp.where(both, po / jnp.sqrt(jnp.where(both, pp * oo, 1)), jnp.nan)
    judged = finite & jnp.isfinite(ratio)
    # Not `ratio < threshold`: whatever cannot be compared must not pass for a rhythm.
    return Collapse(
        variance_ratio=jnp.where(judged, ratio, jnp.nan),
        correlation=jnp.where(judged, correlation, jnp.nan),
        collapsed=~(judged & (ratio >= threshold)),
        finite=finite,
    )


def _deviations(x: Array, mask: Array) -> Array:
    """Return deviations from the mean over the mask, zero elsewhere."""
    count = jnp.maximum(mask.sum(0), 1).astype(x.dtype)
    mean = jnp.where(mask, x, 0).sum(0) / count
    return jnp.where(mask, x - mean[None], 0)
