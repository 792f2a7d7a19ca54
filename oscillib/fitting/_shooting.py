"""Windowed shooting: shared parameters and one start state a window, fitted together."""

from collections.abc import Callable
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float, Int, PyTree

from .._validate import (
    as_float,
    check_count,
    check_floating,
    check_same_dtype,
    check_shape,
    check_values,
)
from ..integrate import Windows, join
from ..parameters import Free
from ._collapse import collapse
from ._shooting_continuity import HardContinuity
from ._shooting_residual import Moved, Residual, lay_out
from ._shooting_solver import ShootingRecord, ShootingState, Solver
from ._shooting_unknowns import Unknowns, check_start
from ._shooting_verdict import Continuity
from ._status import Status


class GaussianPrior(NamedTuple):
    """Centre and standard deviation of a Gaussian prior.

    Attributes:
        mean: for parameters a tree of free leaves as `unconstrain` returns it; for starts an array
            `(window, *state)`.
        scale: standard deviations in the same structure and shapes; infinite where nothing is
            known.
    """

    mean: Any
    scale: Any


class ShootingResult(NamedTuple):
    """What a windowed fit found. With `own`, arrays of a recording have a leading recording axis.

    Attributes:
        status: code of `Status`; only `Status.CONVERGED` is a success. `COLLAPSED` if a channel is
            constant in the data or all but constant in the fit, or nothing was observed.
        params: best finite iterate, in the structure of the parameters given.
        starts: start state of each window, `(window, *state)`.
        gaps: end of each window minus start of the next, `(window - 1, *state)`.
        predicted: channels at every sample, `(time, channel)`, each from the window that owns it.
        loss: half the sum of squared residuals (in units of `scale`) and priors.
        objective: the loss plus what continuity adds; comparable between fits of one problem.
        gradient_norm: norm of the gradient by all unknowns, forces of a constraint included.
        covariance: of the free parameters by Gauss-Newton, `(p, p)`, with the starts marginalised;
            in the order of `ravel_pytree(unconstrain(params))`; with `own`, of each recording's
            own and then the shared ones. Not finite where the data leave a direction open.
        steps: number of steps taken.
        record: what each step did.
    """

    status: Int[Array, ""]
    params: PyTree
    starts: Float[Array, "window *state"]
    gaps: Float[Array, "joint *state"]
    predicted: Float[Array, "time channel"]
    loss: Float[Array, ""]
    objective: Float[Array, ""]
    gradient_norm: Float[Array, ""]
    covariance: Float[Array, "p p"]
    steps: Int[Array, ""]
    record: ShootingRecord


