"""The smoother: what all samples say about each state."""

from typing import NamedTuple

import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float

from ._filter import Filtered
from ._gaussian import whitener


class Smoothed(NamedTuple):
    """What `smooth` returns.

    Attributes:
        means: of the state given all samples, `(time, *state)`.
        covariances: of the same, on the flattened state, `(time, size, size)`.
        lag_covariances: covariance of the next state (rows) with this one (columns) given all
            samples, `(time - 1, size, size)`.
        finite: all of it is finite, a boolean scalar.
    """

    means: Float[Array, "time *state"]
    covariances: Float[Array, "time size size"]
    lag_covariances: Float[Array, "step size size"]
    finite: Bool[Array, ""]


def smooth(filtered: Filtered) -> Smoothed:
    """Smooth: work back through what the filter found, so that every state sees all samples.

        G_k = C_k' P_(k+1)^-1
        mean_k += G_k (smoothed mean_(k+1) - predicted mean_(k+1))
        covariance_k += G_k (smoothed covariance_(k+1) - P_(k+1)) G_k'

    with `P` the predicted covariance and `C` the cross covariance of the filter. Exact where the
    filter is: for a linear network.

    Arguments:
        filtered: from `gaussian_filter`.

    Returns:
        Means, covariances and lag-one covariances.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_strang
        >>> from oscillib.likelihood import StateSpaceParams, gaussian_filter, smooth, wide_start
        >>> from oscillib.observe import ReadoutParams, linear_readout
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> dynamics = NoisyParams(HopfParams([0.0], [0.0], saturation=[0.0]), noise=[1e-6])
        >>> params = StateSpaceParams(dynamics, ReadoutParams([1.0]), reading_noise=[0.1])
        >>> values = jnp.array([[0.0], [1.0]])
        >>> out = gaussian_filter(step, linear_readout, params, values, values > -1, h=1.0,
        ...                       start=wide_start((2, 1), 100.0))
        >>> print(smooth(out).means[:, 0, 0].round(4))  # hardly any noise: the average
        [0.5 0.5]

    Source: Rauch, Tung & Striebel 1965 (from memory).
    """
    shape = filtered.means.shape[1:]
    flat = filtered.means.reshape(filtered.means.shape[0], -1)
    predicted = filtered.predicted_means.reshape(flat.shape)

    def body(later, x):
        mean, covariance, next_mean, next_covariance, cross = x
        gain = _gain(cross, next_covariance)
        new_mean = mean + gain @ (later[0] - next_mean)
        new_covariance = covariance + gain @ (later[1] - next_covariance) @ gain.T
        new_covariance = (new_covariance + new_covariance.T) / 2
        return (new_mean, new_covariance), (new_mean, new_covariance, later[1] @ gain.T)

    last = (flat[-1], filtered.covariances[-1])
    xs = (
        flat[:-1], filtered.covariances[:-1], predicted[1:], filtered.predicted_covariances[1:],
        filtered.crosses,
    )  # fmt: skip
    _, (means, covariances, lagged) = lax.scan(body, last, xs, reverse=True)
    means = jnp.concatenate([means, last[0][None]]).reshape(-1, *shape)
    covariances = jnp.concatenate([covariances, last[1][None]])
    finite = jnp.all(jnp.isfinite(means)) & jnp.all(jnp.isfinite(covariances))
    return Smoothed(means, covariances, lagged, finite)


def _gain(cross: Array, predicted: Array) -> Array:
    """Return `cross' predicted^-1`; an entry that is known exactly takes no part."""
    diagonal = jnp.diag(predicted)
    known = diagonal <= 0
    scale = jnp.where(known, 1, 1 / jnp.sqrt(jnp.where(known, 1, diagonal)))
    # In units of the standard deviations, entries of very different size stay well conditioned.
    scaled = predicted * scale[:, None] * scale[None] + jnp.diag(jnp.where(known, 1, 0 * scale))
    white = whitener(scaled) * scale[None]
    return (white @ cross).T @ white
