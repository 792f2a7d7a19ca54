"""Haemodynamic response functions, and the convolution of activity with one."""

from typing import Any

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape


def double_gamma(
    t: Float[Array, " time"],
    *,
    delay: Any = 6.0,
    undershoot: Any = 16.0,
    width: Any = 1.0,
    undershoot_width: Any = 1.0,
    ratio: Any = 6.0,
) -> Float[Array, " time"]:
    """Canonical haemodynamic response: a peak and an undershoot, each a gamma density.

        gamma(t; delay / width, width) - gamma(t; undershoot / undershoot_width, ...) / ratio

    with `gamma(t; shape, scale)` the gamma density, and zero for `t <= 0`. With the defaults it
    peaks at 5.0 s at 0.1754 per s, crosses zero at 12.1 s, dips lowest at 15.7 s, and integrates to
    5/6.

    Arguments:
        t: time since the activity, s, shape `(time,)`.
        delay: delay of the peak, s; default 6. Like the others a scalar; may be an array that is
            fitted.
        undershoot: delay of the undershoot, s; default 16.
        width: dispersion of the peak, s; default 1.
        undershoot_width: dispersion of the undershoot, s; default 1.
        ratio: area of the peak over that of the undershoot; default 6.

    Returns:
        Shape `(time,)`, per s.

    Raises:
        ValueError: `t` is not `(time,)`, or a parameter is no scalar.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import double_gamma
        >>> print(double_gamma(jnp.array([0.0, 5.0, 12.0, 16.0])).round(4))
        [ 0.      0.1754  0.0007 -0.0156]

    Source: constants of the canonical response: common practice, no source.
    """
    t = as_float(t)
    check_shape("t", t, (None,), "(time,)")
    given = {
        "delay": delay,
        "undershoot": undershoot,
        "width": width,
        "undershoot_width": undershoot_width,
        "ratio": ratio,
    }
    d, u, w, uw, r = (_scalar(name, value, t) for name, value in given.items())
    return _gamma_density(t, d / w, w) - _gamma_density(t, u / uw, uw) / r


def auditory_response(t: Float[Array, " time"]) -> Float[Array, " time"]:
    """Haemodynamic response of the auditory cortex: a peak and an undershoot.

        (t / 5.4)^6 e^(-(t - 5.4) / 0.9) - 0.35 (t / 10.8)^12 e^(-(t - 10.8) / 0.9)

    and zero for `t <= 0`. It peaks at 5.24 s at 0.9686.

    Arguments:
        t: time since the activity, s, shape `(time,)`.

    Returns:
        Shape `(time,)`, no unit.

    Raises:
        ValueError: `t` is not `(time,)`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import auditory_response
        >>> print(auditory_response(jnp.array([0.0, 5.24])).round(4))
        [0.     0.9686]

    Source: Glover 1999, NeuroImage 9.
    """
    t = as_float(t)
    check_shape("t", t, (None,), "(time,)")
    late = jnp.maximum(t, 0)
    peak = (late / 5.4) ** 6 * jnp.exp(-(late - 5.4) / 0.9)
    dip = (late / 10.8) ** 12 * jnp.exp(-(late - 10.8) / 0.9)
    return peak - 0.35 * dip


def convolve(
    activity: Float[Array, "time channel"],
    response: Float[Array, " lag"],
    interval: Float[Array, ""] | float,
) -> Float[Array, "time channel"]:
    """Convolve sampled activity with a response.

        signal_k = interval sum_j response_j activity_(k - j)

    Activity before the first sample counts as zero, so the signal is complete from sample
    `lag - 1` on. The sum is the trapezium rule wherever the response begins and ends at zero: its
    error falls with the square of the interval or faster.

    Arguments:
        activity: evenly sampled, shape `(time, channel)`.
        response: sampled at `0, interval, 2 interval, ...`, shape `(lag,)`, per time unit.
        interval: sampling interval of both, time units.

    Returns:
        Shape `(time, channel)`.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import convolve
        >>> convolve(jnp.array([[1.0], [0.0], [2.0]]), jnp.array([0.0, 1.0, 0.5]), 1.0).ravel()
        Array([0. , 1. , 0.5], dtype=float64)

    Source: common practice, no source.
    """
    activity, response = as_float(activity), as_float(response)
    check_shape("activity", activity, (None, None), "(time, channel)")
    check_shape("response", response, (None,), "(lag,)")
    check_same_dtype("response", response, "activity", activity)
    scaled = response * _scalar("interval", interval, activity)
    samples = activity.shape[0]
    # Exact sums, not transforms: a signal late in a recording is not blurred by one far away.
    one = lambda x: jnp.convolve(x, scaled, precision="highest")[:samples]
    return jax.vmap(one, in_axes=1, out_axes=1)(activity)


def _gamma_density(t: Array, shape: Array, scale: Array) -> Array:
    positive = t > 0
    safe = jnp.where(positive, t, 1)
    log = (shape - 1) * jnp.log(safe / scale) - safe / scale - jax.lax.lgamma(shape)
    return jnp.where(positive, jnp.exp(log) / scale, 0)


def _scalar(name: str, value: Any, reference: Array) -> Array:
    if not hasattr(value, "dtype"):
        value = jnp.asarray(value, reference.dtype)
    check_shape(name, value, (), "()")
    check_same_dtype(name, value, "the series", reference)
    return jnp.asarray(value)
