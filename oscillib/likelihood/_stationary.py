"""Damped linear networks at rest in their noise: covariance, and covariance over time."""

from collections.abc import Callable, Sequence
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_count, check_same_dtype, check_shape, check_values
from ..integrate import linear_transition
from ._gaussian import Gaussian, jacobian


# Enough for damping 1e-9 times the fastest rate of the network.
_DOUBLINGS = 40


class Stationary(NamedTuple):
    """What `stationary_covariance` returns.

    Attributes:
        covariance: of the flattened state, `(size, size)`; NaN unless `damped`.
        damped: every direction decays, so that a stationary state exists; a boolean scalar.
    """

    covariance: Float[Array, "size size"]
    damped: Bool[Array, ""]


def stationary_covariance(
    matrix: Float[Array, "size size"], rate: Float[Array, "size size"]
) -> Stationary:
    """Return the stationary covariance of a damped linear network with noise.

        A P + P A' + Q = 0,   P = integral from 0 to infinity of e^(As) Q e^(A's) ds

    The integral is doubled from a short time until nothing is left of the propagator: sums of
    positive terms alone, cost `size^3`, differentiable, and the flag comes for nothing.

    Arguments:
        matrix: `A`, shape `(size, size)`, per time unit, such as `field.linear_matrix(params)`.
        rate: `Q`, shape `(size, size)`, covariance added per time unit, such as
            `planar_rate(noise)`.

    Returns:
        The covariance, and whether the network is damped. For a Hopf network with saturation it
        describes the linearised network, good while `s^2 b << a^2`.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import stationary_covariance
        >>> print(stationary_covariance(jnp.array([[-0.5]]), jnp.array([[2.0]])).covariance)
        [[2.]]
        >>> bool(stationary_covariance(jnp.array([[0.1]]), jnp.array([[2.0]])).damped)
        False

    Source: Smith 1968, SIAM Journal on Applied Mathematics 16 (from memory).
    """
    matrix = jnp.asarray(matrix)
    norm = lax.stop_gradient(jnp.max(jnp.sum(jnp.abs(matrix), axis=0)))
    short = 1 / jnp.where(norm > 0, norm, 1)
    propagator, covariance = linear_transition(matrix, rate, short)

    def double(carry):
        propagator, covariance = carry
        added = propagator @ covariance @ propagator.T
        return propagator @ propagator, covariance + (added + added.T) / 2

    def maybe(carry, _):
        # Of a propagator below 1e-20 nothing more can be added.
        left = jnp.max(jnp.abs(carry[0])) > 1e-20
        return lax.cond(left, double, lambda x: x, carry), None

    (left, covariance), _ = lax.scan(maybe, (propagator, covariance), length=_DOUBLINGS)
    # NaN from an overflow compares as False.
    damped = (jnp.max(jnp.abs(left)) < 0.1) & jnp.all(jnp.isfinite(covariance))
    return Stationary(jnp.where(damped, covariance, jnp.nan), damped)


def stationary_start(
    matrix: Float[Array, "size size"], rate: Float[Array, "size size"], shape: tuple[int, ...]
) -> Gaussian:
    """Return the belief that a damped network has been at rest in its noise for long.

    Arguments:
        matrix: as in `stationary_covariance`.
        rate: as in `stationary_covariance`.
        shape: of one state, such as `(2, node)`.

    Returns:
        Mean zero and the stationary covariance, for `gaussian_filter`; NaN if the network is not
        damped, and then so is the log-likelihood.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import planar_rate
        >>> from oscillib.likelihood import stationary_start
        >>> matrix = HopfNetwork().linear_matrix(HopfParams([-0.2], [6.0]))
        >>> start = stationary_start(matrix, planar_rate(jnp.array([0.2])), (2, 1))
        >>> print(jnp.diag(start.covariance).round(6))  # s^2 / 2|a|
        [0.1 0.1]
    """
    covariance = stationary_covariance(matrix, rate).covariance
    mean = jnp.zeros(shape, covariance.dtype)
    check_shape("matrix", covariance, (mean.size, mean.size), "(size, size) of a state")
    return Gaussian(mean, covariance)