class Shooting(eqx.Module):
    """A windowed fit as pure functions: `init`, `step` (or `run`) and `result`.

    The problem, the arguments and their meaning are those of `shoot`, which runs the three in a
    `while_loop`. All are compiled, and work under `jit` and `vmap`; a fit that has ended passes
    `step` unchanged.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import Shooting, Status
        >>> from oscillib.integrate import cut, rk4
        >>> times = jnp.linspace(0.0, 2.0, 21)
        >>> fit = Shooting(
        ...     rk4(lambda t, y, params: -params * y), lambda y, params: y, jnp.asarray(1.0),
        ...     jnp.ones((4, 1)), cut(times, 5), jnp.exp(-2 * times)[:, None], scale=jnp.ones(1),
        ... )
        >>> state = fit.init()
        >>> for _ in range(20):
        ...     state = fit.step(state)
        >>> result = fit.result(state)
        >>> Status(int(result.status)).name, result.params.round(4).item()
        ('CONVERGED', 2.0)
    """

    solver: Solver
    at: Moved
    values: Float[Array, "recording time channel"]
    mask: Bool[Array, "recording time channel"]
    windows: Windows
    single: bool = eqx.field(static=True)

    def __init__(
        self,
        step: Callable,
        readout: Callable,
        params: PyTree,
        starts: Any,
        windows: Windows,
        values: Any,
        *,
        scale: Any,
        mask: Any = None,
        constraints: PyTree = None,
        own: PyTree = None,
        continuity: Continuity | None = None,
        prior: GaussianPrior | None = None,
        start_prior: GaussianPrior | None = None,
        tolerance: Any = None,
        damping: Any = 1e-3,
        max_steps: int = 100,
    ):
        """Check the arguments and lay the recordings out by window."""
        params, starts, values = jax.tree.map(as_float, params), as_float(starts), as_float(values)
        self.single = own is None
        mask = jnp.ones(values.shape, bool) if mask is None else jnp.asarray(mask)
        _check(params, starts, windows, values, mask, scale, self.single)
        if constraints is None:
            constraints = jax.tree.map(lambda _: Free(), params)
        check_start(params, constraints, own)
        if own is None:
            own = jax.tree.map(lambda _: False, params)
            starts, values, mask = starts[None], values[None], mask[None]
        self.values, self.mask, self.windows = values, mask, windows
        count, joined = starts.shape[0], (*starts.shape[:2], -1)
        unknowns = Unknowns(constraints, own, params)
        _check_readout(readout, unknowns, starts[0, 0], values)
        self.at = Moved(*unknowns.pack(params, count), starts.reshape(joined))
        packed = None
        if prior is not None:
            mean, spread = (Moved(*unknowns.pack_free(x, count), starts[:0]) for x in prior)
            for name, x in zip(("mean", "scale"), (mean, spread), strict=True):
                check_shape(f"prior.{name}", x.own, self.at.own.shape, "(recording, own free)")
                check_shape(f"prior.{name}", x.shared, self.at.shared.shape, "(shared free,)")
            packed = (mean, jax.tree.map(lambda x: 1 / x, spread))
        on_starts = None
        if start_prior is not None:
            for name, x in zip(("mean", "scale"), start_prior, strict=True):
                expected = starts.shape[1:] if self.single else starts.shape
                check_shape(f"start_prior.{name}", x, expected, "that of `starts`")
            mean, spread = (jnp.reshape(x, joined) for x in start_prior)
            on_starts = (mean, 1 / spread)
        residual = Residual(
            step=step,
            readout=readout,
            unknowns=unknowns,
            data=lay_out(windows, values, mask, as_float(scale), on_starts),
            windows=windows,
            state_shape=starts.shape[2:],
            prior=packed,
        )
        eps = float(jnp.finfo(starts.dtype).eps)
        self.solver = Solver(
            residual=residual,
            continuity=HardContinuity() if continuity is None else continuity,
            tolerance=jnp.asarray(eps**0.5 if tolerance is None else tolerance, starts.dtype),
            damping=jnp.asarray(damping, starts.dtype),
            max_steps=check_count("max_steps", max_steps),
        )

    @eqx.filter_jit
    def init(self, params: PyTree = None, starts: Any = None) -> ShootingState:
        """Return the state at the start, or at other parameters and starts of the same shapes."""
        at = self.at
        if params is not None:
            own, shared = self.solver.residual.unknowns.pack(params, at.own.shape[0])
            at = at._replace(own=own, shared=shared)
        if starts is not None:
            at = at._replace(starts=jnp.reshape(starts, at.starts.shape))
        return self.solver.init(at)

    @eqx.filter_jit
    def step(self, state: ShootingState) -> ShootingState:
        """Take one step of the damped Gauss-Newton method; an ended fit is left as it is."""
        return self.solver.step(state)

    @eqx.filter_jit
    def run(self, state: ShootingState, limit: int | None = None) -> ShootingState:
        """Step until the fit ends or has taken `limit` steps (default: `max_steps`)."""
        most = self.solver.max_steps
        return self.solver.run(state, most if limit is None else min(limit, most))

    def score(self, state: ShootingState) -> Float[Array, ""]:
        """Return loss and cost of the gaps by a yardstick that does not depend on the stage."""
        linear, solver = state.linear, self.solver
        gaps = solver.whiten(linear.rows.gaps)
        return linear.misfit + solver.continuity.yardstick(gaps, solver.information(linear))

    @eqx.filter_jit
    def result(self, state: ShootingState) -> ShootingResult:
        """Give the verdict on a fit, with parameters, starts, gaps and covariance."""
        solver, linear, at = self.solver, state.linear, state.at
        joined = jax.vmap(lambda x: join(x, self.windows))(linear.predicted)
        gradient = solver.gradient(state)
        norm = jnp.sqrt(sum(jnp.sum(x**2) for x in gradient))
        shape = (*at.starts.shape[:2], *solver.residual.state_shape)
        gaps = linear.rows.gaps.reshape(shape[0], shape[1] - 1, *shape[2:])
        covariance = solver.covariance(state)
        parts = (at.starts.reshape(shape), gaps, joined, covariance)
        if self.single:
            parts = tuple(x[0] for x in parts)
        return ShootingResult(
            status=self._verdict(state, joined, norm, covariance),
            params=solver.residual.unknowns.unpack(at.own, at.shared),
            starts=parts[0],
            gaps=parts[1],
            predicted=parts[2],
            loss=linear.misfit,
            objective=self.score(state),
            gradient_norm=norm,
            covariance=parts[3],
            steps=state.steps,
            record=state.record,
        )

    def _verdict(
        self, state: ShootingState, predicted: Array, norm: Array, covariance: Array
    ) -> Array:
        flat = jax.vmap(collapse)(predicted, self.values, self.mask).collapsed
        # A channel without any sample says nothing about the rest; none at all is no success.
        collapsed = jnp.any(flat & jnp.any(self.mask, axis=1)) | ~jnp.any(self.mask)
        unknowns = self.solver.residual.unknowns
        bound = unknowns.at_bound(self.at[:2], state.at[:2], covariance)
        status = jnp.where(state.status == Status.RUNNING, Status.STEP_LIMIT, state.status)
        status = jnp.where(bound, Status.AT_BOUND, status)
        status = jnp.where(collapsed, Status.COLLAPSED, status)
        finite = jnp.isfinite(norm) & jnp.isfinite(state.linear.misfit)
        broken = ~finite | (state.status == Status.NON_FINITE)
        return jnp.where(broken, Status.NON_FINITE, status).astype(jnp.int32)


