"""Forecasts from a belief: mean and variance of every channel over a horizon."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_count, check_same_dtype, check_shape
from ..integrate import NoisyStep
from ._filter import Intervals, read
from ._gaussian import Gaussian, Method, check_method


class Forecast(NamedTuple):
    """What `forecast` returns.

    Attributes:
        means: predicted channels at 1 to `horizon` samples ahead, `(origin, horizon, channel)`.
        variances: of the same, reading noise included, `(origin, horizon, channel)`. The band of
            90 percent is `mean -+ 1.645 sqrt(variance)`.
        finite: whether everything from an origin is finite, `(origin,)`.
    """

    means: Float[Array, "origin horizon channel"]
    variances: Float[Array, "origin horizon channel"]
    finite: Bool[Array, " origin"]


def forecast(
    step: NoisyStep,
    readout: Callable[[Any, Any], Any],
    params: Any,
    origins: Gaussian,
    horizon: int,
    *,
    h: Float[Array, "..."] | float,
    method: Method = "extended",
    substeps: int = 1,
) -> Forecast:
    """Forecast every channel from beliefs about the state at several origins.

    The belief is carried forward as in `gaussian_filter`, without samples. Far ahead, a linearised
    forecast of a self-sustained rhythm shrinks neither its mean nor bounds its variance as the true
    law does, because the phase spreads round the whole cycle; it is good while the standard
    deviation of the phase is below a radian or so. `"cubature"` holds longer.

    Arguments:
        step: `step(params, h) -> NoisyAdvance`; takes `params.dynamics`.
        readout: `readout(y, params) -> (channel,)`; takes `params.readout`.
        params: as in `gaussian_filter`.
        origins: filtered means `(origin, *state)` and covariances `(origin, size, size)`, such as
            `Gaussian(filtered.means[chosen], filtered.covariances[chosen])`.
        horizon: samples ahead.
        h: interval between samples, a scalar, or `(horizon,)`.
        method: `"extended"` (default) or `"cubature"`.
        substeps: steps an interval; default 1.

    Returns:
        Means, variances and a flag for each origin.

    Raises:
        ValueError: shapes do not fit; unknown method; a count below 1.
        TypeError: dtypes differ; a count is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_strang
        >>> from oscillib.likelihood import Gaussian, StateSpaceParams, forecast
        >>> from oscillib.observe import ReadoutParams, linear_readout
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> dynamics = NoisyParams(HopfParams([0.0], [0.0], saturation=[0.0]), noise=[1.0])
        >>> params = StateSpaceParams(dynamics, ReadoutParams([1.0]), reading_noise=[1.0])
        >>> origins = Gaussian(jnp.ones((1, 2, 1)), jnp.zeros((1, 2, 2)))
        >>> out = forecast(step, linear_readout, params, origins, 3, h=2.0)
        >>> print(out.means.ravel(), out.variances.ravel())  # a random walk
        [1. 1. 1.] [3. 5. 7.]
    """
    horizon = check_count("horizon", horizon)
    check_method(method)
    means, covariances = jnp.asarray(origins.mean), jnp.asarray(origins.covariance)
    size = means[0].size
    check_shape(
        "origins.covariance", covariances, (means.shape[0], size, size), "(origin, size, size)"
    )
    check_same_dtype("origins.covariance", covariances, "origins.mean", means)
    noise = as_float(params.reading_noise)
    intervals = Intervals(step, params.dynamics, h, horizon, 0.0, method, substeps)

    def one(belief: Gaussian):
        def body(belief, x):
            following, _ = intervals.predict(belief, *x)
            reading = read(readout, params.readout, following)
            variances = jnp.diag(reading.covariance) + noise**2
            return following, (reading.means, variances)

        xs = (intervals.times[:-1], intervals.lengths[:-1])
        return lax.scan(body, belief, xs)[1]

    predicted, variances = jax.vmap(one)(Gaussian(means, covariances))
    finite = jnp.all(jnp.isfinite(predicted) & jnp.isfinite(variances), axis=(1, 2))
    return Forecast(predicted, variances, finite)
