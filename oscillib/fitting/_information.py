"""How much data say about parameters: observed and expected information."""

from collections.abc import Callable
from typing import Any

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, PRNGKeyArray

from .._validate import check_count
from ._flat import check_loss, from_flat, to_flat


def observed_information(
    loss: Callable[[Any], Array], params: Any, constraints: Any
) -> Float[Array, "free free"]:
    """Return the Hessian of a negative log-likelihood on the unconstrained scale.

    Arguments:
        loss: negative log-likelihood, `loss(params) -> scalar`, twice differentiable.
        params: PyTree of parameters; the Hessian is an information at their best fit.
        constraints: tree of constraints.

    Returns:
        Information, `(free, free)`, in the order of `parameter_names`.

    Raises:
        ValueError: `loss` is not a scalar, nothing is free, the trees disagree.
        TypeError: what is fitted is not of one floating dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import observed_information
        >>> from oscillib.parameters import Free
        >>> loss = lambda x: 2 * x[0] ** 2 + x[0] * x[1] + x[1] ** 2
        >>> print(observed_information(loss, jnp.zeros(2), Free()))
        [[4. 1.]
         [1. 2.]]
    """
    check_loss(loss, params)
    to_params = from_flat(params, constraints)
    matrix = jax.jacfwd(jax.grad(lambda x: loss(to_params(x))))(to_flat(params, constraints))
    return (matrix + matrix.T) / 2


def outer_product_information(
    loss: Callable[[Any, Any], Array], params: Any, constraints: Any, recordings: Any
) -> Float[Array, "free free"]:
    """Sum the outer products of the scores of independent recordings.

    `sum_r s_r s_r'`, with s_r the gradient of recording r's loss on the unconstrained scale. At the
    true parameters its expectation is the expected information; it needs only first derivatives
    and many more recordings than entries (its rank is at most their number).

    Arguments:
        loss: `loss(params, recording) -> scalar`, negative log-likelihood of one recording.
        params: PyTree of parameters shared by all recordings.
        constraints: tree of constraints.
        recordings: PyTree of arrays with recordings along their first axis.

    Returns:
        Information, `(free, free)`, in the order of `parameter_names`.

    Raises:
        ValueError: nothing is free, the trees disagree.
        TypeError: what is fitted is not of one floating dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import outer_product_information
        >>> from oscillib.parameters import Free
        >>> loss = lambda centre, y: (y - centre) ** 2 / 2
        >>> outer_product_information(loss, jnp.asarray(0.0), Free(), jnp.array([1.0, -2.0]))
        Array([[5.]], dtype=float64)

    Source: Berndt, Hall, Hall and Hausman 1974, Ann. Econ. Soc. Meas. 3:653 (from memory).
    """
    to_params = from_flat(params, constraints)
    x = to_flat(params, constraints)
    score = jax.grad(lambda x, recording: loss(to_params(x), recording))
    scores = jax.vmap(score, in_axes=(None, 0))(x, recordings)
    return scores.T @ scores


def fisher_simulated(
    loss: Callable[[Any, Any], Array],
    simulate: Callable[[PRNGKeyArray, Any], Any],
    params: Any,
    constraints: Any,
    *,
    key: PRNGKeyArray,
    draws: int = 200,
) -> Float[Array, "free free"]:
    """Estimate the expected information from recordings simulated at the parameters.

    The mean over `draws` simulated recordings of the outer product of the score. Its relative
    error is about `sqrt(2 / draws)` in each direction.

    Arguments:
        loss: `loss(params, recording) -> scalar`, negative log-likelihood of one recording.
        simulate: `simulate(key, params) -> recording`, a draw from the model of that likelihood.
        params: PyTree of parameters.
        constraints: tree of constraints.
        key: random key.
        draws: number of recordings, all held in memory at once; at least several times the number
            of entries. Default 200.

    Returns:
        Information, `(free, free)`, in the order of `parameter_names`.

    Raises:
        ValueError: nothing is free, the trees disagree, `draws` is below 1.
        TypeError: what is fitted is not of one floating dtype; `draws` is not an int.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import fisher_simulated
        >>> from oscillib.parameters import Free
        >>> loss = lambda centre, y: (y - centre) ** 2 / 2
        >>> draw = lambda key, centre: centre + jax.random.normal(key)
        >>> key = jax.random.key(0)
        >>> info = fisher_simulated(loss, draw, jnp.asarray(0.0), Free(), key=key, draws=4000)
        >>> bool(abs(info[0, 0] - 1) < 0.1)
        True

    Source: common practice, no source.
    """
    draws = check_count("draws", draws)
    recordings = jax.vmap(lambda k: simulate(k, params))(jax.random.split(key, draws))
    return outer_product_information(loss, params, constraints, recordings) / draws


