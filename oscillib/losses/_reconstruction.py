"""Reconstruction: how far a prediction is from the observed samples."""

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_same_dtype, check_shape


def reconstruction(
    predicted: Float[Array, "*sample channel"],
    values: Float[Array, "*sample channel"],
    mask: Bool[Array, "*sample channel"] | Bool[np.ndarray, "*sample channel"],
    *,
    scale: Float[Array, " channel"],
) -> Float[Array, ""]:
    """Return the negative log-likelihood of the observed samples under Gaussian reading noise.

        sum over observed of  (values - predicted)^2 / (2 scale^2) + log(scale) + log(2 pi) / 2

    Masked entries change neither the value nor any gradient by a single bit, whatever they hold.
    A plain squared error of noisy dynamics has no meaning as a likelihood of the dynamics: the
    noise that drives the oscillator is not in it.

    Arguments:
        predicted: shape `(..., channel)`, in channel units.
        values: same shape; anything, also NaN, where `mask` is False.
        mask: same shape, True where observed.
        scale: standard deviation of the reading noise, shape `(channel,)`, channel units, positive.

    Returns:
        A scalar, in nats.

    Raises:
        ValueError: shapes differ; nothing is broadcast.
        TypeError: dtypes differ; `mask` is not boolean.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.losses import reconstruction
        >>> values = jnp.array([[1.0], [jnp.nan]])
        >>> loss = reconstruction(jnp.zeros((2, 1)), values, ~jnp.isnan(values),
        ...                       scale=jnp.ones(1))
        >>> print(loss.round(4))  # 1/2 + log(2 pi)/2
        1.4189

    Source: Gaussian density; common practice, no source.
    """
    predicted, values, scale = jnp.asarray(predicted), jnp.asarray(values), as_float(scale)
    mask = jnp.asarray(mask)
    check_shape("values", values, predicted.shape, "that of `predicted`")
    check_shape("mask", mask, predicted.shape, "that of `predicted`")
    check_shape("scale", scale, predicted.shape[-1:], "(channel,)")
    check_same_dtype("values", values, "predicted", predicted)
    check_same_dtype("scale", scale, "predicted", predicted)
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    # Both branches of a `where` are differentiated: masked entries are replaced before the
    # arithmetic, so that NaN there cannot reach a gradient, and again after it.
    residual = jnp.where(mask, predicted, 0) - jnp.where(mask, values, 0)
    full = jnp.broadcast_to(scale, predicted.shape)
    terms = (residual / full) ** 2 / 2 + jnp.log(full) + jnp.log(2 * jnp.pi) / 2
    return jnp.sum(jnp.where(mask, terms, 0))
