"""Noisy steps: a map, Gaussian noise, another map."""

from collections.abc import Callable
from typing import Any, NamedTuple, TypeAlias

import jax.numpy as jnp
from jaxtyping import Array, Float

from ._noise import Rate, linear_transition, planar_rate
from ._runge_kutta import check_field_output
from ._types import Field, Flow, Step


class NoisyAdvance(NamedTuple):
    """One step of a noisy system: `y' = after(t, matrix before(t, y) + e)`, `e` Gaussian.

    A noisy step of your own is a function `step(params, h)` that returns this.

    Attributes:
        before: `before(t, y) -> y`, what happens until the noise enters.
        covariance: of the noise `e`, on the flattened state, shape `(size, size)`.
        after: `after(t, y) -> y`, what happens afterwards; `t` is the time at which the step began.
        matrix: propagator of the flattened state between `before` and the noise, shape
            `(size, size)`; `None` for the identity.
        undo: `undo(t, y) -> y`, the inverse of `after`, or `None` where it has none; only a
            transition density needs it.
        local: `before` and `after` act on every node (last axis of the state) by itself, so their
            Jacobians are small blocks. Filters are then several times faster; a wrong `True` makes
            them wrong.
    """

    before: Callable[[Any, Any], Any]
    covariance: Float[Array, "size size"]
    after: Callable[[Any, Any], Any]
    matrix: Float[Array, "size size"] | None = None
    undo: Callable[[Any, Any], Any] | None = None
    local: bool = False

    def into_noise(self, t: Any, y: Any) -> Any:
        """Return the state to which the noise is added: `matrix before(t, y)`."""
        y = self.before(t, y)
        return y if self.matrix is None else (self.matrix @ y.reshape(-1)).reshape(y.shape)


# step(params, h) -> NoisyAdvance
NoisyStep: TypeAlias = Callable[[Any, Any], NoisyAdvance]


def noisy_strang(
    outer: Flow,
    matrix: Callable[[Any], Float[Array, "size size"]],
    *,
    rate: Rate = planar_rate,
    local: bool = True,
) -> NoisyStep:
    """Make the splitting step of a noisy network: saturate, turn with exact noise, saturate.

        y' = outer(h/2)( e^(Ah) outer(h/2)(y) + e ),   e ~ N(0, C(h))

    `A` and the noise make a linear system whose transition over any `h` is exactly Gaussian
    (`linear_transition`), and the outer flow is exact too. Hence the step is exact for a linear
    network, whatever `h`, and of weak order 2 otherwise. It adds no growth, where explicit
    Euler-Maruyama adds `w^2 h / 2`.

    Arguments:
        outer: flow of the nonlinear part, `flow(params, h) -> apply`, applied in half steps.
        matrix: `matrix(params) -> A`, shape `(size, size)`, of the linear part.
        rate: `rate(noise) -> Q`, covariance rate of the noise, Ito; default `planar_rate`.
        local: the outer flow acts on every node by itself, as the saturation of a Hopf network
            does; default True. Filters use it; simulation does not.

    Returns:
        A noisy step: `step(params, h) -> NoisyAdvance`. Its `params` are a `NoisyParams`, of which
        `field` goes to `outer` and `matrix`, `noise` to `rate`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_strang
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> params = NoisyParams(HopfParams([-1.0], [6.0]), noise=[0.5])
        >>> print(jnp.diag(step(params, jnp.asarray(50.0)).covariance).round(6))  # s^2 / 2|a|
        [0.125 0.125]

    Source: Strang 1968; Van Loan 1978; the splitting of stochastic systems with additive noise
    follows Ableidinger, Buckwar & Hinterleitner 2017 (from memory).
    """

    def step(params, h):
        propagator, covariance = linear_transition(
            matrix(params.field), rate(params.noise), jnp.asarray(h)
        )
        half, back = outer(params.field, h / 2), outer(params.field, -h / 2)
        return NoisyAdvance(
            before=lambda t, y: half(y),
            covariance=covariance,
            after=lambda t, y: half(y),
            matrix=propagator,
            undo=lambda t, y: back(y),
            local=local,
        )

    return step