def shoot(
    step: Callable,
    readout: Callable,
    params: PyTree,
    starts: Any,
    windows: Windows,
    values: Any,
    *,
    scale: Any,
    mask: Any = None,
    constraints: PyTree = None,
    own: PyTree = None,
    continuity: Continuity | None = None,
    prior: GaussianPrior | None = None,
    start_prior: GaussianPrior | None = None,
    tolerance: Any = None,
    damping: Any = 1e-3,
    max_steps: int = 100,
) -> ShootingResult:
    """Fit parameters and the start state of every window by damped Gauss-Newton.

        minimise  1/2 sum over observed of  ((readout(y) - values) / scale)^2  +  priors
        with      g_k = end of window k - start of window k + 1  small or zero

    over the free parameters and all `starts` at once. A single rollout from one start makes a poor
    start worse with every cycle; windows keep each piece close to its data while the gaps close.
    The linear problem of each step is solved window by window, in time linear in their number.
    `continuity` says what happens to the gaps: `HardContinuity` (default), `AugmentedContinuity`
    (both end with closed gaps, and then the windows leave no trace in the result) or
    `SoftContinuity` (a penalty: gaps remain).

    Good for: deterministic dynamics, or small noise with `SoftContinuity`. With strong dynamic
    noise this is not a likelihood of the dynamics. Windows must be short enough for the frequency
    error of the start (`longest_window`). In float32 gaps close to about 1e-5.

    Arguments:
        step: `step(params, h) -> advance`.
        readout: `readout(y, params) -> (channel,)`.
        params: PyTree of start values; supplies the values of `Fixed` ones too.
        starts: start state of each window, `(window, *state)`.
        windows: from `cut`.
        values: observed samples, `(time, channel)`; anything where `mask` is False.
        scale: standard deviation of the reading noise, `(channel,)`, channel units.
        mask: True where observed, `(time, channel)`; default: everywhere. A value that is not
            finite where observed ends as `Status.NON_FINITE`.
        constraints: tree of constraints; default: all free. Bounds are `Interval`.
        own: tree of bools in the structure of `params` for several recordings fitted together:
            True where each recording has its own value, the leaf then having a leading
            axis of recordings. `starts`, `values` and `mask` then have it too, and `windows` may.
        continuity: settings of one of the three kinds.
        prior: on the free parameters, see `GaussianPrior`.
        start_prior: on the starts.
        tolerance: a fit has converged when a step is shorter than this many standard errors, times
            `sqrt(1 + 2 loss)`; default `sqrt(eps)`, 1.5e-8 in float64.
        damping: first damping, relative to the curvature along each unknown.
        max_steps: greatest number of steps.

    Returns:
        A `ShootingResult`; its `status` tells how the fit ended, nothing raises under `jit`.

    Raises:
        ValueError: shapes that do not fit; a start outside its constraint (where known).
        TypeError: dtypes differ; `mask` is not boolean.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import shoot
        >>> from oscillib.integrate import cut, rk4
        >>> def spring(t, y, params):
        ...     return jnp.stack([y[1], -params["stiffness"] * y[0]])
        >>> times = jnp.linspace(0.0, 10.0, 101)
        >>> values = jnp.cos(2 * times)[:, None]
        >>> starts = jnp.stack([values[:-1:10, 0], jnp.zeros(10)], axis=1)  # velocities unknown
        >>> fit = shoot(
        ...     rk4(spring), lambda y, params: y[:1], {"stiffness": jnp.asarray(2.0)},
        ...     starts, cut(times, 10), values, scale=jnp.ones(1),
        ... )
        >>> print(fit.params["stiffness"].round(3), bool(jnp.abs(fit.gaps).max() < 1e-10))
        4.0 True

    Source: Bock 1983; van Domselaar & Hemker 1975; damping after Nielsen 1999 (from memory).
    """
    fit = Shooting(
        step,
        readout,
        params,
        starts,
        windows,
        values,
        scale=scale,
        mask=mask,
        constraints=constraints,
        own=own,
        continuity=continuity,
        prior=prior,
        start_prior=start_prior,
        tolerance=tolerance,
        damping=damping,
        max_steps=max_steps,
    )
    return _shoot(fit)


