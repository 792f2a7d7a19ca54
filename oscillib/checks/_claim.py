"""What is claimed of a particular field: symmetries, states of rest, invariants, a period."""

from collections.abc import Callable, Sequence
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from ..integrate import adaptive_rollout
from ._failure import assert_close, fail
from ._field import Field, State, Time
from ._tree import aside


class Symmetry(NamedTuple):
    """A change of state and parameters under which a field keeps its form.

    Attributes:
        name: for messages.
        state: `state(y) -> y`; its derivative is what applies to `dy`.
        params: `params(params) -> params`.
        time: `time(t) -> t`, a shift.
    """

    name: str
    state: Callable[[Any], Any] = lambda y: y
    params: Callable[[Any], Any] = lambda params: params
    time: Callable[[Any], Any] = lambda t: t


def relabelling(order: Sequence[int]) -> Symmetry:
    """Return the symmetry of a network under another numbering of its nodes.

        y_i -> y_(order i),   vectors p_i -> p_(order i),   matrices K_ij -> K_(order i, order j)

    Arguments:
        order: a permutation of `0 ... node - 1`. The last axis of a state is that of the nodes;
            every axis of a parameter that has this length is taken as one of nodes.

    Returns:
        A `Symmetry`.

    Raises:
        ValueError: `order` is no permutation.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import relabelling
        >>> relabelling([1, 0]).state(jnp.array([[1.0, 2.0]]))
        Array([[2., 1.]], dtype=float64)

    Source: common practice, no source.
    """
    if sorted(order) != list(range(len(order))):
        raise ValueError(f"`order` must hold each of 0 ... {len(order) - 1} once; got {order}.")
    chosen = np.asarray(order)

    def renumber(x: Any) -> Any:
        for axis, length in enumerate(jnp.shape(x)):
            x = jnp.take(x, chosen, axis=axis) if length == len(chosen) else x
        return x

    return Symmetry(
        f"relabelling {list(order)}",
        lambda y: jnp.take(y, chosen, axis=-1),
        lambda params: jax.tree.map(renumber, params),
    )


def rotation(angle: float) -> Symmetry:
    """Return the symmetry of planar units, states `(2, node)`, under a turn of all phases.

    Arguments:
        angle: rad.

    Returns:
        A `Symmetry`; parameters stay as they are.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import rotation
        >>> print(rotation(jnp.pi / 2).state(jnp.array([[1.0], [0.0]])).round(6).ravel())
        [0. 1.]

    Source: common practice, no source.
    """
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    return Symmetry(f"rotation by {angle:.3g}", lambda y: jnp.asarray(turn, y.dtype) @ y)


def time_shift(by: float) -> Symmetry:
    """Return the symmetry of a field under a shift in time: for one that is driven periodically.

    Arguments:
        by: time units.

    Returns:
        A `Symmetry`; states and parameters stay as they are.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_symmetry, time_shift
        >>> pushed = lambda t, y, rate: -rate * y + jnp.sin(t)
        >>> check_symmetry(pushed, jnp.asarray(2.0), jnp.ones(3), time_shift(2 * jnp.pi))

    Source: common practice, no source.
    """
    return Symmetry(f"time shift by {by:.3g}", time=lambda t: t + by)


def check_symmetry(
    field: Field, params: Any, y0: State, symmetry: Symmetry, *, t: Time = 0.0
) -> None:
    """Check that a field commutes with a symmetry.

        field(T t, S y, P params) = S' field(t, y, params)

    with `S'` the derivative of `S` at `y`, which is `S` itself where that is linear.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y0: a state without that symmetry, shape `(*state)`.
        symmetry: such as `relabelling([1, 0])` or `rotation(0.7)`, or one of your own.
        t: time, default 0.

    Raises:
        AssertionError: both sides differ by more than rounding.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_symmetry, rotation
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> params, y = HopfParams([0.2], [6.0]), jnp.array([[0.3], [0.1]])
        >>> check_symmetry(HopfNetwork(), params, y, rotation(0.7))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    time = jnp.asarray(t, y0.dtype)
    dy = field(time, y0, params)
    state, expected = jax.jvp(symmetry.state, (y0,), (dy,))
    turned = field(symmetry.time(time), state, symmetry.params(params))
    size = float(jnp.max(jnp.abs(expected)))
    rounding = 1e4 * float(jnp.finfo(y0.dtype).eps)
    prop = f"symmetry: {symmetry.name}"
    hint = "indices off by one, a transposed coupling, or a term that singles a node or phase out?"
    assert_close(prop, turned, expected, rtol=rounding, atol=rounding * size, hint=hint)


def check_autonomy(field: Field, params: Any, y0: State) -> None:
    """Check that time does not matter.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y0: a state, shape `(*state)`.

    Raises:
        AssertionError: `dy` differs between times.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_autonomy
        >>> check_autonomy(lambda t, y, rate: -rate * y, jnp.asarray(2.0), jnp.ones(3))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    times = [jnp.asarray(t, y0.dtype) for t in (0.0, 0.7, 1e3)]
    first = field(times[0], y0, params)
    for time in times[1:]:
        hint = f"between t = 0 and t = {float(time):g}: is `t` used?"
        assert_close("autonomy", field(time, y0, params), first, rtol=0.0, atol=0.0, hint=hint)


