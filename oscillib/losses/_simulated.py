"""Training on simulated recordings: draws from the prior, and the loss that fits the posterior."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import check_shape
from ..encoders import FreeGaussian, Prior


class Simulated(NamedTuple):
    """Parameters drawn from a prior, and a recording simulated with them.

    Attributes:
        free: the unconstrained parameters, shape `(free,)`.
        params: the same as parameters.
        values: shape `(time, channel)`; 0 where not observed.
        mask: True where observed; all False if the simulation is not finite.
        finite: every observed value is finite, a boolean scalar.
    """

    free: Float[Array, " free"]
    params: Any
    values: Float[Array, "time channel"]
    mask: Bool[Array, "time channel"]
    finite: Bool[Array, ""]


def simulate_pair(
    prior: Prior,
    simulate: Callable[[Any, Any, Array], Any],
    times: Float[Array, " time"] | None,
    mask: Bool[Array, "time channel"] | Bool[np.ndarray, "time channel"],
    *,
    key: Array,
) -> Simulated:
    """Draw parameters from the prior and simulate a recording that has the gaps of a real one.

        free ~ prior,    values = simulate(constrain(free), times, noise)  where mask

    A simulation that is not finite comes back flagged and with nothing observed: an encoder then
    gives the prior for it, so that it cannot move the weights. Count the flags: what is left is the
    prior without the part of it that blows up.

    Arguments:
        prior: what parameters are drawn from.
        simulate: `simulate(params, times, key) -> (time, channel)`: the whole noisy system, reading
            noise included, from a start of its own draw.
        times: sample times of the recording, handed on to `simulate`; `None` where it needs none.
        mask: True where the recording was observed, shape `(time, channel)`.
        key: random key of this pair; `vmap` over keys (and times and masks) for many.

    Returns:
        A `Simulated`.

    Raises:
        ValueError: `simulate` returns another shape than that of `mask`.
        TypeError: `mask` is not boolean.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import Prior
        >>> from oscillib.losses import simulate_pair
        >>> from oscillib.parameters import Positive
        >>> def simulate(params, times, key):
        ...     return params["scale"] * jax.random.normal(key, (times.shape[0], 1))
        >>> prior = Prior({"scale": jnp.array(2.0)}, {"scale": Positive()}, sd=0.3)
        >>> mask = jnp.array([[True], [False], [True]])
        >>> pair = simulate_pair(prior, simulate, jnp.arange(3.0), mask, key=jax.random.key(0))
        >>> pair.values.shape, float(pair.values[1, 0]), bool(pair.finite)
        ((3, 1), 0.0, True)

    Source: Papamakarios and Murray 2016 (from memory).
    """
    mask = jnp.asarray(mask)
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    draw, noise = jax.random.split(key)
    free = prior.law.sample(key=draw)
    params = prior.params(free)
    values = jnp.asarray(simulate(params, times, noise))
    check_shape("simulate(params, times, key)", values, mask.shape, "that of `mask`")
    finite = jnp.all(jnp.isfinite(jnp.where(mask, values, 0)))
    mask = mask & finite
    return Simulated(free, params, jnp.where(mask, values, 0), mask, finite)


def posterior_loss(law: FreeGaussian, free: Float[Array, " free"]) -> Float[Array, ""]:
    """Return the negative log-density of the true parameters under the proposal, in nats.

        loss = -log law(free)

    Its mean over pairs drawn by `simulate_pair` is least where `law` is the posterior, or comes as
    close to it as a Gaussian can in the sense that it matches its mean and covariance.

    Arguments:
        law: proposal for the simulated recording.
        free: the unconstrained parameters that it was simulated with, shape `(free,)`.

    Returns:
        A scalar.

    Raises:
        ValueError: shapes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import FreeGaussian
        >>> from oscillib.losses import posterior_loss
        >>> law = FreeGaussian(jnp.zeros(1), jnp.eye(1))
        >>> print(posterior_loss(law, jnp.array([1.0])).round(4))  # 1/2 + log(2 pi)/2
        1.4189

    Source: Papamakarios and Murray 2016 (from memory).
    """
    return -law.log_prob(free)
