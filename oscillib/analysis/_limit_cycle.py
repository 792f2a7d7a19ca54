"""Limit cycles by shooting: period, shape, and what becomes of small disturbances."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float, Int

from .._validate import check_count, check_floating
from ..integrate import rollout
from ..integrate._types import State, Step
from ._root import RootStatus, default_tolerance, find_root
from ._spectrum import eigenvalues


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
        multipliers: Floquet multipliers as pairs (real, imaginary part), `(size, 2)`, the largest
            first. One of them is 1, to the error of the step.
        exponents: their growth rates `log |multiplier| / period`, `(size,)`, per time unit.
        margin: decay rate of the slowest disturbance, other than a shift along the cycle; positive:
            the cycle is stable. A scalar, per time unit.
        status: code of `RootStatus`.
        gap: largest entry of the misfit between start and end, units of the state.
    """

    period: Float[Array, ""]
    states: Float[Array, "time *state"]
    low: Float[Array, "*state"]
    high: Float[Array, "*state"]
    multipliers: Float[Array, "size 2"]
    exponents: Float[Array, " size"]
    margin: Float[Array, ""]
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
    which the guess moves. The unknowns are y and log T, found by a damped Newton method. Floquet
    multipliers are the eigenvalues of the monodromy matrix `d Phi_T / dy`, by forward mode.

    What it is worth. The cycle is that of the step: its error falls with the order of the step, so
    double `steps` to see it. Multipliers are exact to about `eps` times the largest entry of the
    monodromy matrix; smaller ones are rounding noise. One sweep through a whole period must not
    amplify errors beyond reach (an unstable multiplier well below `1 / eps`). A guess of twice the
    period finds the cycle gone through twice. Fields that depend on time are out of scope: their
    period is known.

    Derivatives in `params`, in both modes, are those of the implicit function theorem: of any
    order for `period` and `states` (the start held in its section), once for `multipliers`,
    `exponents` and `margin`, as `spectrum` says. They mean nothing unless converged, and none flows
    to `y0` and `period`.

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
        The cycle. Nothing raises inside `jit`: look at `status`; where the search ran into a fixed
        point it is `RootStatus.AT_REST`.

    Raises:
        ValueError: the state has fewer than two entries; `steps` or `max_steps` is below 1.
        TypeError: `y0` is not floating.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import limit_cycle
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import rk4
        >>> p = HopfParams([0.5], [2 * jnp.pi])
        >>> guess = jnp.array([[0.7], [0.0]])
        >>> cycle = limit_cycle(rk4(HopfNetwork()), p, guess, 1.1, steps=200)
        >>> print(cycle.period.round(6), cycle.margin.round(6))
        1.0 1.0

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
    return _describe(turn, root, y0, first)


def _describe(turn, root, y0: Array, first: Array) -> LimitCycle:
    """Go once around the cycle that was found."""
    start, period = root.x[:-1].reshape(y0.shape), first * jnp.exp(root.x[-1])
    _, after = turn(start, period)
    states = jnp.concatenate([start[None], after])
    high, low = _greatest(states), -_greatest(-states)

    flat = lambda x: turn(x.reshape(y0.shape), period)[0].reshape(-1)
    found = eigenvalues(jax.jacfwd(flat)(start.reshape(-1)))
    modulus = found.rate**2 + found.frequency**2
    # By modulus, a conjugate pair with its positive part first.
    order = jnp.lexsort((-found.frequency, -modulus))
    multipliers = jnp.stack([found.rate[order], found.frequency[order]], axis=1)
    exponents = jnp.log(modulus[order]) / (2 * period)
    along = jnp.argmin((multipliers[:, 0] - 1) ** 2 + multipliers[:, 1] ** 2)
    others = jnp.where(jnp.arange(y0.size) == along, -jnp.inf, exponents)

    rounding = jnp.sqrt(jnp.finfo(y0.dtype).eps)
    at_rest = jnp.max(high - low) <= rounding * jnp.max(jnp.abs(y0))
    fell = (root.status == RootStatus.CONVERGED) & at_rest
    status = jnp.where(fell, RootStatus.AT_REST, root.status).astype(jnp.int32)
    gap = jnp.max(jnp.abs(after[-1] - start))
    return LimitCycle(
        period, states, low, high, multipliers, exponents, -jnp.max(others), status, gap
    )


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
