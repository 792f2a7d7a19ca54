"""Steps: the order that one has, and its agreement with error-controlled integration."""

import itertools
import math
from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jaxtyping import Array, Float

from .._validate import as_float, check_count, check_floating, check_same_dtype, check_shape
from ..integrate import NoisyAdvance, adaptive_rollout
from ._failure import fail


Step = Callable[[Any, Any], Callable[[Any, Any], Any]]
Field = Callable[[Any, Any, Any], Any]
State = Float[Array, "*state"]
Scalar = Float[Array, ""] | float

# Errors below this many roundings (or tolerances of the reference) say nothing about an order.
_FLOOR = 100.0
# The regression takes the finest of the usable errors: coarse ones are not yet in the regime.
_POINTS = 4


def check_order(
    step: Step,
    field: Field,
    params: Any,
    y0: State,
    *,
    order: int | float,
    h: Scalar,
    steps: int = 4,
    halvings: int = 4,
    exact: Callable[[Any], State] | None = None,
    at_least: bool = False,
    slack: float = 0.3,
    t0: Scalar = 0.0,
) -> None:
    """Check the order of a step: its error falls like the claimed power of the step size.

        error(h) ~ C h^order

    The error is the root mean square over `steps` samples a time `h` apart, relative to that of the
    solution. The order is the slope of its logarithm over step sizes `h, h/2, h/4, ...`, among the
    finest four that are above rounding. Fails where it differs from the claim by more than `slack`,
    and where every error is rounding, so that no order can be seen.

    Arguments:
        step: `step(params, h) -> advance`, `advance(t, y) -> y`.
        field: `field(t, y, params) -> dy`, what the step is to solve.
        params: PyTree of parameters of both.
        y0: start, shape `(*state)`. At a fixed point no error can be seen.
        order: claimed global order, such as 2 for `heun`.
        h: largest step size, time units: about a tenth of the fastest time scale.
        steps: steps of size `h`, and samples compared; default 4.
        halvings: how many times `h` is halved; default 4, at least 2.
        exact: `exact(t) -> y`, the solution through `y0` at `t0`; default `adaptive_rollout` at the
            tightest tolerance that the precision allows.
        at_least: let a higher order than claimed pass; default False.
        slack: how far the observed order may be from the claim; default 0.3.
        t0: time of the start; default 0.

    Raises:
        AssertionError: the order is not the claimed one; an error is not finite, or all of them are
            at rounding level.
        ValueError: `halvings` is below 2, `steps` below 1.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_order
        >>> from oscillib.integrate import heun
        >>> decay = lambda t, y, params: -params * y
        >>> check_order(heun(decay), decay, jnp.asarray(1.0), jnp.ones(1), order=2, h=0.2,
        ...             exact=lambda t: jnp.exp(-t) * jnp.ones(1))

    Source: order by regression; common practice, no source.
    """
    y0, h, t0 = _arrays(y0, h, t0)
    steps, halvings = check_count("steps", steps), check_count("halvings", halvings, least=2)
    check_step_output(step, params, y0, h)
    times = t0 + h * jnp.arange(steps + 1).astype(y0.dtype)
    tolerance = _tolerance(y0.dtype)
    truth = _truth(field, params, y0, times, exact)[1:]
    size = np.sqrt(np.mean(truth**2))
    counts = 2 ** np.arange(halvings + 1)
    paths = [_path(step, params, y0, h, t0, int(n), steps) for n in counts]
    errors = np.array([np.sqrt(np.mean((p - truth) ** 2)) for p in paths]) / (size or 1.0)
    sizes = float(h) / counts
    if not np.all(np.isfinite(errors)):
        k = int(np.argmax(~np.isfinite(errors)))
        fail(
            "order of the step",
            leaf="states",
            index=None,
            expected="finite states",
            got=f"states that are not finite at step size {sizes[k]:.3g}",
            hint="take a smaller `h`, or check the step where it divides or takes roots",
        )
    floor = _FLOOR * max(tolerance if exact is None else 0.0, float(jnp.finfo(y0.dtype).eps))
    used = np.flatnonzero(errors > floor)[-_POINTS:]
    table = ", ".join(f"{e:.2g} at {s:.3g}" for e, s in zip(errors, sizes, strict=True))
    if len(used) < 3:
        fail(
            "order of the step",
            leaf="states",
            index=None,
            expected=f"order {order:g}, seen in at least 3 errors above rounding ({floor:.1g})",
            got=f"errors at rounding level, so that no order can be seen: {table}",
            hint="take a larger `h` or a start away from rest; if the step is exact here, use "
            "`check_agreement`",
        )
    observed = float(np.polyfit(np.log(sizes[used]), np.log(errors[used]), 1)[0])
    if observed < order - slack or (observed > order + slack and not at_least):
        fail(
            "order of the step",
            leaf="states",
            index=None,
            expected=f"claimed order {order:g}, within {slack:g}",
            got=f"observed order {observed:.2f} (relative errors {table})",
            hint=_order_hint(observed, order),
        )