def fisher_gaussian(
    mean: Callable[[Any], Array],
    params: Any,
    constraints: Any,
    covariance: Array | Callable[[Any], Array],
) -> Float[Array, "free free"]:
    """Return the expected information of observations with Gaussian errors.

    With J the derivative of the means and V the covariance of the errors,

        J' V^-1 J + tr(V^-1 dV_i V^-1 dV_j) / 2

    the second term only if `covariance` is a function of the parameters. Without it this is the
    Gauss-Newton matrix of the weighted residuals, whose Hessian lacks the residuals' curvature.

    Arguments:
        mean: `mean(params)`, expected observations of any shape.
        params: PyTree of parameters.
        constraints: tree of constraints.
        covariance: of the flattened observations: one variance, shape `()`; a variance each,
            `(observation,)`; or a positive definite matrix, `(observation, observation)`. Or
            a function of the parameters that returns one of these. Units: those of the
            observations, squared.

    Returns:
        Information, `(free, free)`, in the order of `parameter_names`.

    Raises:
        ValueError: the covariance has none of these shapes, nothing is free, the trees disagree.
        TypeError: what is fitted is not of one floating dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import fisher_gaussian
        >>> from oscillib.parameters import Positive
        >>> params = {"level": jnp.asarray(3.0), "spread": jnp.asarray(2.0)}
        >>> constraints = {"level": Positive(), "spread": Positive()}
        >>> mean = lambda p: p["level"] * jnp.ones(8)
        >>> print(fisher_gaussian(mean, params, constraints, lambda p: p["spread"] ** 2))
        [[18.  0.]
         [ 0. 16.]]

    Source: Kay, Fundamentals of Statistical Signal Processing I (1993), eq. 3.31 (from memory).
    """
    to_params = from_flat(params, constraints)
    x = to_flat(params, constraints)
    jacobian = jax.jacfwd(lambda x: mean(to_params(x)).reshape(-1))(x)
    n = jacobian.shape[0]

    def of_x(x):
        return jnp.asarray(covariance(to_params(x)) if callable(covariance) else covariance)

    v = of_x(x)
    if v.shape not in ((), (n,), (n, n)):
        raise ValueError(
            f"`covariance` must have shape (), ({n},) or ({n}, {n}) for the {n} observations of "
            f"`mean`; got {v.shape}."
        )
    slope = jax.jacfwd(of_x)(x) if callable(covariance) else None
    if v.ndim < 2:
        variance = jnp.broadcast_to(v, (n,))[:, None]
        information = (jacobian / variance).T @ jacobian
        if slope is None:
            return information
        relative = jnp.broadcast_to(slope, (n, x.shape[0])) / variance
        return information + relative.T @ relative / 2
    root = jnp.linalg.cholesky(v)
    whiten = lambda m: jax.scipy.linalg.solve_triangular(root, m, lower=True)
    white = whiten(jacobian)
    information = white.T @ white
    if slope is None:
        return information
    both = jax.vmap(lambda dv: whiten(whiten(dv).T), in_axes=2)(slope)
    return information + jnp.einsum("iab,jab->ij", both, both) / 2
