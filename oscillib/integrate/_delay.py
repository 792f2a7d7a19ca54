"""Coupling delays: rollout on a fixed grid with a ring buffer of the past."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jaxtyping import Array, Float

from .._validate import (
    as_float,
    check_count,
    check_floating,
    check_same_dtype,
    check_shape,
    check_values,
    is_concrete,
)
from ._rollout import segmented_scan
from ._types import Scalar


# The cubic through four samples: its slope at each of them, in units of one step.
_SLOPES = np.array([[-11, 18, -9, 2], [-2, -3, 6, -1], [1, -6, 3, 2], [-2, 9, -18, 11]]) / 6


class _Stages(NamedTuple):
    """Where the past of every edge lies at some stages of a step, and how to interpolate there.

    Delays are constant, so this is the same in every step: intervals counted from the present,
    `(stage, edge)`, and weights of the two states and the two slopes that enclose each place,
    `(stage, 4, edge)`.
    """

    interval: Array
    weights: Array


def delay_rollout(
    field: Callable[[Any, Any, Any, Any], Any],
    params: Any,
    history: Float[Array, "sample component node"],
    h: Scalar | float,
    steps: int,
    *,
    source: Any,
    delay: Float[Array, " edge"],
    t0: Scalar | float = 0.0,
    segment: int | None = None,
) -> Float[Array, "time component node"]:
    """Roll a field with delayed coupling out, by the classical Runge-Kutta step of order 4.

        dy/dt = field(t, y, past, params),    past[:, e] = y[:, source_e](t - delay_e)

    Between grid points the past is the cubic that has the states and the slopes of both ends
    (Hermite, error of order 4, the order of the step), taken from a ring buffer of as many samples
    as `history` has.

    Order 4 is met if the history joins the solution smoothly, or if every delay is a whole number
    of steps. Otherwise the kink at `t0` comes back after each delay in the middle of a step, and
    the order is 2.

    A delay is zero, or at least one step, or is refused: a shorter one would need the present step
    before it is done. An edge with delay exactly zero is not delayed, whatever its derivative: the
    derivative with respect to that delay is zero. Elsewhere derivatives with respect to the delays
    pass through the weights of the interpolation (the number of whole steps being piecewise
    constant); the slope of the interpolation is continuous from one interval to the next, so a
    delay may cross a grid point. Only the history's kink at `t0`, if it has one, adds a jump of
    order `h` to that derivative where it crosses a stage of a step.

    Arguments:
        field: `field(t, y, past, params) -> dy`, `y` of shape `(component, node)` and `past`
            `(component, edge)`: `coupled(unit).delayed`, or your own.
        params: PyTree of parameters, handed to `field`.
        history: states at `t0 - (sample - 1) h, ..., t0 - h, t0`, the last one being the start;
            shape `(sample, component, node)`. At least 4 samples, and enough for the longest delay.
        h: step size, a scalar, time units.
        steps: number of steps.
        source: node whose past each edge carries, shape `(edge,)`, known integers:
            `Edges.source`.
        delay: shape `(edge,)`, time units; `0`, or from `h` to `(sample - 1) h`.
        t0: time of the start; default 0.
        segment: as in `rollout`: steps between stored states in reverse mode; default `None`.

    Returns:
        States at the start and after each step, shape `(steps + 1, component, node)`. Inside `jit`
        a delay that is refused makes every state after the start NaN.

    Raises:
        ValueError: shapes do not fit; too short a history; where values are known, a delay outside
            its range or a source that is no node.
        TypeError: dtypes differ; `source` holds no integers.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import delay_rollout
        >>> field = lambda t, y, past, params: -past  # x'(t) = -x(t - 1), and 1 before t = 0
        >>> history = jnp.ones((11, 1, 1))
        >>> x = delay_rollout(field, None, history, 0.1, 20, source=[0], delay=jnp.array([1.0]))
        >>> print(x[10].ravel().round(6), x[20].ravel().round(6))  # 1 - t, then + (t - 1)^2 / 2
        [0.] [-0.5]

    Source: continuous extension of a Runge-Kutta step, Bellen & Zennaro 2003 (from memory).
    """
    check_floating("history", history)
    history = jnp.asarray(history)
    check_shape("history", history, (None, None, None), "(sample, component, node)")
    dtype, nodes = history.dtype, history.shape[2]
    samples = _check_history(history)
    h = _matching_scalar("h", h, history)
    t0 = _matching_scalar("t0", t0, history)
    source = _check_source(source, nodes)
    delay = as_float(delay)
    check_shape("delay", delay, source.shape, "(edge,), as `source`")
    check_same_dtype("delay", delay, "history", history)
    lag = _check_lag(delay, h, samples - 1)
    _check_field(field, params, history, source)

    first, later = _stages(lag, (0.0,), samples), _stages(lag, (0.5, 1.0), samples)
    undelayed = (lag == 0)[None]

    def slope(t, y, arrived):
        return field(t, y, jnp.where(undelayed, y[:, source], arrived), params)

    def body(carry, k):
        y, buffer = carry
        t, newest = t0 + h * k.astype(dtype), (k + samples - 1) % samples
        k1 = slope(t, y, _interpolate(buffer, newest, first, source)[0])
        # Slopes are stored per step. At t0 the slope to the left is the history's, and stays so.
        left = jnp.where(k == 0, buffer[newest, 2], h * k1)
        buffer = buffer.at[newest, 1:].set(jnp.stack([h * k1, left]))
        middle, end = _interpolate(buffer, newest, later, source)
        k2 = slope(t + h / 2, y + h / 2 * k1, middle)
        k3 = slope(t + h / 2, y + h / 2 * k2, middle)
        k4 = slope(t + h, y + h * k3, end)
        y = y + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        return (y, buffer.at[(newest + 1) % samples, 0].set(y)), y

    index = jnp.arange(check_count("steps", steps))
    slopes = _history_slopes(history)
    buffer = jnp.stack([history, slopes, slopes], axis=1)
    _, ys = segmented_scan(body, (history[-1], buffer), index, segment=segment)
    return jnp.concatenate([history[-1:], ys])


def _stages(lag: Array, fractions: tuple[float, ...], samples: int) -> _Stages:
    """Find the intervals that hold `fraction - lag`, in steps from the present, and the weights."""
    place = jnp.asarray(fractions, lag.dtype)[:, None] - lag[None]
    # At the last grid point known the interval before it is used: the one after does not exist yet.
    interval = jnp.clip(jnp.floor(place), 1 - samples, -1)
    s = place - interval
    end = s**2 * (3 - 2 * s)
    weights = jnp.stack([1 - end, end, s * (1 - s) ** 2, s**2 * (s - 1)], axis=1)
    return _Stages(interval.astype(int), weights)


def _interpolate(buffer: Array, newest: Array, stages: _Stages, source: np.ndarray) -> Array:
    """Return the interpolated past of every edge, shape `(stage, component, edge)`."""
    start = (newest + stages.interval) % buffer.shape[0]
    end = (start + 1) % buffer.shape[0]
    sample = jnp.stack([start, end, start, end], axis=1)
    # Of a sample are kept: the state, the slope to its right, the slope to its left.
    kept = np.array([0, 0, 1, 2])[None, :, None]
    parts = buffer[sample, kept, :, source[None, None]]
    return jnp.einsum("ske,skec->sce", stages.weights, parts)


def _history_slopes(history: Array) -> Array:
    """Return the slope at every sample, per step, of the cubic through the nearest four."""
    n = history.shape[0]
    sample = np.arange(n)
    first = np.clip(sample - 1, 0, n - 4)
    coefficients = jnp.asarray(_SLOPES[sample - first], history.dtype)
    nearest = history[first[:, None] + np.arange(4)]
    return jnp.einsum("sk,skcn->scn", coefficients, nearest)


def _check_lag(delay: Array, h: Array, most: int) -> Array:
    """Return the delays in steps, NaN where one cannot be met."""
    lag = delay / h
    # Rounding of `delay / h` must not refuse a delay of just one step, or of the whole history.
    slack = 8 * float(jnp.finfo(delay.dtype).eps) * most
    low, high = 1 - slack, most + slack
    good = (lag == 0) | ((lag >= low) & (lag <= high))
    if is_concrete(delay, h):
        known = np.asarray(h).item()
        check_values(
            "delay",
            delay,
            lambda d: (d == 0) | ((d / known >= low) & (d / known <= high)),
            f"0, or from one step ({known:.6g}) to the length of the history ({most * known:.6g})",
        )
    # Rounding is taken off without touching the derivative, which a plain clip halves at its ends.
    rounded = jnp.where(lag == 0, 0, jnp.clip(lag, 1, most))
    return jnp.where(good, lag + lax.stop_gradient(rounded - lag), jnp.nan)


def _matching_scalar(name: str, x: Any, history: Array) -> Array:
    x = as_float(x) if hasattr(x, "dtype") else jnp.asarray(x, history.dtype)
    check_shape(name, x, (), "()")
    check_same_dtype(name, x, "history", history)
    return x


def _check_history(history: Array) -> int:
    samples = history.shape[0]
    if samples < 4:
        raise ValueError(
            f"`history` must hold at least 4 samples, for the slopes at its ends; got {samples}. "
            "Fix: prepend earlier states (copies of the first for a constant past)."
        )
    return samples


def _check_source(source: Any, nodes: int) -> np.ndarray:
    if not is_concrete(source):
        raise TypeError("`source` must be known, because it is structure; got a tracer.")
    source = np.asarray(source)
    if not np.issubdtype(source.dtype, np.integer):
        raise TypeError(f"`source` must hold node numbers (integers); got dtype {source.dtype}.")
    check_shape("source", source, (None,), "(edge,)")
    check_values("source", source, lambda x: (x >= 0) & (x < nodes), f"in 0 ... {nodes - 1}")
    return source


def _check_field(field: Callable, params: Any, history: Array, source: np.ndarray) -> None:

    y = jax.ShapeDtypeStruct(history.shape[1:], history.dtype)
    past = jax.ShapeDtypeStruct((history.shape[1], len(source)), history.dtype)
    t = jax.ShapeDtypeStruct((), history.dtype)
    dy = jax.eval_shape(field, t, y, past, params)
    if getattr(dy, "shape", None) != y.shape or dy.dtype != y.dtype:
        got = f"{dy.shape} {dy.dtype}" if hasattr(dy, "shape") else type(dy).__name__
        raise ValueError(
            "`field(t, y, past, params)` must return the shape and dtype of a state, "
            f"{y.shape} {y.dtype}; got {got}. Fix: add up at each node what its edges carry."
        )
