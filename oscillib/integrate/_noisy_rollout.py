"""Simulation of noisy systems: rollout with exact noise, and the door to diffrax's solvers."""

from typing import TYPE_CHECKING, Any

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int

from .._validate import check_floating, check_shape
from ._noise import NoisyParams, Rate, covariance_factor, noise_key, planar_rate
from ._noisy_step import NoisyAdvance, NoisyStep, without_noise
from ._rollout import _count_steps, _matching, check_advance, segmented_scan
from ._runge_kutta import check_field_output
from ._types import Field, Scalar, State


if TYPE_CHECKING:
    import diffrax


def noisy_rollout(
    step: NoisyStep,
    params: Any,
    y0: State,
    h: Float[Array, "..."] | float,
    steps: int | None = None,
    *,
    key: Array,
    window: Int[Array, ""] | int = 0,
    first: Int[Array, ""] | int = 0,
    t0: Scalar | float = 0.0,
    segment: int | None = None,
) -> Float[Array, "time *state"]:
    """Simulate one path: `y_(k+1) = after(t_k, matrix before(t_k, y_k) + e_k)`.

    The noise of a step depends on the key, the window label and the number of the step, not on
    time and not on how the work is cut up: windows rolled out in parallel with `first` set to the
    number of their first step, or segments, see the very noise of one long rollout.

    Arguments:
        step: `step(params, h) -> NoisyAdvance`.
        params: PyTree of parameters, handed to `step`.
        y0: start, shape `(*state)`.
        h: step size in time units: a scalar, or one for each step, shape `(steps,)`.
        steps: number of steps; required with a scalar `h`.
        key: random key of the recording.
        window: label of one of several independent continuations; default 0.
        first: number of the first step within the recording; default 0.
        t0: time of `y0`; default 0.
        segment: as in `rollout`.

    Returns:
        States at the start and after each step, shape `(steps + 1, *state)`. Differentiable in
        every parameter, noise levels included, with the draws held fixed.

    Raises:
        ValueError: shape of `h`; `steps` missing or contradicting `h`; the step returns another
            shape than `y0`.
        TypeError: `y0` is not floating; dtypes differ; `steps` or `segment` is not an int.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_rollout, noisy_strang
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> params = NoisyParams(HopfParams([0.2], [6.0]), noise=[0.1])
        >>> ys = noisy_rollout(step, params, jnp.zeros((2, 1)), 0.1, 100, key=jax.random.key(0))
        >>> ys.shape
        (101, 2, 1)
    """
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    h, t0 = _matching("h", h, y0), _matching("t0", t0, y0)
    check_shape("t0", t0, (), "()")
    steps = _count_steps(h, steps)
    check_advance(without_noise(step), params, y0, h)

    def prepare(interval) -> tuple[NoisyAdvance, Array]:
        advance = step(params, interval)
        size = (y0.size, y0.size)
        check_shape("step(params, h).covariance", advance.covariance, size, "(size, size)")
        return advance, covariance_factor(advance.covariance)

    number = jnp.arange(steps)
    if h.ndim == 0:
        prepared = prepare(h)
        xs = (number, t0 + h * number.astype(h.dtype), None)
    else:
        prepared = None
        before = jnp.concatenate([jnp.zeros_like(h[:1]), jnp.cumsum(h)[:-1]])
        xs = (number, t0 + before, h)

    def body(y, x):
        k, t, interval = x
        advance, factor = prepare(interval) if prepared is None else prepared
        normal = jax.random.normal(noise_key(key, first + k, window=window), (y.size,), y.dtype)
        y = advance.after(t, advance.into_noise(t, y) + (factor @ normal).reshape(y.shape))
        return y, y

    _, ys = segmented_scan(body, y0, xs, segment=segment)
    return jnp.concatenate([y0[None], ys])


def diffrax_terms(
    field: Field, brownian: "diffrax.AbstractBrownianPath", *, rate: Rate = planar_rate
) -> "diffrax.MultiTerm":
    """Return the same noisy system as terms for any of diffrax's stochastic solvers.

        dy = f(t, y, params.field) dt + L dW,   L L' = rate(params.noise)

    Arguments:
        field: `field(t, y, params) -> dy`.
        brownian: diffrax Brownian path of shape `(size,)`, `size` the entries of a state.
        rate: `rate(noise) -> Q`, covariance rate of the noise; default `planar_rate`. The noise is
            additive, so Ito and Stratonovich solvers agree.

    Returns:
        A `diffrax.MultiTerm`; give a `NoisyParams` as `args` of `diffrax.diffeqsolve`.

    Example:
        >>> import diffrax, jax, jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, diffrax_terms
        >>> path = diffrax.VirtualBrownianTree(0.0, 1.0, 1e-3, (2,), jax.random.key(0))
        >>> terms = diffrax_terms(HopfNetwork(), path)
        >>> params = NoisyParams(HopfParams([0.2], [6.0]), noise=[0.1])
        >>> out = diffrax.diffeqsolve(terms, diffrax.Heun(), 0.0, 1.0, 0.01, jnp.zeros((2, 1)),
        ...                           args=params)
        >>> out.ys.shape
        (1, 2, 1)
    """
    import diffrax

    checked = check_field_output(field)

    def drift(t, y, args: NoisyParams):
        return checked(t, y, args.field)

    def diffusion(t, y, args: NoisyParams):
        del t
        factor = covariance_factor(rate(args.noise))
        return factor.reshape(*y.shape, factor.shape[1])

    return diffrax.MultiTerm(diffrax.ODETerm(drift), diffrax.ControlTerm(diffusion, brownian))
