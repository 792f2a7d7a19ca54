"""Limit cycles by shooting: their period, their shape, and a guess to start from."""

from typing import Any, NamedTuple

import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float, Int

from .._validate import check_count, check_floating
from ..integrate import rollout
from ..integrate._types import State, Step
from ._root import RootStatus, default_tolerance, find_root


class CycleGuess(NamedTuple):
    """What `cycle_guess` returns.

    Attributes:
        state: the trajectory where it last crossed the middle upwards, shape `(*state)`.
        period: time between its last two crossings, a scalar, time units; NaN unless `found`.
        found: two crossings were seen; a boolean scalar.
    """

    state: Float[Array, "*state"]
    period: Float[Array, ""]
    found: Bool[Array, ""]


class LimitCycle(NamedTuple):
    """What `limit_cycle` returns.

    Attributes:
        period: a scalar, time units.
        states: one turn at equal intervals, the start repeated at the end, `(steps + 1, *state)`.
        low: least value of every entry over the cycle, `(*state)`.
        high: greatest value of every entry, `(*state)`.
        status: code of `RootStatus`.
        gap: largest entry of the misfit between start and end, units of the state.
    """

    period: Float[Array, ""]
    states: Float[Array, "time *state"]
    low: Float[Array, "*state"]
    high: Float[Array, "*state"]
    status: Int[Array, ""]
    gap: Float[Array, ""]


