"""Training on recordings themselves: bounds on their evidence under a proposal."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int

from .._validate import check_count
from ..encoders import FreeGaussian, Prior
from ._finite import finite_or_zero


Scalar = Float[Array, ""] | float


class Bound(NamedTuple):
    """What `evidence_bound` and `importance_bound` return.

    Attributes:
        loss: what to minimise, in nats; from the good samples alone.
        bound: the lower bound on the log-evidence, in nats, without warm-up or free bits; NaN if
            any sample is bad.
        divergence: of the proposal from the prior, one term a parameter, nats; their sum is the
            Kullback-Leibler divergence.
        bad: number of samples whose log-likelihood is not finite, or, where it is differentiated,
            whose gradient is not.
    """

    loss: Float[Array, ""]
    bound: Float[Array, ""]
    divergence: Float[Array, " free"]
    bad: Int[Array, ""]


def free_bits(
    divergence: Float[Array, " free"] | Float[Array, "recording free"], least: Scalar
) -> Float[Array, ""]:
    """Sum the terms of a divergence, none of which counts for less than `least`.

        sum_i max(least, mean over recordings of divergence_i)

    A parameter about which the proposal has said less than `least` is not drawn to the prior any
    further, so that what a young network has to say is not lost before it is of use.

    Arguments:
        divergence: `Bound.divergence`, shape `(free,)`, or `(recording, free)` for the average over
            a batch, as published.
        least: nats a parameter, at least 0.

    Returns:
        A scalar, in nats.

    Raises:
        ValueError: `divergence` has neither one nor two axes.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.losses import free_bits
        >>> print(free_bits(jnp.array([[0.0, 1.0], [0.2, 3.0]]), 0.5))
        2.5

    Source: Kingma et al. 2016 (from memory).
    """
    divergence = jnp.asarray(divergence)
    if divergence.ndim not in (1, 2):
        raise ValueError(
            "`divergence` must have shape (free,) or (recording, free); got shape "
            f"{divergence.shape}."
        )
    average = divergence if divergence.ndim == 1 else jnp.mean(divergence, axis=0)
    return jnp.sum(jnp.maximum(average, jnp.asarray(least, average.dtype)))


def evidence_bound(
    law: FreeGaussian,
    prior: Prior,
    log_likelihood: Callable[..., Float[Array, ""]],
    data: tuple[Any, ...],
    *,
    key: Array,
    samples: int = 1,
    beta: Scalar = 1.0,
    least: Scalar = 0.0,
) -> Bound:
    """Bound the log-evidence of a recording from below: what the proposal explains, less its cost.

        bound = mean over samples of log_likelihood(params, *data) - sum(divergence)
        loss  = -mean log_likelihood + beta free_bits(divergence, least)

    Samples are drawn by `law.sample`, so the gradient passes through them into the proposal; the
    divergence from the prior is in closed form. On average `bound` is at most the log-evidence, by
    the divergence of `law` from the posterior.

    A sample with a log-likelihood (or gradient) that is not finite is left out of `loss`, counted
    in `bad`, and makes `bound` NaN. Leaving it out flatters the loss: watch the count, and let it
    be 0 at the end. If none is good, the loss draws the proposal to the prior.

    Arguments:
        law: proposal for the recording.
        prior: maps draws to parameters; what `law` is compared with.
        log_likelihood: `log_likelihood(params, *data) -> scalar`, nats, such as that of a filter,
            or of a rollout in windows. What is trained in it beyond `law` (a decoder, say) may come
            in `data` or in a closure.
        data: what it takes beyond the parameters, such as `(values, mask)`.
        key: random key of this recording and training step.
        samples: how many draws, default 1.
        beta: warm-up weight of the divergence in `loss`, default 1. Raise it from 0 to 1 as an
            array, so that a new value compiles nothing.
        least: free bits, nats a parameter for this recording by itself, default 0. For the average
            over a batch, as published, take `beta=0` here and add
            `beta * free_bits(divergences, least)` to the mean of the losses.

    Returns:
        A `Bound`; `vmap` over recordings, and average `loss`.

    Raises:
        ValueError: `samples` is below 1; the log-likelihood is not a scalar; sizes differ.
        TypeError: `samples` is not an int.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import Prior
        >>> from oscillib.losses import evidence_bound
        >>> from oscillib.parameters import Free
        >>> prior = Prior({"mean": jnp.array(0.0)}, {"mean": Free()}, sd=1.0)
        >>> def log_likelihood(params, values):
        ...     return jnp.sum(jax.scipy.stats.norm.logpdf(values - params["mean"]))
        >>> out = evidence_bound(
        ...     prior.law, prior, log_likelihood, (jnp.array([0.3, 0.5]),), key=jax.random.key(0))
        >>> int(out.bad), bool(out.loss == -out.bound)
        (0, True)

    Source: Kingma and Welling 2014; free bits, Kingma et al. 2016 (from memory).
    """
    logs, good, _ = _draws(law, prior, log_likelihood, data, key, samples)
    divergence = law.divergence(prior.law)
    count = jnp.sum(good).astype(logs.dtype)
    explained = jnp.sum(logs) / jnp.maximum(count, 1)
    loss = -explained + jnp.asarray(beta, logs.dtype) * free_bits(divergence, least)
    return _bound(loss, explained - jnp.sum(divergence), divergence, good)


def importance_bound(
    law: FreeGaussian,
    prior: Prior,
    log_likelihood: Callable[..., Float[Array, ""]],
    data: tuple[Any, ...],
    *,
    key: Array,
    samples: int,
    beta: Scalar = 1.0,
) -> Bound:
    """Bound the log-evidence of a recording by importance weights; tighter with more samples.

        log w_k = log_likelihood(params_k, *data) + beta (log prior(free_k) - log law(free_k))
        loss = -log(mean over samples of w_k),    bound: the same with beta = 1, negated

    On average `bound` rises with the number of samples, towards the log-evidence. With one sample
    it is `evidence_bound` with the divergence drawn rather than in closed form.

    A sample with a log-likelihood (or gradient) that is not finite has weight 0, is counted in
    `bad`, and makes `bound` NaN. If none is good, the loss is 0 and so is its gradient.

    Arguments:
        law: proposal for the recording.
        prior: maps draws to parameters; what they are weighed against.
        log_likelihood: `log_likelihood(params, *data) -> scalar`, as for `evidence_bound`.
        data: what it takes beyond the parameters, such as `(values, mask)`.
        key: random key of this recording and training step.
        samples: how many draws.
        beta: warm-up weight in `loss`, default 1.

    Returns:
        A `Bound`; `vmap` over recordings, and average `loss`.

    Raises:
        ValueError: `samples` is below 1; the log-likelihood is not a scalar; sizes differ.
        TypeError: `samples` is not an int.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import FreeGaussian, Prior
        >>> from oscillib.losses import importance_bound
        >>> from oscillib.parameters import Free
        >>> prior = Prior({"mean": jnp.array(0.0)}, {"mean": Free()}, sd=1.0)
        >>> def log_likelihood(params, value):
        ...     return jax.scipy.stats.norm.logpdf(value - params["mean"])
        >>> posterior = FreeGaussian([0.4], [[0.5**0.5]])  # of a reading of 0.8
        >>> data, key = (jnp.array(0.8),), jax.random.key(0)
        >>> out = importance_bound(posterior, prior, log_likelihood, data, key=key, samples=3)
        >>> print(out.bound.round(4), jax.scipy.stats.norm.logpdf(0.8, scale=2**0.5).round(4))
        -1.4255 -1.4255

    Source: Burda et al. 2016 (from memory).
    """
    logs, good, free = _draws(law, prior, log_likelihood, data, key, samples)
    ratio = jax.vmap(prior.law.log_prob)(free) - jax.vmap(law.log_prob)(free)
    loss = -_log_mean(logs + jnp.asarray(beta, logs.dtype) * ratio, good)
    return _bound(loss, _log_mean(logs + ratio, good), law.divergence(prior.law), good)


def _draws(
    law: FreeGaussian, prior: Prior, log_likelihood: Any, data: tuple[Any, ...], key: Array, n: int
) -> tuple[Array, Array, Array]:
    """Return log-likelihoods, 0 where bad, which are good, and the draws."""
    n = check_count("samples", n)
    if not isinstance(data, tuple):
        raise TypeError(
            f"`data` must be a tuple, handed on as `log_likelihood(params, *data)`; got "
            f"{type(data).__name__}. Fix: `(values, mask)`, or `(values,)`."
        )
    free = jax.vmap(lambda k: law.sample(key=k))(jax.random.split(key, n))

    def one(x):
        out = jnp.asarray(log_likelihood(prior.params(x), *data))
        if out.shape != ():
            raise ValueError(
                f"`log_likelihood` must return a scalar, shape (); got shape {out.shape}. "
                "Fix: sum over samples and channels."
            )
        return out

    logs, good = jax.vmap(lambda x: finite_or_zero(one, x))(free)
    return logs, good, free


def _log_mean(logs: Array, good: Array) -> Array:
    """Return the log of the mean of exp(logs), those that are not good counting as 0."""
    top = jax.lax.stop_gradient(jnp.max(jnp.where(good, logs, -jnp.inf)))
    top = jnp.where(jnp.any(good), top, 0)
    total = jnp.sum(jnp.where(good, jnp.exp(jnp.where(good, logs - top, 0)), 0))
    safe = jnp.where(jnp.any(good), total, 1)
    return jnp.where(jnp.any(good), top + jnp.log(safe / logs.shape[0]), 0)


def _bound(loss: Array, bound: Array, divergence: Array, good: Array) -> Bound:
    bound = jax.lax.stop_gradient(jnp.where(jnp.all(good), bound, jnp.nan))
    return Bound(loss, bound, divergence, jnp.sum(~good))
