"""Problems whose solution is known, as data: to test a step, a window scheme or a field on."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from ..fields import (
    FitzHughNagumoParams,
    HopfNetwork,
    HopfParams,
    KuramotoParams,
    VanDerPolParams,
    fitzhugh_nagumo,
    kuramoto,
    van_der_pol,
)


class Problem(NamedTuple):
    """An initial-value problem and its solution.

    Attributes:
        name: short, in words.
        field: `field(t, y, params) -> dy`.
        params: its parameters.
        times: shape `(time,)`; the first is that of the start.
        states: the solution at those times, shape `(time, *state)`.
        atol: to how many units the states are right; they are printed or computed so far.
        source: where the states come from.
    """

    name: str
    field: Callable[[Any, Any, Any], Any]
    params: Any
    times: Float[Array, " time"]
    states: Float[Array, "time *state"]
    atol: float
    source: str

    @property
    def y0(self) -> Array:
        """The start, shape `(*state)`."""
        return self.states[0]


def problems() -> tuple[Problem, ...]:
    """Return problems whose solution is known, in the present default precision.

    From a plain rotation over networks of this library to fields that depend on time; none is
    stiff, so that any explicit step can be put to them.

    Returns:
        A tuple of `Problem`s, each with its source.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import problems
        >>> from oscillib.integrate import rk4, rollout
        >>> spring = problems()[0]
        >>> h = spring.times[1] / 400
        >>> states = rollout(rk4(spring.field), spring.params, spring.y0, h, 400)
        >>> print(f"{jnp.max(jnp.abs(states[-1] - spring.states[1])):.0e}")
        7e-08

    Source: with each problem.
    """
    return (
        _spring(),
        _hopf("Hopf unit above onset", 0.4, [0.0711244014545234, 0.507348294166181]),
        _hopf("Hopf unit at onset", 0.0, [-0.11502851578068, 0.105634674514256]),
        _pair(),
        _end(
            "van der Pol", van_der_pol, VanDerPolParams(1.0), [2.0, 0.0],
            [2.008149762174948, -0.04250887527320057], source=_DETEST.format("E2"),
        ),
        _end(
            "FitzHugh-Nagumo", fitzhugh_nagumo,
            FitzHughNagumoParams(0.0, offset=-0.2, slope=0.2, slowness=1 / 9, rate=3.0),
            [-1.0, -1.0], [1.896941801015, -0.3044810368948], atol=1e-8,
            source="set-up of Ramsay, Hooker, Campbell & Cao 2007 (from memory), with w = -R; end "
            "values from two numerical routes, no printed one seen",
        ),
        _end(
            "predator and prey", _predator, {"grow": jnp.asarray(2.0), "die": jnp.asarray(1.0)},
            [1.0, 3.0], [0.6761876008576667, 0.1860816099640036], source=_DETEST.format("B1"),
        ),
        _end(
            "rigid body", _rigid, jnp.array([1.0, -1.0, -0.51]), [0.0, 1.0, 1.0],
            [-0.9396570798729192, -0.3421177754000779, 0.7414126596199957],
            source=_DETEST.format("B5") + "; Jacobi elliptic functions",
        ),
        _end(
            "orbit", _orbit, jnp.asarray(1.0), [[0.9, 0.0], [0.0, np.sqrt(1.1 / 0.9)]],
            [[0.2198835352008397, 0.9427076846341813], [-0.9787659841058176, 0.3287977990962036]],
            source=_DETEST.format("D1") + "; Kepler's equation",
        ),
        _end(
            "hardening spring", _duffing, jnp.array([1.0, 1.0]), [1.0, 0.0],
            [-0.97706227434627, -0.29945006937206], end=7.0, atol=1e-10,
            source="closed form cn(sqrt(2) t | 1/4) of Duffing's equation",
        ),
        _breathing(),
        _bessel(),
    )  # fmt: skip


_DETEST = (
    "problem {} of Hull, Enright, Fellen & Sedgwick 1972, end values of Enright & Pryce 1987 as in "
    "the public-domain test driver"
)


def _end(name, field, params, start, last, *, source, end=20.0, atol=1e-9) -> Problem:
    """Return a problem whose state is known at its end."""
    return Problem(
        name, field, params, jnp.array([0.0, end]), jnp.array([start, last]), atol, source
    )


def _spring() -> Problem:
    w, times = 2.0, jnp.array([0.0, 6.0, 20.0])
    states = jnp.stack([jnp.cos(w * times), -jnp.sin(w * times)], axis=1)
    turn = lambda t, y, w: jnp.stack([w * y[1], -w * y[0]])
    return Problem("spring", turn, jnp.asarray(w), times, states, 1e-12, "closed form")


def _hopf(name: str, growth: float, last: list[float]) -> Problem:
    params = HopfParams([growth], [3.0], shear=[0.9], saturation=[1.5])
    start = [[0.2], [0.1]]
    source = "closed form: Bernoulli's equation for |z|^2"
    last_state = [[x] for x in last]
    return _end(name, HopfNetwork(), params, start, last_state, end=7.0, atol=1e-11, source=source)


def _pair() -> Problem:
    # The difference d falls by d' = -K sin d, K = 0.8; the mean turns at the common frequency.
    w, start, times = 0.3, 2.0, jnp.array([0.0, 1.5, 4.0])
    apart = 2 * jnp.arctan(jnp.tan(start / 2) * jnp.exp(-0.8 * times))
    middle = start / 2 + w * times
    states = jnp.stack([middle - apart / 2, middle + apart / 2], axis=1)[:, None]
    params = KuramotoParams([w, w], [[0.0, 0.4], [0.4, 0.0]])
    return Problem("two phases", kuramoto, params, times, states, 1e-12, "closed form")


def _breathing() -> Problem:
    times = jnp.array([0.0, 3.0, 20.0])
    grow = lambda t, y, strength: strength * y * jnp.cos(t)
    states = jnp.exp(jnp.sin(times))[:, None]
    source = _DETEST.format("A3") + "; closed form exp(sin t)"
    return Problem("growth that depends on time", grow, jnp.ones(()), times, states, 1e-12, source)


def _bessel() -> Problem:
    # The Bessel function of order 1/2 of t + 1 is an elementary one.
    times = jnp.array([0.0, 5.0, 20.0])
    x = times + 1
    value = jnp.sqrt(2 / (jnp.pi * x)) * jnp.sin(x)
    slope = jnp.sqrt(2 / (jnp.pi * x)) * jnp.cos(x) - value / (2 * x)
    source = _DETEST.format("E1") + "; closed form of the Bessel function of order 1/2"
    states = jnp.stack([value, slope], axis=1)
    return Problem("Bessel", _bessel_field, jnp.asarray(0.5), times, states, 1e-12, source)


def _predator(t, y, params):
    prey, predator = y
    change = jnp.stack([params["grow"] * (1 - predator), -params["die"] * (1 - prey)])
    return change * y


def _rigid(t, y, rates):
    return rates * jnp.stack([y[1] * y[2], y[0] * y[2], y[0] * y[1]])


def _orbit(t, y, pull):
    place, speed = y
    return jnp.stack([speed, -pull * place / jnp.sum(place**2) ** 1.5])


def _duffing(t, y, stiffness):
    x, v = y
    return jnp.stack([v, -stiffness[0] * x - stiffness[1] * x**3])


def _bessel_field(t, y, order):
    x, v = y
    return jnp.stack([v, -v / (t + 1) - (1 - order**2 / (t + 1) ** 2) * x])
