"""Second-order refinement of few parameters: Newton or Fisher scoring in a trust region."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float, Int

from .._validate import check_count, check_shape
from ._eigen import Spectrum, bounded_step, sizes, spectrum
from ._flat import check_loss, from_flat, layout, slopes, to_flat
from ._status import Status


class RefineState(NamedTuple):
    """Where a refinement stands: the best finite iterate, and the trial that comes next.

    Arguments:
        params: best parameters so far.
        x: their flat unconstrained vector, `(free,)`.
        loss: loss there; infinite before the first step.
        gradient: on the unconstrained scale, `(free,)`.
        curvature: Hessian there, or what `curvature` returned, `(free, free)`.
        decrement: `g' |H|^-1 g`, the squared distance from the optimum in standard errors.
        trial: flat vector that the next step evaluates, `(free,)`.
        predicted: by how much the quadratic model has the loss fall there.
        length: length of that step, in standard errors with the other entries known.
        radius: greatest length allowed.
        slope: slopes of the constraints at the start, `(free,)`.
        spectrum: scaled eigen-decomposition of `curvature`.
        steps: evaluations so far.
        status: code of `Status`.
    """

    params: Any
    x: Float[Array, " free"]
    loss: Float[Array, ""]
    gradient: Float[Array, " free"]
    curvature: Float[Array, "free free"]
    decrement: Float[Array, ""]
    trial: Float[Array, " free"]
    predicted: Float[Array, ""]
    length: Float[Array, ""]
    radius: Float[Array, ""]
    slope: Float[Array, " free"]
    spectrum: Spectrum
    steps: Int[Array, ""]
    status: Int[Array, ""]


class Refinement(NamedTuple):
    """What `refine` found.

    Arguments:
        params: best finite iterate, in the structure of the start.
        loss: loss there; infinite if it was never finite.
        gradient_norm: largest entry of the gradient's size on the unconstrained scale.
        decrement: `g' |H|^-1 g`: the squared distance from the optimum in standard errors.
        curvature: Hessian, or the matrix of `curvature`, on the unconstrained scale there,
            `(free, free)`, in the order of `parameter_names`.
        steps: evaluations of loss, gradient and curvature.
        status: code of `Status`.
    """

    params: Any
    loss: Float[Array, ""]
    gradient_norm: Float[Array, ""]
    decrement: Float[Array, ""]
    curvature: Float[Array, "free free"]
    steps: Int[Array, ""]
    status: Int[Array, ""]


def refine(
    loss: Callable[[Any], Array],
    params: Any,
    constraints: Any,
    *,
    curvature: Callable[[Any], Array] | None = None,
    max_steps: int = 50,
    tolerance: float | None = None,
) -> Refinement:
    """Refine few parameters by damped Newton steps, or by Fisher scoring.

    On the flat unconstrained vector x, with g and H gradient and Hessian of `loss`,

        x <- x - (|H| + m D^2)^-1 g,        D^2 = the size of H's diagonal

    |H| has the eigenvalues of H (scaled by D) with their signs dropped, so that a step descends
    from a saddle or a ridge too; m >= 0 is as small as a trust region allows, which grows and
    shrinks with how well the quadratic model predicted the fall of the loss, and 0 near the
    optimum: convergence is quadratic. With `curvature`, its matrix stands in place of H, and
    convergence is linear, fast where the model fits the data.

    It has converged when `sqrt(g' |H|^-1 g) <= tolerance`. For a negative log-likelihood that is
    the distance from the optimum in standard errors, whatever the parameters' units. For another
    loss (a mean square, say) the tolerance has no such meaning: scale the loss first.

    Cost and reach: each step evaluates the loss, its gradient and `free` forward derivatives of
    the gradient, at once: meant for up to some tens of entries, and for starts from which the way
    leads down to the optimum. Directions whose scaled curvature is below eps^(2/3) of the largest
    (4e-11 in float64, 2e-5 in float32) count as flat and are left about where they are.

    Works under `jit` and `vmap`; every recording of a batch stops by itself. Compiles at each call
    unless it is called inside a function under `jit`.

    Arguments:
        loss: negative log-likelihood, `loss(params) -> scalar`, twice differentiable.
        params: start, a PyTree of arrays within their constraints.
        constraints: tree of constraints.
        curvature: `curvature(params) -> (free, free)`, a positive semidefinite matrix on the
            unconstrained scale in the order of `parameter_names`, such as `fisher_gaussian`;
            default `None`: the Hessian.
        max_steps: most evaluations, default 50.
        tolerance: standard errors from the optimum at which to stop; default eps^0.4: 5e-7 in
            float64, 2e-3 in float32.

    Returns:
        A `Refinement`. Its status is `CONVERGED` only with finite loss, gradient and curvature;
        `SADDLE` if the loss curves down somewhere; `AT_BOUND` if a parameter ran off along its
        unconstrained scale (its slope fell below 1e-4 of that at the start, and the loss curves
        by less than 0.01 there); `NON_FINITE`, `STALLED` and `STEP_LIMIT` as described there.

    Raises:
        ValueError: `loss` is not a scalar, nothing is free, the trees disagree.
        TypeError: what is fitted is not of one floating dtype; `max_steps` is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import describe, refine
        >>> from oscillib.parameters import Positive
        >>> samples = jnp.array([1.0, -2.0, 2.0, 3.0])
        >>> loss = lambda p: 4 * jnp.log(p["scale"]) + jnp.sum((samples / p["scale"]) ** 2) / 2
        >>> fit = refine(loss, {"scale": jnp.asarray(1.0)}, {"scale": Positive()})
        >>> print(describe(fit.status)[:9], fit.params["scale"].round(6), fit.steps)
        converged 2.12132 6

    Source: trust-region Newton with modified eigenvalues: Nocedal and Wright, Numerical
        Optimization, 2nd ed. (2006), chapters 3 and 4, from memory.
    """
    max_steps = check_count("max_steps", max_steps)
    state = refine_init(loss, params, constraints)

    def step(state):
        return refine_step(loss, state, constraints, curvature=curvature, tolerance=tolerance)

    return refinement(run(step, state, max_steps))


def refine_init(loss: Callable[[Any], Array], params: Any, constraints: Any) -> RefineState:
    """Prepare a refinement without evaluating the loss; `refine_step` moves it.

    Arguments:
        loss: as for `refine`; only the shape of its result is looked at.
        params: start.
        constraints: tree of constraints.

    Returns:
        The first `RefineState`.

    Raises:
        ValueError: as `refine`.
        TypeError: as `refine`.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import refine_init, refine_step
        >>> from oscillib.parameters import Free
        >>> loss = lambda x: jnp.sum((x - 3.0) ** 2)
        >>> state = refine_init(loss, jnp.zeros(1), Free())
        >>> step = jax.jit(lambda state: refine_step(loss, state, Free()))
        >>> for _ in range(2):
        ...     state = step(state)
        >>> state.params
        Array([3.], dtype=float64)
    """
    check_loss(loss, params)
    # A weakly typed start would change its type, and have the loop traced twice.
    params = jax.tree.map(lambda p: jnp.asarray(p, jnp.result_type(p)), params)
    x = to_flat(params, constraints)
    n, zero, infinite = x.shape[0], jnp.zeros((), x.dtype), jnp.asarray(jnp.inf, x.dtype)
    flat = jnp.zeros_like(x)
    square = jnp.zeros((n, n), x.dtype)
    return RefineState(
        params=params,
        x=x,
        loss=infinite,
        gradient=flat,
        curvature=square,
        decrement=infinite,
        trial=x,
        predicted=zero,
        length=zero,
        radius=infinite,
        slope=slopes(from_flat(params, constraints), layout(params, constraints), x),
        spectrum=Spectrum(flat, square, flat),
        steps=jnp.zeros((), jnp.int32),
        status=jnp.asarray(int(Status.RUNNING), jnp.int32),
    )


def refine_step(
    loss: Callable[[Any], Array],
    state: RefineState,
    constraints: Any,
    *,
    curvature: Callable[[Any], Array] | None = None,
    tolerance: float | None = None,
) -> RefineState:
    """Evaluate the trial, accept it if it is better, and choose the next one.

    A state whose status is not `RUNNING` comes back unchanged.

    Arguments:
        loss: as for `refine`.
        state: from `refine_init` or the last step.
        constraints: tree of constraints.
        curvature: as for `refine`.
        tolerance: as for `refine`.

    Returns:
        The next `RefineState`.

    Raises:
        ValueError: `curvature` returns a matrix of another shape.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import Status, refine_init, refine_step
        >>> from oscillib.parameters import Free
        >>> loss = lambda x: jnp.sum(x**4)
        >>> state = refine_init(loss, jnp.ones(1), Free())
        >>> state = refine_step(loss, state, Free())
        >>> state.status == Status.RUNNING, state.trial
        (Array(True, dtype=bool), Array([0.66666667], dtype=float64))
    """
    eps = jnp.finfo(state.x.dtype).eps
    tolerance = float(eps**0.4) if tolerance is None else tolerance
    to_params = from_flat(state.params, constraints)
    value, gradient, matrix = _evaluate(loss, to_params, state.trial, curvature)
    first = state.steps == 0
    finite = jnp.isfinite(value) & jnp.all(jnp.isfinite(gradient)) & jnp.all(jnp.isfinite(matrix))
    gradient = jnp.where(finite, gradient, 0)
    matrix = jnp.where(finite, matrix, 0)
    parts = spectrum(matrix)
    decrement = _decrement(parts, gradient)

    fall = state.loss - value
    # Below the loss's own rounding error only the gradient can tell better from worse.
    noise = 100 * eps * jnp.abs(state.loss)
    unclear = (state.predicted < noise) & (jnp.abs(fall) < noise)
    better = (fall >= 0.1 * state.predicted) | (unclear & (decrement < state.decrement))
    accepted = finite & (first | better)
    trial_params = to_params(state.trial)
    new = state._replace(
        params=trial_params,
        x=state.trial,
        loss=value,
        gradient=gradient,
        curvature=matrix,
        decrement=decrement,
        spectrum=parts,
    )
    new = _select(accepted, new, state)
    new = new._replace(radius=_radius(state, accepted, fall, unclear | first))
    new = _propose(new)
    slope = slopes(to_params, layout(state.params, constraints), new.x)
    lost = ~accepted & (first | (state.length < 1e-3 * tolerance))
    code = jnp.select(
        [lost & ~finite, lost, accepted & (jnp.sqrt(new.decrement) <= tolerance)],
        [Status.NON_FINITE, Status.STALLED, _verdict(new, slope)],
        Status.RUNNING,
    )
    new = new._replace(steps=state.steps + 1, status=code.astype(jnp.int32))
    return _select(state.status == Status.RUNNING, new, state)


def run(
    step: Callable[[RefineState], RefineState], state: RefineState, max_steps: int
) -> RefineState:
    """Step until a verdict or the step limit."""

    def unfinished(state):
        return (state.status == Status.RUNNING) & (state.steps < max_steps)

    state = lax.while_loop(unfinished, step, state)
    running = state.status == Status.RUNNING
    status = jnp.where(running, Status.STEP_LIMIT, state.status)
    return state._replace(status=status.astype(jnp.int32))


def refinement(state: RefineState) -> Refinement:
    """Return what of a final state is of use to others."""
    norm = jnp.max(jnp.abs(state.gradient))
    return Refinement(
        state.params, state.loss, norm, state.decrement, state.curvature, state.steps, state.status
    )


def _evaluate(
    loss: Callable, to_params: Callable, x: Array, curvature: Callable | None
) -> tuple[Array, Array, Array]:
    """Return loss, gradient and curvature matrix at a flat vector."""
    value_and_grad = jax.value_and_grad(lambda x: loss(to_params(x)))
    if curvature is not None:
        value, gradient = value_and_grad(x)
        matrix = curvature(to_params(x))
        check_shape("curvature(params)", matrix, (x.shape[0],) * 2, "(free, free)")
    else:

        def gradient_first(x):
            value, gradient = value_and_grad(x)
            return gradient, (value, gradient)

        matrix, (value, gradient) = jax.jacfwd(gradient_first, has_aux=True)(x)
    return value.astype(x.dtype), gradient, (matrix + matrix.T) / 2


def _decrement(parts: Spectrum, gradient: Array) -> Array:
    pull = parts.vectors.T @ (gradient / parts.scale)
    return jnp.sum(pull**2 / sizes(parts.values))


def _propose(state: RefineState) -> RefineState:
    """Set the trial to the model's minimum within the radius."""
    parts = state.spectrum
    size = sizes(parts.values)
    # Before anything was accepted there is no model: scale 0 stands for that.
    scale = jnp.where(parts.scale > 0, parts.scale, 1)
    pull = -parts.vectors.T @ (state.gradient / scale)
    step = bounded_step(size, pull, state.radius)
    return state._replace(
        trial=state.x + (parts.vectors @ step) / scale,
        predicted=jnp.sum(pull * step) - jnp.sum(size * step**2) / 2,
        length=jnp.linalg.norm(step),
    )


