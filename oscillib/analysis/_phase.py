"""Phase and amplitude of a rhythm, and its mean frequency."""

from functools import partial
from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_floating, check_same_dtype, check_shape, check_values
from ..fields import HopfParams, HopfUnitParams


class PhaseAmplitude(NamedTuple):
    """Phase and amplitude over time.

    Attributes:
        phase: radians, `(time, *rest)`; continued over whole turns: it starts in (-pi, pi] and
            never jumps by more than pi.
        amplitude: same shape, units of the values, not negative.
    """

    phase: Float[Array, "time *rest"]
    amplitude: Float[Array, "time *rest"]


def planar_phase(states: Float[Array, "time 2 *node"]) -> PhaseAmplitude:
    """Return angle and radius of planar states, turn after turn: the protophase.

        phase = arg(x + i y),    amplitude = sqrt(x^2 + y^2)

    The angle advances unevenly within a turn unless the cycle is a circle run through evenly; over
    whole turns it counts exactly (`mean_frequency`). The cycle must go around the origin: subtract
    a centre where it does not. Two samples must be less than half a turn apart. At the origin
    itself the phase is 0 by convention, and both derivatives are 0 there instead of NaN.

    Arguments:
        states: trajectory, shape `(time, 2, *node)`.

    Returns:
        Phase and amplitude, each `(time, *node)`.

    Raises:
        ValueError: the second axis does not have length 2.
        TypeError: the states are not floating.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import planar_phase
        >>> angle = jnp.array([0.0, 2.0, 4.0])
        >>> print(planar_phase(2 * jnp.stack([jnp.cos(angle), jnp.sin(angle)], axis=1)).phase)
        [0. 2. 4.]

    Source: common practice, no source; the word: Kralemann et al. 2008 (from memory).
    """
    check_floating("states", states)
    if states.ndim < 2 or states.shape[1] != 2:
        raise ValueError(
            f"`states` must have shape (time, 2, *node); got {states.shape}. "
            "Fix: pick the two components that turn, such as `states[:, :2]`."
        )
    return _polar(states[:, 0], states[:, 1])


def analytic_phase(values: Float[Array, "time *channel"]) -> PhaseAmplitude:
    """Return phase and amplitude of scalar channels from the analytic signal.

        z = x + i H[x],    phase = arg z,    amplitude = |z|

    with the Hilbert transform H by FFT over the whole record. Sound for one rhythm whose amplitude
    and frequency change little within a cycle: remove the mean (and trend) and pass a band around
    the rhythm first. FFT takes the record as periodic, so that about a cycle at either end is
    unreliable, unless whole cycles fit. Equal intervals, no gaps: a single NaN makes all NaN.

    Arguments:
        values: shape `(time, *channel)`, at equal intervals, each channel with zero mean.

    Returns:
        Phase and amplitude, each `(time, *channel)`. The phase of `cos` is 0 at its top. Where the
        analytic signal vanishes, as in a channel of zeros, phase and derivatives are 0.

    Raises:
        ValueError: `values` has no time axis.
        TypeError: `values` is not floating.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import analytic_phase
        >>> angle = 2 * jnp.pi * jnp.arange(8.0) / 8
        >>> print(analytic_phase(3 * jnp.cos(angle)).amplitude.round(6))
        [3. 3. 3. 3. 3. 3. 3. 3.]

    Source: Gabor 1946 (from memory).
    """
    check_floating("values", values)
    values = jnp.asarray(values)
    if values.ndim == 0:
        raise ValueError("`values` must have shape (time, *channel); got a scalar.")
    signal = _analytic(values.reshape(values.shape[0], -1))
    return _polar(*(part.reshape(values.shape) for part in signal))


def mean_frequency(
    phase: Float[Array, "time *rest"], times: Float[Array, " time"]
) -> Float[Array, "*rest"]:
    """Return the angular frequency averaged over as many whole turns as the record holds.

        frequency = 2 pi N / (time when the phase has gone N turns - first time)

    so that the unevenness of a protophase within a turn cancels. The time of passage is placed by
    a straight line between two samples.

    Arguments:
        phase: radians, continued over whole turns, shape `(time, *rest)`.
        times: shape `(time,)`, increasing.

    Returns:
        Shape `(*rest)`, rad per time unit, negative for a phase that falls; NaN where the record
        holds no whole turn, or is not finite.

    Raises:
        ValueError: shapes do not fit; times do not increase.
        TypeError: dtypes differ, or are not floating.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import mean_frequency
        >>> times = jnp.linspace(0.0, 4.0, 41)
        >>> print(mean_frequency(6.0 * times, times).round(6))
        6.0

    Source: common practice, no source.
    """
    check_floating("phase", phase)
    phase, times = jnp.asarray(phase), as_float(times)
    check_shape("times", times, (phase.shape[0] if phase.ndim else None,), "(time,)")
    check_same_dtype("times", times, "phase", phase)
    check_values("times", jnp.diff(times), lambda d: d > 0, "strictly increasing")
    flat = phase.reshape(phase.shape[0], -1)
    return _average_over_turns(flat, times).reshape(phase.shape[1:])