def check_agreement(
    step: Step,
    field: Field,
    params: Any,
    y0: State,
    h: Scalar,
    steps: int,
    *,
    rtol: float,
    atol: float = 0.0,
    t0: Scalar = 0.0,
) -> None:
    """Check that a rollout of a step agrees with error-controlled integration of the field.

        |y_k - y(t0 + k h)| <= rtol max |y| + atol    for every k

    with `y` from `adaptive_rollout` at the tightest tolerance that the precision allows, and the
    maximum over the whole trajectory. Where it does not agree, the message says what was found
    wrong with one step: that it ignores `h` or `t`, or does not start out along the field.

    Arguments:
        step: `step(params, h) -> advance`, `advance(t, y) -> y`.
        field: `field(t, y, params) -> dy`.
        params: PyTree of parameters of both.
        y0: start, shape `(*state)`.
        h: step size, a scalar, time units.
        steps: number of steps.
        rtol: error claimed of the step, relative to the largest state; no default.
        atol: absolute error added to it, state units; default 0.
        t0: time of the start; default 0. With a field that depends on time give one that is not 0,
            too.

    Raises:
        AssertionError: the two do not agree; the reference did not succeed.
        ValueError: `steps` is below 1.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_agreement
        >>> from oscillib.integrate import rk4
        >>> forced = lambda t, y, params: jnp.cos(t) - params * y
        >>> params, y0 = jnp.asarray(1.0), jnp.ones(1)
        >>> check_agreement(rk4(forced), forced, params, y0, 0.1, 20, rtol=1e-6, t0=0.5)
    """
    y0, h, t0 = _arrays(y0, h, t0)
    steps = check_count("steps", steps)
    check_step_output(step, params, y0, h)
    times = t0 + h * jnp.arange(steps + 1).astype(y0.dtype)
    truth = _truth(field, params, y0, times, None)
    path = _path(step, params, y0, h, t0, 1, steps)
    got = np.concatenate([np.asarray(y0, float)[None], path])
    bound = rtol * np.max(np.abs(truth)) + atol
    error = np.nan_to_num(np.abs(got - truth), nan=np.inf)
    if np.max(error) > bound:
        index = tuple(int(i) for i in np.unravel_index(np.argmax(error), error.shape))
        fail(
            "agreement with error-controlled integration",
            leaf="states",
            index=index,
            expected=f"{truth[index]:.6g} within {bound:.1g}",
            got=f"{got[index]:.6g}",
            hint=_step_hint(step, field, params, y0, h, t0),
        )


def check_step_output(step: Step, params: Any, y0: Array, h: Array) -> None:
    """Fail unless one step keeps the shape and the dtype of the state."""
    out = jax.eval_shape(lambda y, k: step(params, k)(k, y), y0, h)
    got = f"{getattr(out, 'shape', type(out).__name__)} {getattr(out, 'dtype', '')}"
    if got != f"{y0.shape} {y0.dtype}":
        fail(
            "shape and dtype of the step",
            leaf="step(params, h)(t, y)",
            index=None,
            expected=f"{y0.shape} {y0.dtype}",
            got=got,
            hint="build state, parameters and constants in one precision; broadcast nothing",
        )


def is_noisy(step: Any, params: Any, h: Array) -> bool:
    """Tell whether a step returns a `NoisyAdvance`, without computing anything."""
    kinds = []
    jax.eval_shape(lambda k: kinds.append(isinstance(step(params, k), NoisyAdvance)), h)
    return kinds[0]


