"""What a step makes of a linear problem: growth, frequency, and whether it stays bounded."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import as_float, check_count, check_floating, check_same_dtype, check_shape
from ..integrate import (
    NoisyParams,
    NoisyStep,
    StepBias,
    planar_rate,
    step_bias,
    without_noise,
)
from ..likelihood import stationary_covariance
from ._failure import fail
from ._step import Field, Scalar, Step, check_step_output, is_noisy


def check_step_bias(
    step: Step | NoisyStep,
    field: Field,
    params: Any,
    h: Scalar,
    *,
    limit: float,
    variance_limit: float | None = None,
    rate: Callable[[Any], Float[Array, "size size"]] = planar_rate,
    point: Float[Array, "*state"] | None = None,
) -> None:
    """Check growth rate, frequency and variance that a step makes of a linear planar unit.

        |growth of the step - a| <= limit,   |frequency of the step - w| <= limit,
        |variance of the step / P - 1| <= variance_limit

    with `a + iw` the leading eigenvalue of the Jacobian of the field at `point`, and `P` the mean
    stationary variance of its two components. Explicit Euler-Maruyama adds about `w^2 h / 2` to the
    growth: a damped unit looks self-sustained. This check says so.

    Arguments:
        step: any step of one planar unit: `step(params, h)` returns `advance(t, y) -> y` or a
            `NoisyAdvance`.
        field: `field(t, y, params) -> dy` of that unit.
        params: of the step; a `NoisyParams` for a noisy step, of which `field` goes to the field.
        h: step size, a scalar, time units.
        limit: largest error claimed of growth and frequency, per time unit and rad per time unit.
        variance_limit: largest relative error of the stationary variance; default `None`, not
            checked. Only for a noisy step of a damped unit.
        rate: `rate(noise) -> Q`, covariance rate of the noise; default `planar_rate`.
        point: fixed point, two entries; default the origin, shape `(2, 1)`.

    Raises:
        AssertionError: an error is beyond its limit, or not finite.
        ValueError: the unit does not have two entries.

    Example:
        >>> from oscillib.checks import check_step_bias
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, euler_maruyama
        >>> field = HopfNetwork()
        >>> params = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1])
        >>> check_step_bias(euler_maruyama(field), field, params, 0.001, limit=0.02)

    Source: linear stability of one step; common practice, no source.
    """
    h = as_float(h)
    origin = jnp.zeros((2, 1), h.dtype) if point is None else jnp.asarray(point)
    inner = params.field if isinstance(params, NoisyParams) else params
    got, matrix = _bias(step, field, params, inner, h, origin)
    eigenvalues = np.linalg.eigvals(np.asarray(matrix, float))
    leading = eigenvalues[np.argmax(eigenvalues.real)]
    _within("growth of the step", got.growth, leading.real, limit, h, leading)
    _within("frequency of the step", got.frequency, abs(leading.imag), limit, h, leading)
    if variance_limit is not None:
        if not isinstance(params, NoisyParams):
            raise TypeError("`variance_limit` needs a noisy step and `params` a `NoisyParams`.")
        variance = float(_variance(matrix, rate(params.noise)))
        allowed = variance_limit * variance
        _within("stationary variance of the step", got.variance, variance, allowed, h, leading)


def check_stability(
    step: Step | NoisyStep,
    params: Any,
    rest: Float[Array, "*state"],
    h: Scalar,
    *,
    count: int = 8,
    bound: float = 100.0,
    slack: float | None = None,
) -> None:
    """Check that a step stays bounded on a damped or neutral problem, up to a claimed step size.

        y' = M y near `rest`:   |eigenvalues of M| <= 1 + slack,   |M^n| <= bound

    for `count` step sizes from `h / count` to `h`, `n` up to 1024. The test problem is that of
    `params`: a unit that turns without growth is the hardest for an explicit step, one with strong
    damping shows the limit of a stiff one. The field itself must be
    damped or neutral at `rest`.

    Arguments:
        step: `step(params, h) -> advance`, or a noisy step, whose noise is left out.
        params: PyTree of parameters, damped or neutral at `rest`.
        rest: fixed point, shape `(*state)`.
        h: largest step size for which the step is claimed to be stable, time units.
        count: number of step sizes; default 8. Stability may be lost between two of them.
        bound: largest norm of a power of `M`; default 100. Above 1 because a stable problem may
            grow for a while.
        slack: how far an eigenvalue may be outside the unit circle; default 100 roundings an entry.

    Raises:
        AssertionError: the step grows, or moves `rest`; the message names the step size.
        ValueError: `count` is below 1.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_stability
        >>> from oscillib.fields import LinearNetwork, LinearParams
        >>> from oscillib.integrate import rk4
        >>> turning = LinearParams.turning(growth=[0.0], frequency=[6.0])
        >>> check_stability(rk4(LinearNetwork()), turning, jnp.zeros((2, 1)), 2.8 / 6)

    Source: stability region of a step, Hairer & Wanner, Solving ODEs II (from memory).
    """
    check_floating("rest", rest)
    rest = jnp.asarray(rest)
    h = as_float(h) if hasattr(h, "dtype") else jnp.asarray(h, rest.dtype)
    check_shape("h", h, (), "()")
    check_same_dtype("h", h, "rest", rest)
    count = check_count("count", count)
    plain: Any = step
    if is_noisy(step, params, h):
        plain = without_noise(plain)
    check_step_output(plain, params, rest, h)
    eps = float(jnp.finfo(rest.dtype).eps)
    slack = 100 * rest.size * eps if slack is None else slack
    size = max(1.0, float(np.max(np.abs(rest))))
    for length in np.asarray(h) * np.arange(1, count + 1).astype(h.dtype) / count:
        where = f"at step size {float(length):.4g}"
        # One size at a time: compiled once, whatever their number.
        out = _linearised(plain, params, rest, jnp.asarray(length, h.dtype))
        moved, matrix = (np.asarray(x, float) for x in out)
        away = float(np.max(np.abs(moved - np.asarray(rest, float))))
        if not away <= 1e3 * eps * size:
            _unstable("fixed point of the step", "`rest` to stay", f"a move of {away:.3g} {where}")
        if not np.all(np.isfinite(matrix)):
            _unstable("stability of the step", "a finite Jacobian", f"one that is not, {where}")
        largest = float(np.max(np.abs(np.linalg.eigvals(matrix))))
        if largest > 1 + slack:
            got = f"growth by 1 + {largest - 1:.2g} a step {where}"
            _unstable("stability of the step", "no eigenvalue beyond the unit circle", got)
        power = matrix
        for n in (2**j for j in range(11)):
            norm = float(np.linalg.norm(power, 2))
            if norm > bound:
                got = f"{norm:.3g} after {n} steps {where}"
                _unstable("stability of the step", f"norm of {n} steps within {bound:g}", got)
            power = power @ power


@eqx.filter_jit
def _linearised(step: Any, params: Any, rest: Array, h: Array) -> tuple[Array, Array]:
    advance, zero = step(params, h), jnp.zeros_like(h)
    flat = lambda y: advance(zero, y.reshape(rest.shape)).reshape(-1)
    matrix = jax.jacfwd(flat)(rest.reshape(-1))
    return advance(zero, rest), matrix


@eqx.filter_jit
def _bias(
    step: Any, field: Any, params: Any, inner: Any, h: Array, point: Array
) -> tuple[StepBias, Array]:
    flat = lambda y: field(jnp.zeros_like(h), y.reshape(point.shape), inner).reshape(-1)
    return step_bias(step, params, h, point=point), jax.jacfwd(flat)(point.reshape(-1))


@eqx.filter_jit
def _variance(matrix: Array, rate: Array) -> Array:
    return jnp.trace(stationary_covariance(matrix, rate).covariance) / 2


def _within(prop: str, got: Array, truth: float, limit: float, h: Array, leading: complex) -> None:
    error = float(got) - truth
    if abs(error) <= limit:
        return
    euler = leading.imag**2 * float(h) / 2
    if prop.startswith("frequency"):
        hint = "the step is too large for this frequency"
    elif abs(error - euler) < 0.3 * abs(euler) and prop.startswith("growth"):
        hint = f"an explicit Euler step adds w^2 h / 2 = {euler:.3g}; use a splitting step"
    else:
        hint = "take a smaller `h`, or claim a larger limit"
    fail(
        prop,
        leaf="step_bias",
        index=None,
        expected=f"{truth:.6g}, within {limit:.3g}",
        got=f"{float(got):.6g} (error {error:.3g} at h = {float(h):.3g})",
        hint=hint,
    )


def _unstable(prop: str, expected: str, got: str) -> None:
    hint = "claim a smaller `h`; the problem itself must be damped or neutral at `rest`"
    fail(prop, leaf="step", index=None, expected=expected, got=got, hint=hint)
