"""What a recording says about the parameters: Fisher information of the filter's innovations."""

from collections.abc import Callable
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jax.flatten_util import ravel_pytree
from jaxtyping import Array, Bool, Float

from .._validate import as_float
from ..integrate import NoisyStep
from ..parameters import constrain, unconstrain
from ._filter import gaussian_filter, read
from ._gaussian import Gaussian, Method, whitener


def filter_information(
    step: NoisyStep,
    readout: Callable[[Any, Any], Any],
    params: Any,
    constraints: Any,
    values: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"] | Bool[np.ndarray, "time channel"],
    *,
    h: Float[Array, "..."] | float,
    start: Gaussian,
    method: Method = "extended",
    substeps: int = 1,
    batch: int = 16,
) -> Float[Array, "free free"]:
    """Return the Fisher information that a recording holds, by the filter's one-step predictions.

    With m and S mean and covariance of the prediction of each sample, and derivatives along the
    unconstrained leaves,

        I_ij = sum over samples of  dm_i' S^-1 dm_j + tr(S^-1 dS_i S^-1 dS_j) / 2

    It needs first derivatives only, forward through the filter, is positive semidefinite wherever
    it is taken, and its expectation over recordings is the expected information: the curvature for
    `refine` (Fisher scoring) and, at the best fit, for `laplace`. As exact as the filter is.

    Arguments:
        step: as for `gaussian_filter`.
        readout: as for `gaussian_filter`.
        params: as for `gaussian_filter`.
        constraints: tree of constraints.
        values: shape `(time, channel)`; anything where `mask` is False.
        mask: same shape, True where observed.
        h: interval between samples, a scalar or `(time - 1,)`.
        start: belief at the first sample; taken as known.
        method: as for `gaussian_filter`.
        substeps: as for `gaussian_filter`.
        batch: directions differentiated at once, default 16; fewer need less memory.

    Returns:
        Information, `(free, free)`, in the order of the flat vector of unconstrained leaves.

    Raises:
        ValueError: as `gaussian_filter`; nothing is free; the trees disagree.
        TypeError: as `gaussian_filter`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_strang
        >>> from oscillib.likelihood import StateSpaceParams, filter_information, wide_start
        >>> from oscillib.observe import ReadoutParams, linear_readout
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> dynamics = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1])
        >>> params = StateSpaceParams(dynamics, ReadoutParams([1.0]), reading_noise=[0.1])
        >>> values = jnp.array([[0.4], [jnp.nan], [0.1]])
        >>> filter_information(step, linear_readout, params, params.constraints(), values,
        ...                    ~jnp.isnan(values), h=0.1, start=wide_start((2, 1), 1.0)).shape
        (7, 7)

    Source: information of a Gaussian with moments that depend on parameters, e.g. Harvey 1989
    (from memory).
    """
    flat, unravel = ravel_pytree(unconstrain(params, constraints))
    seen = jnp.asarray(mask)

    def predictions(x):
        trial = constrain(unravel(x), constraints, params)
        out = gaussian_filter(
            step, readout, trial, values, mask, h=h, start=start, method=method, substeps=substeps
        )
        beliefs = Gaussian(out.predicted_means, out.predicted_covariances)
        reading = jax.vmap(lambda belief: read(readout, trial.readout, belief)[:3])(beliefs)
        means, _, covariances = reading
        return _observed(means, covariances, as_float(trial.reading_noise), seen)

    (_, covariances), push = jax.linearize(predictions, flat)
    white = jax.vmap(whitener)(covariances)

    def whitened(direction):
        means, covariances = push(direction)
        spread = jnp.einsum("tij,tjk,tlk->til", white, covariances, white) / jnp.sqrt(2)
        return jnp.concatenate([jnp.einsum("tij,tj->ti", white, means).ravel(), spread.ravel()])

    eye = jnp.eye(flat.shape[0], dtype=flat.dtype)
    rows = lax.map(whitened, eye, batch_size=batch)
    return rows @ rows.T


def _observed(means: Array, covariances: Array, noise: Array, seen: Array) -> tuple[Array, Array]:
    """Blank what was not observed: mean 0 and variance 1, whatever the parameters."""
    both = seen[:, :, None] & seen[:, None, :]
    eye = jnp.eye(noise.shape[0], dtype=noise.dtype)
    variance = jnp.where(seen, noise[None] ** 2, 1)
    blank = jnp.where(both, covariances, 0) + eye[None] * variance[:, None, :]
    return jnp.where(seen, means, 0), blank