def _arrays(y0: Any, h: Any, t0: Any) -> tuple[Array, Array, Array]:
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    scalars = []
    for name, x in (("h", h), ("t0", t0)):
        # A Python number takes the precision of the state; an array must already have it.
        x = as_float(x) if hasattr(x, "dtype") else jnp.asarray(x, y0.dtype)
        check_shape(name, x, (), "()")
        check_same_dtype(name, x, "y0", y0)
        scalars.append(x)
    return y0, scalars[0], scalars[1]


def _tolerance(dtype: Any) -> float:
    return max(1e-12, 8 * float(jnp.finfo(dtype).eps))


def _truth(field: Field, params: Any, y0: Array, times: Array, exact: Any) -> np.ndarray:
    if exact is not None:
        return np.stack([np.asarray(exact(t)).reshape(y0.shape) for t in times]).astype(float)
    states = [y0]
    for start, end in itertools.pairwise(times):
        y, success = _reference(field, params, states[-1], jnp.stack([start, end]))
        if not bool(success):
            fail(
                "error-controlled integration",
                leaf="states",
                index=(len(states),),
                expected="that `adaptive_rollout` reaches the end with finite states",
                got=f"no success before time {float(end):.4g}",
                hint="check the field and its start, or take a shorter time",
            )
        states.append(y)
    return np.asarray(jnp.stack(states), float)


def _path(
    step: Step, params: Any, y0: Array, h: Array, t0: Array, substeps: int, steps: int
) -> np.ndarray:
    """Return states after each `h`, itself taken in `substeps` steps."""
    y, states, count = y0, [], jnp.asarray(substeps)
    for k in range(steps):
        y = _sample(step, params, y, h, t0, count, jnp.asarray(k))
        states.append(np.asarray(y, float))
    return np.stack(states)


# Both are compiled once for each field or step and shape, however many samples and step sizes
# there are: most of a check is compilation.
@eqx.filter_jit
def _reference(field: Field, params: Any, y: Array, times: Array) -> tuple[Array, Array]:
    tolerance = _tolerance(y.dtype)
    out = adaptive_rollout(field, params, y, times, rtol=tolerance, atol=tolerance)
    return out.states[-1], out.success


@eqx.filter_jit
def _sample(
    step: Step, params: Any, y: Array, h: Array, t0: Array, substeps: Array, k: Array
) -> Array:
    small = h / substeps.astype(h.dtype)
    advance = step(params, small)

    def one(j, y):
        # From the count, not from a sum: late steps lose no digits of their time.
        return advance(t0 + small * (k * substeps + j).astype(h.dtype), y)

    return lax.fori_loop(0, substeps, one, y)


def _order_hint(observed: float, order: int | float) -> str:
    if observed < 0.3:
        return "the error does not fall with the step: does the step solve this field, with `h`?"
    if observed < order:
        return "check the weights and the times of the stages, or claim what is observed"
    return "claim what is observed, or set `at_least=True`"


def _step_hint(step: Step, field: Field, params: Any, y0: Array, h: Array, t0: Array) -> str:
    """Say what is wrong with one step, as far as one can see."""
    move = lambda h, t: np.asarray(step(params, h)(t, y0) - y0, float)
    full, half = move(h, t0), move(h / 2, t0)
    slope = np.asarray(field(t0, y0, params), float)
    later = np.asarray(field(t0 + h, y0, params), float)
    found = []
    if np.array_equal(full, half) and np.any(slope != 0):
        found.append("the step ignores `h`: half of it moves as far")
    # The first move of a consistent step is `h f`; a small part of `h` leaves only rounding.
    small = h * float(jnp.finfo(y0.dtype).eps) ** (1 / 3)
    start = move(small, t0) / float(small)
    size = np.linalg.norm(slope)
    if not found and size > 0 and np.linalg.norm(start - slope) > 1e-2 * size:
        share = float(np.vdot(slope, start)) / size**2
        along = math.isclose(np.linalg.norm(start), abs(share) * size, rel_tol=1e-3)
        found.append(
            f"a short step moves {share:.3g} times as far as `h field`"
            if along
            else "a short step does not move along the field"
        )
    if not np.allclose(slope, later, rtol=1e-6, atol=0.0):
        if np.array_equal(full, move(h, t0 + h)):
            found.append("the step ignores `t`, on which the field depends")
        elif not found:
            found.append("the field depends on `t`: check the times of the stages")
    return "; ".join(found) or "take a smaller `h`, or claim a larger error"