def split_noise(step: Step, *, rate: Rate = planar_rate) -> NoisyStep:
    """Make a noisy step of any step: half a step, the noise of a whole one, half a step.

        y' = advance(h/2)( advance(h/2)(y) + e ),   e ~ N(0, h Q)

    Of weak order 2 if the step is of order 2 or more. Its error grows with `w h`, unlike that of
    `noisy_strang`: use it for fields whose linear part is not known exactly.

    Arguments:
        step: `step(params, h) -> advance`, such as `rk4(field)`.
        rate: `rate(noise) -> Q`, covariance rate of the noise, Ito; default `planar_rate`.

    Returns:
        A noisy step: `step(params, h) -> NoisyAdvance` with `params` a `NoisyParams`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import NoisyParams, rk4, split_noise
        >>> decay = rk4(lambda t, y, params: -params * y)
        >>> step = split_noise(decay, rate=lambda noise: jnp.diag(noise**2))
        >>> step(NoisyParams(jnp.asarray(1.0), noise=[2.0]), jnp.asarray(0.5)).covariance
        Array([[2.]], dtype=float64)

    Source: Strang 1968 applied to drift and noise; common practice, no source.
    """

    def noisy(params, h):
        advance = step(params.field, h / 2)
        return NoisyAdvance(
            before=advance,
            covariance=h * rate(params.noise),
            after=lambda t, y: advance(t + h / 2, y),
        )

    return noisy


def euler_maruyama(field: Field, *, rate: Rate = planar_rate) -> NoisyStep:
    """Make the explicit Euler-Maruyama step, to compare with.

        y' = y + h f(t, y) + e,   e ~ N(0, h Q)

    Weak order 1. On an oscillator of angular frequency `w` it adds about `w^2 h / 2` to the growth
    rate: a damped unit looks self-sustained. `step_bias` shows how much.

    Arguments:
        field: `field(t, y, params) -> dy`.
        rate: `rate(noise) -> Q`, covariance rate of the noise, Ito; default `planar_rate`.

    Returns:
        A noisy step: `step(params, h) -> NoisyAdvance` with `params` a `NoisyParams`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, euler_maruyama
        >>> params = NoisyParams(HopfParams([0.0], [2.0]), noise=[0.1])
        >>> advance = euler_maruyama(HopfNetwork())(params, jnp.asarray(0.5))
        >>> advance.before(0.0, jnp.array([[0.1], [0.0]]))[1]
        Array([0.1], dtype=float64)

    Source: Maruyama 1955; Kloeden & Platen 1992 (from memory).
    """
    checked = check_field_output(field)

    def step(params, h):
        def before(t, y):
            return y + h * checked(t, y, params.field)

        def unchanged(t, y):
            del t
            return y

        return NoisyAdvance(before, h * rate(params.noise), unchanged, undo=unchanged)

    return step


def without_noise(step: NoisyStep) -> Step:
    """Return the step with the noise left out, for `rollout` and `roll_windows`.

    Arguments:
        step: a noisy step.

    Returns:
        A step: `step(params, h) -> advance`, `advance(t, y) -> y`, `params` as before.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, euler_maruyama, rollout, without_noise
        >>> params = NoisyParams(HopfParams([-1.0], [0.0]), noise=[0.1])
        >>> quiet = without_noise(euler_maruyama(HopfNetwork()))
        >>> rollout(quiet, params, jnp.zeros((2, 1)), 0.1, 2).shape
        (3, 2, 1)
    """

    def quiet(params, h):
        noisy = step(params, h)
        return lambda t, y: noisy.after(t, noisy.into_noise(t, y))

    return quiet