def check_fixed_point(
    field: Field, params: Any, y: State, *, t: Time = 0.0, atol: float | None = None
) -> None:
    """Check that a state is one of rest.

        field(t, y, params) = 0

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y: the claimed state, shape `(*state)`.
        t: time, default 0.
        atol: greatest size of an entry of `dy`; default 1e4 times what the field makes of rounding
            errors in the state.

    Raises:
        AssertionError: it moves.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_fixed_point
        >>> check_fixed_point(lambda t, y, rate: rate * (1 - y), jnp.asarray(2.0), jnp.ones(3))

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    dy = field(jnp.asarray(t, y.dtype), y, params)
    if atol is None:
        eps = float(jnp.finfo(y.dtype).eps)
        aside = field(jnp.asarray(t, y.dtype), y + 1e-3 * (1 + jnp.abs(y)), params)
        atol = 1e4 * eps * max(1.0, float(jnp.max(jnp.abs(aside - dy), initial=0)) / 1e-3)
    hint = "the state does not rest there: a wrong sign or a missing term?"
    assert_close("claimed fixed point", dy, jnp.zeros_like(y), rtol=0.0, atol=atol, hint=hint)


def check_conserved(
    field: Field,
    params: Any,
    y0: State,
    quantity: Callable[[Any, Any], Any],
    *,
    t: Time = 0.0,
    rtol: float = 1e-9,
) -> None:
    """Check that a quantity does not change along a field, at `y0` and at states around it.

        d quantity / dt = grad_y quantity . field = 0

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y0: a state away from rest, shape `(*state)`.
        quantity: `quantity(y, params) -> scalar`.
        t: time, default 0.
        rtol: tolerance, relative to the size of the terms of the sum.

    Raises:
        AssertionError: it changes.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_conserved
        >>> spring = lambda t, y, w: jnp.stack([w * y[1], -w * y[0]])
        >>> energy = lambda y, w: jnp.sum(y**2)
        >>> check_conserved(spring, jnp.asarray(2.0), jnp.array([1.0, 0.5]), energy)

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    slope, time = jax.grad(quantity), jnp.asarray(t, y0.dtype)
    # At one state a change may vanish by chance.
    ripple = jnp.sin(1 + jnp.arange(y0.size, dtype=y0.dtype)).reshape(y0.shape)
    for y in (y0, aside(y0, ripple), aside(y0, -ripple)):
        terms = slope(y, params) * field(time, y, params)
        change, size = float(jnp.sum(terms)), float(jnp.sum(jnp.abs(terms)))
        if not abs(change) <= rtol * size:
            worst = np.unravel_index(int(jnp.argmax(jnp.abs(terms))), y0.shape)
            fail(
                "claimed conserved quantity", leaf="y", index=tuple(int(i) for i in worst),
                expected=f"change 0 within {rtol * size:.1g}", got=f"{change:.6g}",
                hint="the largest term is at this entry.",
            )  # fmt: skip


def check_period(
    field: Field,
    params: Any,
    y: State,
    period: Float[Array, ""] | float,
    *,
    rtol: float = 1e-6,
    max_steps: int = 16384,
) -> None:
    """Check that a state on a cycle comes back after the claimed period, and not sooner.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        y: a state on the cycle, shape `(*state)`.
        period: time units.
        rtol: greatest distance from the start after one turn, relative to the size of the state.
        max_steps: of the error-controlled integration.

    Raises:
        AssertionError: it is elsewhere after one period, or has come back after a half, a third or
            a fifth of it.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_period
        >>> spring = lambda t, y, w: jnp.stack([w * y[1], -w * y[0]])
        >>> check_period(spring, jnp.asarray(2.0), jnp.array([1.0, 0.5]), jnp.pi)

    Source: common practice, no source.
    """
    __tracebackhide__ = True
    period = float(period)
    times = jnp.asarray([0.0, period / 5, period / 3, period / 2, period], y.dtype)
    out = adaptive_rollout(field, params, y, times, rtol=1e-10, atol=1e-12, max_steps=max_steps)
    size = float(jnp.max(jnp.abs(y)))
    hint = "after one period the state is elsewhere."
    assert_close("claimed period", out.states[-1], y, rtol=0.0, atol=rtol * size, hint=hint)
    if min(float(jnp.max(jnp.abs(state - y))) for state in out.states[1:4]) <= rtol * size:
        fail("claimed period", expected="one turn", got="several turns, or rest")