def hopf_phase(
    y: Float[Array, "2 *node"], params: HopfParams | HopfUnitParams
) -> Float[Array, "*node"]:
    """Return the asymptotic phase of Hopf units that are not coupled, in closed form.

        phase = arg z - (c / b) ln(|z| / r*),    r* = sqrt(a / b)

    where `a, c, b` are growth, shear and saturation. Along every trajectory but the one at the
    origin it advances at exactly the frequency of the limit cycle, `w - c a / b`: states of equal
    phase end up together. A coupling in `params` is not looked at.

    Arguments:
        y: state, shape `(2, node)`, or `(2,)`; use `vmap` over a trajectory.
        params: parameters of the units.

    Returns:
        Radians, shape `(node,)`, or `()`, not brought into one turn. NaN where the phase does not
        exist: at the origin, or without a limit cycle (`a <= 0` or `b <= 0`).

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import hopf_phase
        >>> from oscillib.fields import HopfParams
        >>> p = HopfParams([1.0], [6.0], shear=[2.0])
        >>> print(hopf_phase(jnp.array([[jnp.e], [0.0]]), p))
        [-2.]

    Source: Kuramoto 1984; Winfree 2001 (isochrons; from memory).
    """
    check_shape("y", y, (2, *params.growth.shape), "(component, *node)")
    check_same_dtype("y", y, "params.growth", params.growth)
    a, b = params.growth, params.saturation
    exists = (a > 0) & (b > 0) & (y[0] ** 2 + y[1] ** 2 > 0)
    a, b = jnp.where(exists, a, 1), jnp.where(exists, b, 1)
    x, y = jnp.where(exists, y[0], 1), jnp.where(exists, y[1], 0)
    phase = jnp.arctan2(y, x) - params.shear / b * jnp.log((x**2 + y**2) * b / a) / 2
    return jnp.where(exists, phase, jnp.nan)


@jax.jit
def _analytic(values: Float[Array, "time channel"]) -> tuple[Array, Array]:
    """Return real and imaginary part of the analytic signal."""
    n = values.shape[0]
    # Twice the positive frequencies, none of the negative ones; the mean and, at even length, the
    # highest frequency have no partner and stay.
    k = jnp.arange(n)
    weight = jnp.where((k > 0) & (2 * k < n), 2, jnp.where((k == 0) | (2 * k == n), 1, 0))
    columns = jnp.fft.fft(values, axis=0)
    signal = jnp.fft.ifft(columns * weight[:, None].astype(columns.dtype), axis=0)
    return jnp.real(signal), jnp.imag(signal)


@jax.jit
def _polar(x: Array, y: Array) -> PhaseAmplitude:
    somewhere = x**2 + y**2 > 0
    # arctan2 and the root have no derivative at the origin: both must be kept away from it.
    x, y = jnp.where(somewhere, x, 1), jnp.where(somewhere, y, 0)
    radius = jnp.where(somewhere, jnp.sqrt(x**2 + y**2), 0)
    return PhaseAmplitude(jnp.unwrap(jnp.arctan2(y, x), axis=0), radius)


@jax.jit
@partial(jax.vmap, in_axes=(1, None))
def _average_over_turns(phase: Float[Array, " time"], times: Float[Array, " time"]) -> Array:
    gone = phase - phase[0]
    direction = jnp.where(jnp.max(gone) >= jnp.max(-gone), 1, -1).astype(phase.dtype)
    turns = direction * gone / (2 * jnp.pi)
    whole = jax.lax.stop_gradient(jnp.floor(jnp.max(turns)))
    passed = jnp.argmax(turns >= whole)
    counts = (whole >= 1) & jnp.all(jnp.isfinite(phase))
    rise = jnp.where(counts, turns[passed] - turns[passed - 1], 1)
    part = jnp.where(counts, (whole - turns[passed - 1]) / rise, 0)
    elapsed = times[passed - 1] + part * (times[passed] - times[passed - 1]) - times[0]
    elapsed = jnp.where(counts, elapsed, 1)
    return jnp.where(counts, direction * 2 * jnp.pi * whole / elapsed, jnp.nan)