def _radius(state: RefineState, accepted: Array, fall: Array, keep: Array) -> Array:
    """Return the next radius: smaller after a poor prediction, larger after a good one."""
    good = fall > 0.75 * state.predicted
    poor = fall < 0.25 * state.predicted
    grown = jnp.maximum(state.radius, 2 * state.length)
    after = jnp.where(good, grown, jnp.where(poor, state.length / 2, state.radius))
    return jnp.where(accepted, jnp.where(keep, state.radius, after), state.length / 4)


def _verdict(state: RefineState, slope: Array) -> Array:
    """Return the status of an iterate whose gradient is small."""
    values = state.spectrum.values
    eps = jnp.finfo(values.dtype).eps
    saddle = values[0] < -jnp.sqrt(eps) * jnp.max(jnp.abs(values))
    left = jnp.abs(slope) < 1e-4 * jnp.abs(state.slope)
    at_bound = jnp.any(left & (jnp.diagonal(state.curvature) < 1e-2))
    return jnp.where(saddle, Status.SADDLE, jnp.where(at_bound, Status.AT_BOUND, Status.CONVERGED))


def _select(condition: Bool[Array, ""], new: RefineState, old: RefineState) -> RefineState:
    return jax.tree.map(lambda a, b: jnp.where(condition, a, b), new, old)
