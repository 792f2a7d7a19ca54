"""The door to diffrax: adaptive steps for the same field."""

from typing import TYPE_CHECKING, Any, NamedTuple

import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_floating, check_same_dtype, check_shape, check_values
from ._runge_kutta import check_field_output
from ._types import Field, State


if TYPE_CHECKING:
    import diffrax


class AdaptiveRollout(NamedTuple):
    """What `adaptive_rollout` returns.

    Attributes:
        states: at the asked times, shape `(time, *state)`.
        success: the solver reached the end and every state is finite, a boolean scalar.
        num_steps: internal steps taken, accepted or not.
    """

    states: Float[Array, "time *state"]
    success: Bool[Array, ""]
    num_steps: Array


def adaptive_rollout(
    field: Field,
    params: Any,
    y0: State,
    times: Float[Array, " time"],
    *,
    rtol: float,
    atol: float,
    solver: "diffrax.AbstractSolver | None" = None,
    adjoint: "diffrax.AbstractAdjoint | None" = None,
    max_steps: int = 16384,
) -> AdaptiveRollout:
    """Integrate a field with error control, by diffrax, to any increasing times.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: PyTree of parameters.
        y0: state at `times[0]`, shape `(*state)`.
        times: shape `(time,)`, strictly increasing, time units.
        rtol: relative tolerance of a step; no default, because it sets what the result is worth.
        atol: absolute tolerance of a step, in units of the state.
        solver: diffrax solver; default `Tsit5`.
        adjoint: how derivatives are taken; default reverse mode with recursive checkpoints. Give
            `diffrax.ForwardMode()` for `jvp` and forward Jacobians.
        max_steps: internal steps allowed; default 16384. More needed: `success` is False.

    Returns:
        States, a success flag and the number of steps. Nothing raises inside `jit`.

    Raises:
        ValueError: `times` unsorted or too short; the field returns another shape than `y0`.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import adaptive_rollout
        >>> decay = lambda t, y, params: -params * y
        >>> out = adaptive_rollout(decay, 1.0, jnp.ones(1), jnp.linspace(0.0, 1.0, 2),
        ...                        rtol=1e-10, atol=1e-10)
        >>> print(out.states[-1].round(6), out.success)
        [0.367879] True
    """
    import diffrax

    times = as_float(times)
    check_shape("times", times, (None,), "(time,)")
    if times.shape[0] < 2:
        raise ValueError(f"`times` must hold at least two samples; got {times.shape[0]}.")
    check_values("times", jnp.diff(times), lambda d: d > 0, "strictly increasing")
    check_floating("y0", y0)
    check_same_dtype("times", times, "y0", y0)
    solution = diffrax.diffeqsolve(
        diffrax.ODETerm(check_field_output(field)),
        diffrax.Tsit5() if solver is None else solver,
        times[0],
        times[-1],
        None,
        y0,
        params,
        saveat=diffrax.SaveAt(ts=times),
        stepsize_controller=diffrax.PIDController(rtol=rtol, atol=atol),
        adjoint=diffrax.RecursiveCheckpointAdjoint() if adjoint is None else adjoint,
        max_steps=max_steps,
        throw=False,
    )
    states = jnp.asarray(solution.ys)
    good = (solution.result == diffrax.RESULTS.successful) & jnp.all(jnp.isfinite(states))
    return AdaptiveRollout(states, good, solution.stats["num_steps"])