def cycle_guess(
    step: Step,
    params: Any,
    y0: State,
    h: Float[Array, ""] | float,
    steps: int,
    *,
    entry: int = 0,
) -> CycleGuess:
    """Guess a cycle from a trajectory: a state on it, and the time between two upward crossings.

    The trajectory's second half is taken to be on the cycle. One entry is watched: crossings are
    upward passages through the middle between its least and greatest value there, placed by a
    straight line between two steps. An entry that passes its middle upwards several times a turn
    gives a part of the period: watch another, or choose a start and period by eye.

    Good for cycles that attract. No derivative is meant to flow through it.

    Arguments:
        step: `step(params, h) -> advance`, as `rk4(field)` makes it.
        params: PyTree of parameters.
        y0: start, shape `(*state)`.
        h: step size, time units.
        steps: number of steps, so many that the second half holds two turns or more.
        entry: number of the watched entry in the flattened state; default 0.

    Returns:
        State, period and a flag.

    Raises:
        ValueError: `entry` is not an entry of the state; as `rollout` does.
        TypeError: as `rollout` does.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import cycle_guess
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import rk4
        >>> p = HopfParams([1.0], [2 * jnp.pi])
        >>> print(cycle_guess(rk4(HopfNetwork()), p, jnp.ones((2, 1)), 0.01, 600).period.round(3))
        1.0

    Source: common practice, no source.
    """
    states = rollout(step, params, y0, h, steps)
    size = states[0].size
    if not 0 <= entry < size:
        raise ValueError(f"`entry` must be one of the {size} entries of the state; got {entry}.")
    late = states[steps // 2 :]
    watched = late.reshape(late.shape[0], -1)[:, entry]
    level = (jnp.max(watched) + jnp.min(watched)) / 2
    before, after = watched[:-1] - level, watched[1:] - level
    up = (before < 0) & (after >= 0)
    index = jnp.arange(up.shape[0])
    last = jnp.max(jnp.where(up, index, -1))
    earlier = jnp.max(jnp.where(up & (index < last), index, -1))
    found = (earlier >= 0) & jnp.all(jnp.isfinite(late))
    rise = jnp.where(up, after - before, 1)
    part = jnp.where(up, -before / rise, 0)
    passed = index.astype(part.dtype) + part
    period = jnp.asarray(h, part.dtype) * (passed[last] - passed[earlier])
    state = late[last] + part[last] * (late[last + 1] - late[last])
    return CycleGuess(state, jnp.where(found, period, jnp.nan), found)


def limit_cycle(
    step: Step,
    params: Any,
    y0: State,
    period: Float[Array, ""] | float,
    *,
    steps: int,
    tolerance: float | None = None,
    max_steps: int = 50,
) -> LimitCycle:
    """Find a periodic solution of an autonomous field, stable or not, near a guess.

        Phi_T(y) = y,    d . (y - y0) = 0

    with `Phi_T` the flow over one period T, cut into `steps` equal steps, and d the direction in
    which the guess moves. The unknowns are y and log T, found by a damped Newton method. What
    becomes of disturbances of the cycle is told by `floquet`.

    What it is worth. The cycle is that of the step: its error falls with the order of the step, so
    double `steps` to see it. One sweep through a whole period must not amplify errors beyond reach:
    an unstable multiplier well below `1 / eps`. Relaxation cycles, much faster here than there,
    need a close guess. A guess of twice the period finds the cycle gone
    through twice. Fields that depend on time are out of scope: their period is known. Compile it
    with `jit` where it is called more than once.

    Derivatives of period and states in `params`, in both modes and of any order, are those of the
    implicit function theorem, the start held in its section. They mean nothing unless converged,
    and none flows to `y0` and `period`.

    Arguments:
        step: `step(params, h) -> advance`, differentiable in `h`; every step of this library is.
        params: PyTree of parameters.
        y0: state near the cycle, shape `(*state)`, at least two entries, such as `guess.state`.
        period: guess of the period, time units, such as `guess.period`.
        steps: number of steps a period.
        tolerance: how far the remaining Newton step may go, relative to the largest entry of `y0`
            and to the period; default `eps^(3/4)`, 1.8e-12 in float64.
        max_steps: Newton steps allowed; default 50.

    Returns:
        The cycle. Nothing raises inside `jit`: look at `status`; where the search shrank to a
        fixed point, or to no time at all, it is `RootStatus.AT_REST`.

    Raises:
        ValueError: the state has fewer than two entries; `steps` or `max_steps` is below 1.
        TypeError: `y0` is not floating.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.analysis import limit_cycle
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import rk4
        >>> guess = jnp.array([[0.7], [0.0]])
        >>> find = jax.jit(lambda p: limit_cycle(rk4(HopfNetwork()), p, guess, 1.1, steps=200))
        >>> cycle = find(HopfParams([0.5], [2 * jnp.pi]))
        >>> print(cycle.period.round(6), cycle.high.round(6).ravel())
        1.0 [0.707107 0.707107]

    Source: Keller 1968; Seydel, Practical Bifurcation and Stability Analysis (from memory).
    """
    check_floating("y0", y0)
    y0 = lax.stop_gradient(jnp.asarray(y0))
    if y0.size < 2:
        raise ValueError(
            f"`y0` must have at least two entries, a cycle needs a plane; got {y0.shape}."
        )
    steps, max_steps = check_count("steps", steps), check_count("max_steps", max_steps)
    first = lax.stop_gradient(jnp.asarray(period, y0.dtype))

    def turn(y, period):
        advance = step(params, period / steps)
        times = period / steps * jnp.arange(steps).astype(y0.dtype)
        return lax.scan(lambda y, t: (advance(t, y),) * 2, y, times)

    moved = step(lax.stop_gradient(params), first / steps)(jnp.zeros((), y0.dtype), y0) - y0
    # A guess at rest has no direction; any will do, the search then ends there.
    length = jnp.linalg.norm(moved.reshape(-1))
    direction = moved.reshape(-1) / jnp.where(length > 0, length, 1)

    def residual(x):
        y = x[:-1].reshape(y0.shape)
        end, _ = turn(y, first * jnp.exp(x[-1]))
        in_section = direction @ (x[:-1] - y0.reshape(-1))
        return jnp.concatenate([(end - y).reshape(-1), in_section[None]])

    relative = default_tolerance(y0.dtype) if tolerance is None else tolerance
    size = jnp.max(jnp.abs(y0))
    x0 = jnp.concatenate([y0.reshape(-1), jnp.zeros(1, y0.dtype)])
    allowed = jnp.concatenate([jnp.full(y0.size, 1.0, y0.dtype) * size, jnp.ones(1, y0.dtype)])
    root = find_root(residual, x0, relative * allowed, max_steps)

    start, period = root.x[:-1].reshape(y0.shape), first * jnp.exp(root.x[-1])
    end, after = turn(start, period)
    states = jnp.concatenate([start[None], after])
    high, low = _greatest(states), -_greatest(-states)
    at_rest = jnp.max(high - low) <= jnp.sqrt(jnp.finfo(y0.dtype).eps) * size
    fell = (root.status == RootStatus.CONVERGED) & at_rest
    status = jnp.where(fell, RootStatus.AT_REST, root.status).astype(jnp.int32)
    return LimitCycle(period, states, low, high, status, jnp.max(jnp.abs(end - start)))


def _greatest(states: Float[Array, "time *state"]) -> Float[Array, "*state"]:
    """Return the greatest value of every entry, between samples by a quartic through five.

    A parabola through three would be off by more than a step of fourth order is.
    """
    once = states[:-1].reshape(states.shape[0] - 1, -1)
    n, entry = once.shape[0], jnp.arange(once.shape[1])
    top = jnp.argmax(once, axis=0)
    a, b, at, c, d = (once[(top + k) % n, entry] for k in (-2, -1, 0, 1, 2))
    # Differences in units of the interval: first to fourth derivative.
    slope = (8 * (c - b) - (d - a)) / 12
    bend = (16 * (c + b) - (d + a) - 30 * at) / 12
    third = (d - a) / 2 - (c - b)
    fourth = d + a - 4 * (c + b) + 6 * at
    curved = bend < 0
    safe = jnp.where(curved, bend, -1)
    shift = -slope / safe
    shift = shift - third * shift**2 / (2 * safe)
    lift = shift * (slope + shift * (bend / 2 + shift * (third / 6 + shift * fourth / 24)))
    # Where the top is flat to rounding, or has a corner, the sample itself is the better answer.
    placed = curved & (jnp.abs(shift) <= 1)
    return (at + jnp.where(placed, lift, 0)).reshape(states.shape[1:])