def lagged_covariance(
    matrix: Float[Array, "size size"],
    covariance: Float[Array, "size size"],
    lags: Float[Array, " lag"],
) -> Float[Array, "lag size size"]:
    """Return the stationary covariance of a linear network over time.

        C(tau) = cov( y(t + tau), y(t) ) = e^(A tau) P

    Arguments:
        matrix: `A`, shape `(size, size)`, per time unit.
        covariance: `P`, from `stationary_covariance`.
        lags: `tau`, shape `(lag,)`, time units, not negative; `C(-tau)` is the transpose.

    Returns:
        Shape `(lag, size, size)`: rows later, columns earlier.

    Raises:
        ValueError: shapes do not fit; a lag is negative.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import lagged_covariance
        >>> out = lagged_covariance(-jnp.eye(1), jnp.eye(1), jnp.array([0.0, 1.0]))
        >>> print(out.ravel().round(6))
        [1.       0.367879]
    """
    matrix, covariance, lags = jnp.asarray(matrix), jnp.asarray(covariance), as_float(lags)
    check_shape("covariance", covariance, matrix.shape, "that of `matrix`")
    check_shape("lags", lags, (None,), "(lag,)")
    check_same_dtype("covariance", covariance, "matrix", matrix)
    check_same_dtype("lags", lags, "matrix", matrix)
    check_values("lags", lags, lambda x: x >= 0, "not negative")
    propagator = lambda tau: linear_transition(matrix, jnp.zeros_like(matrix), tau)[0]
    return jax.vmap(propagator)(lags) @ covariance[None]


def readout_matrix(
    readout: Callable[[Any, Any], Any], params: Any, y: Float[Array, "*state"]
) -> Float[Array, "channel size"]:
    """Return the matrix `H` of a readout: what a small change of the state does to each channel.

    Channels have covariance `H P H'`, lagged covariance `H C H'` and cross-spectrum `H S H'`.

    Arguments:
        readout: `readout(y, params) -> (channel,)`.
        params: handed to it.
        y: state at which to linearise; any state for a linear readout.

    Returns:
        Shape `(channel, size)`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import readout_matrix
        >>> from oscillib.observe import ReadoutParams, linear_readout
        >>> readout_matrix(linear_readout, ReadoutParams([3.0]), jnp.zeros((2, 1)))
        Array([[3., 0.]], dtype=float64)
    """
    return jacobian(lambda y: readout(y, params), jnp.asarray(y))


def sample_lagged_covariance(
    values: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"] | Bool[np.ndarray, "time channel"],
    lags: Sequence[int],
) -> Float[Array, "lag channel channel"]:
    """Return the lagged covariance of a recording, from the pairs of samples that are there.

        C_ij(l) = mean over observed pairs of  (v_i(t + l) - mean_i) (v_j(t) - mean_j)

    Arguments:
        values: shape `(time, channel)`, regularly sampled; anything where `mask` is False.
        mask: same shape, True where observed.
        lags: in samples, not negative.

    Returns:
        Shape `(lag, channel, channel)`; NaN where no pair was observed.

    Raises:
        ValueError: shapes differ; a lag is negative or reaches past the recording.
        TypeError: `mask` is not boolean; a lag is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import sample_lagged_covariance
        >>> values = jnp.array([[1.0], [-1.0], [1.0], [-1.0]])
        >>> sample_lagged_covariance(values, values != 0, [0, 1]).ravel()
        Array([ 1., -1.], dtype=float64)
    """
    values, mask = jnp.asarray(values), jnp.asarray(mask)
    check_shape("mask", mask, values.shape, "that of `values`")
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    there = mask.astype(values.dtype)
    clean = jnp.where(mask, values, 0)
    centred = (clean - (jnp.sum(clean, axis=0) / jnp.sum(there, axis=0))[None]) * there
    count = values.shape[0]

    def at(lag):
        if check_count("lags", lag, least=0) >= count:
            raise ValueError(f"`lags` must be below the {count} samples; got {lag}.")
        pairs = there[lag:].T @ there[: count - lag]
        return (centred[lag:].T @ centred[: count - lag]) / pairs

    return jnp.stack([at(lag) for lag in lags])


def covariance_distance(
    model: Float[Array, "lag channel channel"],
    sample: Float[Array, "lag channel channel"],
    *,
    scale: Float[Array, " channel"],
) -> Float[Array, ""]:
    """Return how far two lagged covariances are apart.

        1/2 sum over lags and channels of ( (model_ij - sample_ij) / (scale_i scale_j) )^2

    A moment-matching loss: robust and cheap, but no likelihood. Neighbouring lags are strongly
    correlated, so its curvature says nothing about uncertainty; use `gaussian_filter` for that.

    Arguments:
        model: shape `(lag, channel, channel)`: `H C H'`, plus the reading variance at lag 0.
        sample: same shape, from `sample_lagged_covariance`; finite.
        scale: standard deviation of each channel, `(channel,)`.

    Returns:
        A scalar.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.likelihood import covariance_distance
        >>> print(covariance_distance(jnp.ones((1, 1, 1)), jnp.zeros((1, 1, 1)),
        ...                           scale=jnp.ones(1)))
        0.5

    Source: method of moments; common practice, no source.
    """
    model, sample, scale = jnp.asarray(model), jnp.asarray(sample), as_float(scale)
    check_shape("sample", sample, model.shape, "that of `model`")
    check_shape("scale", scale, model.shape[-1:], "(channel,)")
    check_same_dtype("sample", sample, "model", model)
    check_same_dtype("scale", scale, "model", model)
    return jnp.sum(((model - sample) / jnp.outer(scale, scale)[None]) ** 2) / 2
