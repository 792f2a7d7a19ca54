"""Transition density of a noisy step, for states that are observed directly."""

from typing import Any

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_floating, check_same_dtype, check_shape
from ..integrate import NoisyAdvance, NoisyStep
from ._gaussian import jacobian, local_blocks, whitener


def transition_log_density(
    step: NoisyStep,
    params: Any,
    states: Float[Array, "time *state"],
    *,
    h: Float[Array, "..."] | float,
    t0: Float[Array, ""] | float = 0.0,
) -> Float[Array, " step"]:
    """Return the log-density of each state given the one before, under a noisy step.

        log N( undo(y_(k+1)); matrix before(y_k), C(h) ) + log |det d undo / dy|

    where `undo` inverts `after`. For the splitting of a noisy Hopf network nothing is approximated
    but the splitting itself: the density is that of the simulated step, integrates to 1, and is
    exact for a linear network whatever `h`. A state that the last flow cannot reach (saturation
    over `h / 2` maps everything inside `r^2 < 1 / (b h)`) has log-density -inf.

    Arguments:
        step: `step(params, h) -> NoisyAdvance`, one with an inverse `undo`, such as
            `noisy_strang(...)`.
        params: handed to `step`, usually `NoisyParams`.
        states: every component observed without reading noise, shape `(time, *state)`.
        h: interval between samples, a scalar, or `(time - 1,)`.
        t0: time of the first sample; default 0.

    Returns:
        Shape `(time - 1,)`, nats; their sum is the log-likelihood given the first state. NaN where
        a state is not finite, or where some direction has no noise.

    Raises:
        ValueError: the step has no `undo`; shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_strang
        >>> from oscillib.likelihood import transition_log_density
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> params = NoisyParams(HopfParams([0.0], [0.0], saturation=[0.0]), noise=[1.0])
        >>> print(transition_log_density(step, params, jnp.zeros((2, 2, 1)), h=1.0).round(4))
        [-1.8379]

    Source: change of variables; for splitting schemes Pilipovic, Samson & Ditlevsen 2024 (from
    memory).
    """
    check_floating("states", states)
    states = jnp.asarray(states)
    count = states.shape[0] - 1
    h = as_float(h) if hasattr(h, "dtype") else jnp.asarray(h, states.dtype)
    t0 = as_float(t0) if hasattr(t0, "dtype") else jnp.asarray(t0, states.dtype)
    check_same_dtype("h", h, "states", states)
    if h.ndim:
        check_shape("h", h, (count,), "(time - 1,)")
        times = t0 + jnp.concatenate([jnp.zeros_like(h[:1]), jnp.cumsum(h)[:-1]])
        one = lambda t, k, y0, y1: _log_density(step(params, k), t, y0, y1)
        return jax.vmap(one)(times, h, states[:-1], states[1:])
    times = t0 + h * jnp.arange(count).astype(h.dtype)
    advance = step(params, h)
    return jax.vmap(lambda t, y0, y1: _log_density(advance, t, y0, y1))(
        times, states[:-1], states[1:]
    )


def _log_density(advance: NoisyAdvance, t: Array, y0: Array, y1: Array) -> Array:
    undo = advance.undo
    if undo is None:
        raise ValueError(
            "`step` must know the inverse of its last map; got a NoisyAdvance with `undo` None. "
            "Fix: use `noisy_strang` or `euler_maruyama`, or give `undo`."
        )
    mean = advance.into_noise(t, y0)
    reached = jnp.all(jnp.isfinite(undo(t, y1)))
    # Both branches of a `where` are differentiated: a state out of reach is replaced beforehand.
    end = jnp.where(reached, y1, 0)
    if advance.local:
        undone, blocks = local_blocks(lambda y: undo(t, y), end)
        # (node, component, component); of a plane the determinant has a formula.
        determinants = jnp.linalg.det(jnp.stack([jnp.stack(row, 1) for row in blocks], 1))
        log_volume = jnp.sum(jnp.log(jnp.abs(determinants)))
    else:
        undone = undo(t, end)
        log_volume = jnp.linalg.slogdet(jacobian(lambda y: undo(t, y), end))[1]
    white = whitener(advance.covariance)
    log_normal = (
        -jnp.sum((white @ (undone - mean).reshape(-1)) ** 2) / 2
        + jnp.sum(jnp.log(jnp.diag(white)))
        - jnp.asarray(y0.size / 2, y0.dtype) * jnp.log(2 * jnp.pi).astype(y0.dtype)
    )
    known = jnp.all(jnp.isfinite(y0)) & jnp.all(jnp.isfinite(y1))
    return jnp.where(known, jnp.where(reached, log_normal + log_volume, -jnp.inf), jnp.nan)
