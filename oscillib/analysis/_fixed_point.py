"""Fixed points of a field: one from a start, or all that many starts lead to."""

from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float, Int

from .._validate import check_count, check_floating
from ..integrate._runge_kutta import check_field_output
from ..integrate._types import Field, State
from ._root import RootStatus, default_tolerance, find_root
from ._spectrum import spectrum


class FixedPoint(NamedTuple):
    """What `fixed_point` returns.

    Attributes:
        state: the fixed point, or the best state met; shape `(*state)`.
        status: code of `RootStatus`.
        speed: largest entry of the field left there, units of the state per time unit.
        steps: Newton steps tried.
    """

    state: Float[Array, "*state"]
    status: Int[Array, ""]
    speed: Float[Array, ""]
    steps: Int[Array, ""]


class FixedPoints(NamedTuple):
    """What `fixed_points` returns: numpy arrays, one row a distinct fixed point.

    Attributes:
        states: shape `(point, *state)`, in the order of their first entries, then of the next.
        rate: growth rates of small disturbances, `(point, size)`, fastest first; per time unit.
        frequency: their angular frequencies, `(point, size)`, rad per time unit.
        starts: how many starts led to each point, `(point,)`.
        status: how each start ended, `(start,)`, codes of `RootStatus`.
    """

    states: np.ndarray
    rate: np.ndarray
    frequency: np.ndarray
    starts: np.ndarray
    status: np.ndarray


def fixed_point(
    field: Field,
    params: Any,
    y0: State,
    *,
    t: Float[Array, ""] | float = 0.0,
    tolerance: float | None = None,
    max_steps: int = 100,
) -> FixedPoint:
    """Find a fixed point of a field, stable or not, from a start near it.

        field(t, y, params) = 0

    By a damped Newton method, so that where it leads is not where the dynamics leads. Nothing
    raises inside `jit`: look at `status`. Where two fixed points merge (a fold) the slope is
    singular and the search ends as stalled, or converges to fewer digits.

    Derivatives of `state` in `params`, in both modes and of any order, are those of the implicit
    function theorem, `dy = -J^-1 dF`; they mean nothing unless converged, and none flows to `y0`.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: PyTree of parameters.
        y0: start, shape `(*state)`.
        t: time handed to the field; default 0.
        tolerance: how far the remaining Newton step may go in any entry, in units of the state;
            default `eps^(3/4)` times the largest entry of `y0`, at least of 1: 1.8e-12 in float64.
            Give it where the state is much smaller than 1.
        max_steps: Newton steps allowed; default 100.

    Returns:
        State, status, remaining speed and number of steps.

    Raises:
        ValueError: the field returns another shape than `y0`; `max_steps` is below 1.
        TypeError: `y0` is not floating; the field returns another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import fixed_point
        >>> logistic = lambda t, y, capacity: y * (1 - y / capacity)
        >>> print(fixed_point(logistic, 3.0, jnp.array([2.0])).state.round(9))
        [3.]

    Source: Deuflhard 2004, Newton Methods for Nonlinear Problems (from memory).
    """
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    max_steps = check_count("max_steps", max_steps)
    checked = check_field_output(field)
    flat = lambda x: checked(t, x.reshape(y0.shape), params).reshape(-1)
    x0 = y0.reshape(-1)
    if tolerance is None:
        step = default_tolerance(y0.dtype) * jnp.maximum(jnp.max(jnp.abs(x0)), 1)
    else:
        step = jnp.asarray(tolerance, y0.dtype)
    root = find_root(flat, x0, jnp.full_like(x0, step), max_steps)
    speed = jnp.max(jnp.abs(flat(root.x)))
    return FixedPoint(root.x.reshape(y0.shape), root.status, speed, root.steps)


def fixed_points(
    field: Field,
    params: Any,
    starts: Float[Array, "start *state"],
    *,
    t: float = 0.0,
    distance: float | None = None,
    max_steps: int = 100,
) -> FixedPoints:
    """List the distinct fixed points that many starts lead to. Host-side.

    All starts are searched at once, as `fixed_point` does; what converged is sorted and points
    closer than `distance` count as one. Nothing assures that the list is complete: spread the
    starts over the region that matters, and take more until the list stays the same.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: PyTree of parameters.
        starts: shape `(start, *state)`.
        t: time handed to the field; default 0.
        distance: greatest difference, in any entry, between two finds of one point, in units of the
            state; default `sqrt(eps)` times the largest entry of the starts, at least of 1.
        max_steps: Newton steps allowed; default 100.

    Returns:
        Points, their growth rates and frequencies, and how the starts ended. No point found gives
        arrays without rows.

    Raises:
        ValueError: `starts` has no axis of starts; the field returns another shape than a state.
        TypeError: `starts` is not floating; the field returns another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import fixed_points
        >>> double_well = lambda t, y, a: a * y - y**3
        >>> found = fixed_points(double_well, 4.0, jnp.linspace(-3.0, 3.0, 6)[:, None])
        >>> print(found.states.ravel().round(6) + 0, found.rate.ravel().round(6))
        [-2.  0.  2.] [-8.  4. -8.]

    Source: common practice, no source.
    """
    check_floating("starts", starts)
    starts = jnp.asarray(starts)
    if starts.ndim == 0 or starts.shape[0] == 0:
        raise ValueError(
            f"`starts` must have shape (start, *state) with at least one start; got {starts.shape}."
        )
    when = jnp.asarray(t, starts.dtype)
    found = _search_all(field, params, starts, when, max_steps)
    states, status = np.asarray(found.state), np.asarray(found.status)
    if distance is None:
        size = max(float(np.max(np.abs(np.asarray(starts)))), 1.0)
        distance = float(np.sqrt(np.finfo(states.dtype).eps)) * size
    good = status == RootStatus.CONVERGED
    distinct, counts = _distinct(states[good], np.asarray(found.speed)[good], distance)
    rate, frequency = _spectra(field, params, jnp.asarray(distinct), when)
    return FixedPoints(distinct, np.asarray(rate), np.asarray(frequency), counts, status)


@eqx.filter_jit
def _search_all(field, params, starts, t, max_steps):
    return jax.vmap(lambda y: fixed_point(field, params, y, t=t, max_steps=max_steps))(starts)


@eqx.filter_jit
def _spectra(field, params, states, t):
    return jax.vmap(lambda y: spectrum(field, params, y, t=t))(states)


def _distinct(states: np.ndarray, speed: np.ndarray, distance: float):
    """Return one state of each cluster, the one nearest to rest, and the sizes of the clusters."""
    flat = states.reshape(len(states), int(np.prod(states.shape[1:])))
    kept: list[int] = []
    counts: list[int] = []
    for i in np.argsort(speed, kind="stable"):
        near = [k for k, j in enumerate(kept) if np.max(np.abs(flat[i] - flat[j])) <= distance]
        if near:
            counts[near[0]] += 1
        else:
            kept.append(int(i))
            counts.append(1)
    # Rounding must not decide the order of points that share their first entries.
    keys = np.round(flat[kept] / distance) if kept else flat[:0]
    order = np.lexsort(keys.T[::-1]) if kept else np.zeros(0, int)
    return states[np.asarray(kept, int)[order]], np.asarray(counts, int)[order]
