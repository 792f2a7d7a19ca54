"""The Gaussian filter: likelihood of a recording under a noisy system, one sample at a time."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jax.ad_checkpoint import checkpoint_name
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_count, check_same_dtype, check_shape
from ..integrate import NoisyAdvance, NoisyStep, segmented_scan
from ._gaussian import (
    KEPT,
    Gaussian,
    Method,
    check_belief,
    check_method,
    predict,
    square,
    whitener,
)


class Filtered(NamedTuple):
    """What `gaussian_filter` returns.

    Attributes:
        log_likelihood: of all observed samples, nats, a scalar.
        contributions: of each sample given those before, shape `(time,)`; their sum is the above.
        means: of the state given the samples up to and including this one, `(time, *state)`.
        covariances: of the same, on the flattened state, `(time, size, size)`.
        predicted_means: given the samples before this one, `(time, *state)`.
        predicted_covariances: of the same, `(time, size, size)`.
        crosses: covariance of the next predicted state (rows) with this filtered one (columns),
            `(time - 1, size, size)`; what `smooth` works back with.
        channel_means: one-step prediction of every channel, observed or not, `(time, channel)`.
        channel_variances: of the same, reading noise included, `(time, channel)`.
        residuals: whitened one-step errors, `(time, channel)`: standard normal and independent
            over time and channels if the model is right; 0 where not observed. Within a sample they
            are whitened in the order of the channels.
        finite: log-likelihood and all means are finite, a boolean scalar.
    """

    log_likelihood: Float[Array, ""]
    contributions: Float[Array, " time"]
    means: Float[Array, "time *state"]
    covariances: Float[Array, "time size size"]
    predicted_means: Float[Array, "time *state"]
    predicted_covariances: Float[Array, "time size size"]
    crosses: Float[Array, "step size size"]
    channel_means: Float[Array, "time channel"]
    channel_variances: Float[Array, "time channel"]
    residuals: Float[Array, "time channel"]
    finite: Bool[Array, ""]


class Reading(NamedTuple):
    """One belief seen through the readout, before its sample is used."""

    means: Array  # (channel,)
    cross: Array  # (size, channel): P H'
    covariance: Array  # (channel, channel): H P H'
    see: Callable[[Array], Array]  # matrix -> matrix H'


def gaussian_filter(
    step: NoisyStep,
    readout: Callable[[Any, Any], Any],
    params: Any,
    values: Float[Array, "time channel"],
    mask: Bool[Array, "time channel"] | Bool[np.ndarray, "time channel"],
    *,
    h: Float[Array, "..."] | float,
    start: Gaussian,
    t0: Float[Array, ""] | float = 0.0,
    method: Method = "extended",
    substeps: int = 1,
    segment: int | None = None,
) -> Filtered:
    """Filter a recording: log-likelihood, states, one-step predictions, whitened residuals.

        y_(k+1) = after(matrix before(y_k) + e_k),   values_k = readout(y_k) + reading noise

    The belief about the state stays Gaussian. `"extended"` carries its covariance by the Jacobians
    of the two maps, `"cubature"` carries `2 size` points through them. Either is exact where maps
    and readout are linear: a Hopf network without saturation, and nearly so far below its
    bifurcation. Elsewhere it is an approximation that is good while the noise of one interval, and
    what is uncertain about the state, are small beside the amplitude. Linearising overlooks that a
    state that is spread out saturates more than its mean: on a ring of three noisy units of
    amplitude 0.4 to 0.7 and noise 0.2 it finds growth rates low by 0.4 and noise levels by 0.2
    standard errors, `"cubature"` neither (`benchmarks/calibration.py`); prefer it for final
    numbers. The readout is linearised at the predicted mean. The update is in Joseph form, so
    covariances stay positive.

    Arguments:
        step: `step(params, h) -> NoisyAdvance`, such as `noisy_strang(...)`; takes
            `params.dynamics`.
        readout: `readout(y, params) -> (channel,)`; takes `params.readout`.
        params: `StateSpaceParams`, or any PyTree with attributes `dynamics`, `readout` and
            `reading_noise`.
        values: shape `(time, channel)`; anything, also NaN, where `mask` is False.
        mask: same shape, True where observed. Masked entries change neither value nor gradient.
        h: interval between samples in time units: a scalar, or `(time - 1,)` where irregular.
        start: belief about the state at the first sample, before that sample is seen; see
            `stationary_start`, `wide_start`.
        t0: time of the first sample, handed on to the step; default 0.
        method: `"extended"` (default) or `"cubature"`.
        substeps: steps an interval; default 1.
        segment: samples between stored beliefs in reverse mode, as in `rollout`; default `None`:
            one belief a sample is stored.

    Returns:
        `Filtered`. Under `jit`, whatever of it is not used is not computed. A blow-up gives a
        non-finite log-likelihood and `finite` False.

    Raises:
        ValueError: shapes do not fit; unknown method; a count below 1.
        TypeError: dtypes differ; `mask` is not boolean.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_strang
        >>> from oscillib.likelihood import StateSpaceParams, gaussian_filter, wide_start
        >>> from oscillib.observe import ReadoutParams, linear_readout
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> dynamics = NoisyParams(HopfParams([0.2], [6.0]), noise=[0.1])
        >>> params = StateSpaceParams(dynamics, ReadoutParams([1.0]), reading_noise=[0.1])
        >>> values = jnp.array([[0.4], [jnp.nan], [0.1]])
        >>> out = gaussian_filter(step, linear_readout, params, values, ~jnp.isnan(values),
        ...                       h=0.1, start=wide_start((2, 1), 1.0))
        >>> print(out.log_likelihood.round(4), out.residuals[1])
        -1.8686 [0.]

    Source: Kalman 1960; Arasaratnam & Haykin 2009 for the points (from memory).
    """
    values, mask = jnp.asarray(values), jnp.asarray(mask)
    noise = as_float(params.reading_noise)
    check_shape("values", values, (None, noise.shape[0]), "(time, channel)")
    check_shape("mask", mask, values.shape, "that of `values`")
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    start = Gaussian(jnp.asarray(start.mean), jnp.asarray(start.covariance))
    check_belief("start", start)
    check_same_dtype("values", values, "start.mean", start.mean)
    check_same_dtype("params.reading_noise", noise, "start.mean", start.mean)
    check_method(method)
    intervals = Intervals(step, params.dynamics, h, values.shape[0] - 1, t0, method, substeps)

    def body(belief, x):
        value, seen, t, interval = x
        reading = read(readout, params.readout, belief)
        filtered, contribution, residual = _update(belief, reading, value, seen, noise)
        following, cross = intervals.predict(filtered, t, interval)
        variances = jnp.diag(reading.covariance) + noise**2
        return following, (
            contribution, filtered, belief, cross, reading.means, variances, residual
        )  # fmt: skip

    xs = (values, mask, intervals.times, intervals.lengths)
    # Reverse mode keeps the beliefs and what the update factorised, and recomputes the rest: to
    # store every intermediate takes longer than to compute it again.
    policy = jax.checkpoint_policies.save_only_these_names(KEPT)
    kept = jax.checkpoint(body, prevent_cse=False, policy=policy)
    _, outputs = segmented_scan(kept, start, xs, segment=segment)
    contributions, filtered, predicted, crosses, channel_means, channel_variances, residuals = (
        outputs
    )
    total = jnp.sum(contributions)
    finite = jnp.isfinite(total) & jnp.all(jnp.isfinite(filtered.mean))
    return Filtered(
        total, contributions, filtered.mean, filtered.covariance, predicted.mean,
        predicted.covariance, crosses[:-1], channel_means, channel_variances, residuals, finite,
    )  # fmt: skip


class Intervals:
    """The intervals of a grid, ready to carry a belief over each of them.

    The step is prepared once for regular sampling, and anew in each interval otherwise.
    """

    def __init__(self, step, params, h, count: int, t0, method: Method, substeps: int):
        """Check `h` against the number of intervals and lay out times and lengths."""
        self.step, self.params = step, params
        self.method: Method = method
        self.substeps = check_count("substeps", substeps)
        dtype = jax.tree.leaves(params)[0].dtype
        h = as_float(h) if hasattr(h, "dtype") else jnp.asarray(h, dtype)
        t0 = as_float(t0) if hasattr(t0, "dtype") else jnp.asarray(t0, dtype)
        if h.ndim:
            check_shape("h", h, (count,), "(time - 1,)")
            self.prepared = None
            # The step past the last sample is never used; any length will do.
            self.lengths = jnp.concatenate([h, h[-1:]])
            self.times = t0 + jnp.concatenate([jnp.zeros_like(h[:1]), jnp.cumsum(h)])
        else:
            self.prepared = step(params, h / self.substeps)
            self.lengths = jnp.broadcast_to(h, (count + 1,))
            self.times = t0 + h * jnp.arange(count + 1).astype(h.dtype)

    def predict(self, belief: Gaussian, t, length) -> tuple[Gaussian, Array]:
        """Return the belief after one interval, and its covariance with the one before."""
        small = length / self.substeps
        advance: NoisyAdvance = (
            self.step(self.params, small) if self.prepared is None else self.prepared
        )

        def one(carry, i):
            belief, cross = carry
            following, push = predict(advance, t + i * small, belief, self.method)
            return (following, push(cross)), None

        carry = (belief, belief.covariance)
        if self.substeps == 1:
            return one(carry, jnp.zeros_like(small))[0]
        return lax.scan(one, carry, jnp.arange(self.substeps).astype(small.dtype))[0]


def read(readout: Callable[[Any, Any], Any], params: Any, belief: Gaussian) -> Reading:
    """See a belief through the readout, linearised at its mean."""
    means, linear = jax.linearize(lambda y: readout(y, params), belief.mean)
    see = jax.vmap(lambda v: linear(v.reshape(belief.mean.shape)))
    cross = see(belief.covariance)
    return Reading(means, cross, see(cross.T), see)


def _update(belief: Gaussian, reading: Reading, value: Array, seen: Array, noise: Array):
    """Use one sample; an unseen channel has a zero row of H and an innovation of zero."""
    mean, covariance = belief
    innovation = jnp.where(seen, jnp.where(seen, value, 0) - reading.means, 0)
    cross = jnp.where(seen[None], reading.cross, 0)
    both = seen[:, None] & seen[None]
    variance = jnp.where(seen, noise**2, 1)
    # Diagonals by products: the derivative of picking them out is a slow scatter.
    eye = jnp.eye(noise.shape[0], dtype=noise.dtype)
    white = whitener(jnp.where(both, reading.covariance, 0) + eye * variance[None])
    residual = white @ innovation
    scaled = checkpoint_name(cross @ white.T, KEPT)
    count = jnp.sum(seen).astype(mean.dtype)
    contribution = (
        jnp.sum(jnp.log(jnp.sum(eye * white, axis=0)))
        - (jnp.sum(residual**2) + count * jnp.log(2 * jnp.pi).astype(mean.dtype)) / 2
    )
    mean = mean + (scaled @ residual).reshape(mean.shape)
    # Joseph form (I - KH) P (I - KH)' + K R K' stays positive where P - P H' S^-1 H P does not.
    # The two are equal, so derivatives are taken of the second, which is cheaper.
    difference = covariance - square(scaled)
    gain = scaled @ white
    once = covariance - gain @ cross.T
    # K is zero in unseen channels, whatever stands in R there.
    again = gain * variance[None] - jnp.where(seen[None], reading.see(once), 0)
    joseph = once + again @ gain.T
    correction = lax.stop_gradient((joseph + joseph.T) / 2 - difference)
    covariance = checkpoint_name(difference + correction, KEPT)
    return Gaussian(mean, covariance), contribution, residual