@eqx.filter_jit
def _shoot(fit: Shooting) -> ShootingResult:
    return fit.result(fit.run(fit.init()))


def _check(
    params: PyTree,
    starts: Array,
    windows: Windows,
    values: Array,
    mask: Array,
    scale: Any,
    single: bool,
) -> None:
    lead = () if single else (None,)
    words = "(" if single else "(recording, "
    check_floating("starts", starts)
    expected = (*starts.shape[: len(lead)], windows.count, *starts.shape[len(lead) + 1 :])
    check_shape("starts", starts, expected, words + "window, *state)")
    check_shape("values", values, (*lead, windows.num_samples, None), words + "time, channel)")
    check_shape("mask", mask, values.shape, "that of `values`")
    check_shape("scale", scale, values.shape[-1:], "(channel,)")
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    check_same_dtype("values", values, "starts", starts)
    check_same_dtype("scale", as_float(scale), "starts", starts)
    check_same_dtype("windows.t0", windows.t0, "starts", starts)
    for path, leaf in jax.tree_util.tree_leaves_with_path(params):
        check_same_dtype(f"params{jax.tree_util.keystr(path)}", leaf, "starts", starts)
    check_values("scale", as_float(scale), lambda x: x > 0, "positive")


def _check_readout(readout: Callable, unknowns: Unknowns, state: Array, values: Array) -> None:
    """Raise unless a readout fits the channels: a single number would be broadcast to all."""
    out = jax.eval_shape(lambda y: readout(y, unknowns.first()), state)
    if getattr(out, "shape", None) != values.shape[-1:] or out.dtype != values.dtype:
        got = f"{out.shape} {out.dtype}" if hasattr(out, "shape") else type(out).__name__
        raise ValueError(
            "`readout(y, params)` must return one value for each channel of `values`, "
            f"{values.shape[-1:]} {values.dtype}; got {got}."
        )
