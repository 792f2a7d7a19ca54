"""What noise adds over one window: the continuity weight that the field and its noise imply."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float

from .._validate import check_floating, check_shape
from ..integrate import NoisyStep, Windows
from ._gaussian import Gaussian, predict, whitener


class JointNoise(NamedTuple):
    """What `joint_noise` returns, for each joint between two windows.

    Attributes:
        precision: inverse covariance of a gap, for `losses.continuity(gaps, precision=...)`, shape
            `(joint, size, size)`.
        covariance: what noise adds over the window before the joint, `(joint, size, size)`.
        log_volume: `log det(2 pi covariance) / 2`, shape `(joint,)`. Add its sum to the penalty
            where the noise itself is fitted: without it, more noise always costs less.
    """

    precision: Float[Array, "joint size size"]
    covariance: Float[Array, "joint size size"]
    log_volume: Float[Array, " joint"]


def joint_noise(
    step: NoisyStep, params: Any, states: Float[Array, "window sample *state"], windows: Windows
) -> JointNoise:
    """Return the precision of the gaps between windows that the field and its noise imply.

        P <- J P J' + Q   over the steps of a window, from P = 0;   precision = P^-1

    with `J` the Jacobian of a step at the rolled-out states and `Q` what noise adds in it. A gap is
    the sum of the noise of its window, so `continuity` with this precision is minus its Gaussian
    log-density. This is the bridge between ways to treat a recording: the noise towards zero makes
    the weight infinite and continuity a hard constraint, that is single shooting; windows of one
    sample make reconstruction plus continuity the smoothing problem, whose minimiser is the Kalman
    smoother. Exact for a linear network; else good while noise moves a state little in a window.

    Arguments:
        step: `step(params, h) -> NoisyAdvance`.
        params: handed to `step`, usually `NoisyParams`.
        states: of the rollout without noise, shape `(window, length + 1, *state)`, such as
            `roll_windows(without_noise(step), ...).states`.
        windows: from `cut`.

    Returns:
        Precision, covariance and log-volume of the `window - 1` joints. Not finite where noise
        reaches some direction not at all: there the constraint is hard.

    Raises:
        ValueError: `states` does not fit the windows.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import (
        ...     NoisyParams, cut, noisy_strang, roll_windows, without_noise)
        >>> from oscillib.likelihood import joint_noise
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> params = NoisyParams(HopfParams([0.0], [6.0], saturation=[0.0]), noise=[0.5])
        >>> windows = cut(jnp.arange(9.0), 4)
        >>> rolled = roll_windows(without_noise(step), params, jnp.ones((2, 2, 1)), windows)
        >>> joint = joint_noise(step, params, rolled.states, windows)
        >>> print(jnp.diag(joint.precision[0]).round(6))  # 1 / (0.5^2 4)
        [1. 1.]

    Source: linear noise propagation; common practice, no source.
    """
    check_floating("states", states)
    states = jnp.asarray(states)
    expected = (windows.count, windows.length + 1, *states.shape[2:])
    check_shape("states", states, expected, "(window, length + 1, *state)")
    size = states[0, 0].size
    regular = windows.intervals.ndim == 0
    prepared = step(params, windows.intervals) if regular else None
    lengths = jnp.broadcast_to(windows.intervals, (windows.count, windows.length))
    before = jnp.cumsum(lengths, axis=1) - lengths
    times = windows.t0[:, None] + before

    def over_window(inside, times, lengths):
        def body(covariance, x):
            y, t, h = x
            advance = step(params, h) if prepared is None else prepared
            belief, _ = predict(advance, t, Gaussian(y, covariance), "extended")
            return belief.covariance, None

        start = jnp.zeros((size, size), states.dtype)
        return lax.scan(body, start, (inside, times, lengths))[0]

    # The last window has no joint after it, and may be padded.
    covariance = jax.vmap(over_window)(states[:-1, :-1], times[:-1], lengths[:-1])
    return jax.vmap(_invert)(covariance)


def _invert(covariance: Array) -> JointNoise:
    white = whitener(covariance)
    root = jnp.sqrt(2 * jnp.pi).astype(white.dtype)
    log_volume = jnp.sum(jnp.log(root / jnp.diag(white)))
    return JointNoise(white.T @ white, covariance, log_volume)
