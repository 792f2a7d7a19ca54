"""What a step makes of a linear noisy oscillator."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_shape
from ._noisy_step import NoisyAdvance, NoisyStep
from ._types import Step


class StepBias(NamedTuple):
    """What `step_bias` returns; each a scalar.

    Attributes:
        growth: growth rate that the step really has, per time unit.
        frequency: angular frequency that it really has, rad per time unit, between 0 and `pi / h`.
        variance: stationary variance of a component (the mean of the two): 0 for a step without
            noise, infinite where the step grows.
    """

    growth: Float[Array, ""]
    frequency: Float[Array, ""]
    variance: Float[Array, ""]


def step_bias(
    step: Step | NoisyStep,
    params: Any,
    h: Float[Array, ""] | float,
    *,
    point: Float[Array, "*state"] | None = None,
) -> StepBias:
    """Return the growth rate, frequency and stationary variance that a step really has.

        y' = M y + noise of covariance C,   log(eigenvalue of M) / h = growth + i frequency,
        P = M P M' + C

    `M` is the Jacobian of one step at a fixed point and `C` what its noise adds. Compare with the
    truth for the oscillator `dz = (a + iw) z dt + s (dWx + i dWy)`: growth `a`, frequency `w`,
    variance `s^2 / (2 |a|)`. An exact step returns just these. Explicit Euler-Maruyama returns a
    growth of about `a + w^2 h / 2`: below that line a damped unit looks self-sustained.

    Arguments:
        step: any step of one planar unit, with noise or without: `step(params, h)` returns
            `advance(t, y) -> y` or a `NoisyAdvance`.
        params: handed to `step`; those of one unit, `a` and `w` the values of interest.
        h: step size, time units, a positive scalar.
        point: fixed point at which to linearise, two entries; default the origin, shape `(2, 1)`.

    Returns:
        The three numbers, differentiable.

    Raises:
        ValueError: `point` does not hold two entries.

    Example:
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, euler_maruyama, noisy_strang, step_bias
        >>> field = HopfNetwork()
        >>> params = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1])
        >>> print(step_bias(euler_maruyama(field), params, 0.05).growth.round(3))
        0.678
        >>> exact = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> print(*(f"{x:.6f}" for x in step_bias(exact, params, 0.05)))
        -0.200000 6.000000 0.025000

    Source: linear stability of one step; common practice, no source.
    """
    h = as_float(h)
    check_shape("h", h, (), "()")
    point = jnp.zeros((2, 1), h.dtype) if point is None else jnp.asarray(point)
    if point.size != 2:
        raise ValueError(f"`point` must hold two entries, one planar unit; got {point.shape}.")
    advance = step(params, h)
    t = jnp.zeros_like(h)
    if isinstance(advance, NoisyAdvance):
        matrix = _jacobian(lambda y: advance.after(t, advance.into_noise(t, y)), point)
        entry = _jacobian(lambda y: advance.after(t, y), advance.into_noise(t, point))
        covariance = entry @ advance.covariance @ entry.T
    else:
        matrix = _jacobian(lambda y: advance(t, y), point)
        covariance = jnp.zeros_like(matrix)
    modulus, angle = _leading_eigenvalue(matrix)
    damped = modulus < 1
    # The solve must stay regular where its result is not used.
    safe = jnp.where(damped, matrix, 0 * matrix)
    system = jnp.eye(4, dtype=matrix.dtype) - jnp.kron(safe, safe)
    stationary = jnp.linalg.solve(system, covariance.reshape(-1)).reshape(2, 2)
    variance = jnp.where(damped, jnp.trace(stationary) / 2, jnp.inf)
    return StepBias(jnp.log(modulus) / h, angle / h, variance)


def _jacobian(f, y: Array) -> Array:
    return jax.jacfwd(f)(y).reshape(2, 2)


def _leading_eigenvalue(matrix: Array) -> tuple[Array, Array]:
    """Return modulus and angle of the larger eigenvalue of a 2 by 2 matrix."""
    middle = jnp.trace(matrix) / 2
    determinant = matrix[0, 0] * matrix[1, 1] - matrix[0, 1] * matrix[1, 0]
    square = middle**2 - determinant
    turning = square < 0
    root = jnp.sqrt(jnp.where(square == 0, 1, jnp.abs(square)))
    root = jnp.where(square == 0, 0, root)
    along = jnp.abs(middle) + root
    modulus = jnp.where(turning, jnp.sqrt(jnp.where(turning, determinant, 1)), along)
    angle = jnp.arctan2(jnp.where(turning, root, 0), middle)
    return modulus, angle
