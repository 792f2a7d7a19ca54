"""Windowed shooting: damped Gauss-Newton on all starts and parameters at once."""

from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float, Int

from ._block import (
    Border,
    border_covariance,
    eliminate,
    reduce_border,
    solve_border,
    substitute,
)
from ._shooting_residual import Linear, Moved, Residual
from ._shooting_verdict import Continuity, Move, Pull
from ._status import Status


class ShootingRecord(NamedTuple):
    """What each step did; entries past `steps` are NaN (False for `accepted`).

    Attributes:
        loss: half the sum of squared residuals and priors after the step.
        gap: largest gap after the step, in the unit that the continuity settings give gaps.
        decrement: length of the step in standard errors; its square is what is left to gain.
        damping: damping that the step was taken with.
        accepted: whether it was an improvement and kept.
    """

    loss: Float[Array, " step"]
    gap: Float[Array, " step"]
    decrement: Float[Array, " step"]
    damping: Float[Array, " step"]
    accepted: Bool[Array, " step"]


class ShootingState(NamedTuple):
    """State between two steps of the solver.

    Attributes:
        at: the best finite iterate.
        linear: the problem linearised there.
        pull: state of the continuity.
        damping: Levenberg-Marquardt damping, relative to the curvature along each unknown.
        growth: factor by which the next rejection raises it.
        status: code of `Status`.
        steps: steps taken.
        record: what they did.
    """

    at: Moved
    linear: Linear
    pull: Pull
    damping: Float[Array, ""]
    growth: Float[Array, ""]
    status: Int[Array, ""]
    steps: Int[Array, ""]
    record: ShootingRecord


class Solver(eqx.Module):
    """The pure functions `init` and `step`, and what they share."""

    residual: Residual
    continuity: Continuity
    tolerance: Float[Array, ""]
    damping: Float[Array, ""]
    max_steps: int = eqx.field(static=True)

    def init(self, at: Moved) -> ShootingState:
        """Linearise at the start; the status tells if that is not finite."""
        linear = self.residual.linearise(at)
        dtype = linear.misfit.dtype
        blank = jnp.full(self.max_steps, jnp.nan, dtype)
        gaps = self.whiten(linear.rows.gaps)
        fine = _finite((linear.rows, linear.misfit))
        return ShootingState(
            at=at,
            linear=linear,
            pull=self.continuity.begin(gaps, self.information(linear)),
            damping=self.damping.astype(dtype),
            growth=jnp.asarray(2, dtype),
            status=jnp.where(fine, Status.RUNNING, Status.NON_FINITE).astype(jnp.int32),
            steps=jnp.zeros((), jnp.int32),
            record=ShootingRecord(blank, blank, blank, blank, jnp.zeros(self.max_steps, bool)),
        )

    def step(self, state: ShootingState) -> ShootingState:
        """Take one step; a state that is not running any more comes back as it is."""
        new = self._step(state)
        running = state.status == Status.RUNNING
        return jax.tree.map(lambda a, b: jnp.where(running, a, b), new, state)

    def run(self, state: ShootingState, limit: int) -> ShootingState:
        """Step until the fit ends or `limit` steps are taken."""

        def going(s):
            return (s.status == Status.RUNNING) & (s.steps < limit)

        return lax.while_loop(going, lambda s: self._step(s), state)

    def whiten(self, gaps: Array) -> Array:
        """Multiply gaps by the factor of the continuity settings."""
        factor = self.continuity.factor(gaps.shape[-2], gaps.shape[-1], gaps.dtype)
        return jnp.einsum("jab,rjb->rja", factor, gaps)

    def information(self, linear: Linear) -> Array:
        """Return the usual curvature of the misfit along a start, per whitened unit."""
        n = linear.rows.gaps.shape[-1]
        curvature = jnp.sum(linear.rows.own[:, 1:, :, :n] ** 2, axis=2)
        if curvature.size == 0:
            return jnp.zeros((), curvature.dtype)
        factor = self.continuity.factor(curvature.shape[1], n, curvature.dtype)
        whitened = curvature / jnp.sum(factor**2, axis=1)[None]
        # The median: a few windows can be far more sensitive than the rest.
        return jnp.sort(whitened.ravel())[whitened.size // 2]

    def change(
        self, state: ShootingState, damping: Array, strength: Array, targets: Array
    ) -> tuple[Moved, Moved, Border]:
        """Solve the damped, linearised problem: the change, its scaling, the border's factor."""
        linear, rows = state.linear, state.linear.rows
        scaling = _scaling(self.residual.curvature(linear, state.at))
        drag = jax.tree.map(lambda d: jnp.sqrt(damping) * d, scaling)
        joints, n = rows.gaps.shape[1:]
        weights = strength * self.continuity.factor(joints, n, rows.gaps.dtype)
        sweep = jax.vmap(eliminate, in_axes=(0, None, 0, 0))(rows, weights, targets, drag.starts)
        own, shared = self.residual.prior_rows(state.at)

        def diagonal(d):
            return jnp.pad(jnp.diag(d), ((0, 0), (0, 1)))

        border = reduce_border(
            sweep.border,
            jnp.concatenate([own, jax.vmap(diagonal)(drag.own)], axis=1),
            jnp.concatenate([shared, diagonal(drag.shared)]),
        )
        own, shared = solve_border(border)
        both = jnp.concatenate([own, jnp.broadcast_to(shared, (own.shape[0], *shared.shape))], 1)
        return Moved(own, shared, jax.vmap(substitute)(sweep.pivots, both)), scaling, border

    def covariance(self, state: ShootingState) -> Float[Array, "recording p p"]:
        """Return the Gauss-Newton covariance of own and shared free values."""
        gaps = self.whiten(state.linear.rows.gaps)
        strength = self.continuity.hold(state.pull, self.information(state.linear))
        none = jnp.zeros((), gaps.dtype)
        border = self.change(state, none, strength, strength * gaps)[2]
        return border_covariance(border)

    def gradient(self, state: ShootingState) -> Moved:
        """Return the gradient of misfit and continuity, forces of a constraint included."""
        rows, gradient = state.linear.rows, self.residual.gradient(state.linear, state.at)
        joints, n = rows.gaps.shape[1:]
        factor = self.continuity.factor(joints, n, rows.gaps.dtype)
        force = state.pull.multiplier + state.pull.weight * self.whiten(rows.gaps)
        force = jnp.einsum("jba,rjb->rja", factor, force)
        slope = jnp.einsum("rjnx,rjn->rjx", rows.ends, force)
        before, after = ((0, 0), (1, 0), (0, 0)), ((0, 0), (0, 1), (0, 0))
        starts = gradient.starts + jnp.pad(slope[..., :n], after) - jnp.pad(force, before)
        border, po = jnp.sum(slope[..., n:], axis=1), gradient.own.shape[1]
        return Moved(
            gradient.own + border[:, :po],
            gradient.shared + jnp.sum(border[:, po:], axis=0),
            starts,
        )

    def _step(self, state: ShootingState) -> ShootingState:
        information = self.information(state.linear)
        gaps = self.whiten(state.linear.rows.gaps)
        strength = self.continuity.strength(state.pull, information)
        aim = self.continuity.aim(state.pull, state.damping)
        targets = strength * aim * gaps + state.pull.multiplier / strength
        change, scaling, _ = self.change(state, state.damping, strength, targets)
        at = jax.tree.map(jnp.add, state.at, change)
        linear = self.residual.linearise(at)
        new_gaps = self.whiten(linear.rows.gaps)

        fall, bend, linear_gaps = self._foresee(state, change)
        move = Move(
            misfit=(state.linear.misfit, linear.misfit),
            fall=fall,
            bend=bend,
            drag=state.damping * _square(jax.tree.map(jnp.multiply, scaling, change)),
            gaps=gaps,
            linear_gaps=linear_gaps,
            new_gaps=new_gaps,
        )
        verdict = self.continuity.judge(state.pull, move, information)
        fine = _finite((linear.rows, linear.misfit, change))
        accepted = fine & ((verdict.gain > 1e-3) | verdict.rounding)
        noise = 1 + 2 * linear.misfit
        # Under heavy damping a step is short however far the solution is.
        settled = (verdict.decrement <= 1e-4 * noise) & (state.damping <= 1e-2)
        after = self.continuity.after(state.pull, move, strength, aim, settled)
        at, linear, pull = jax.tree.map(
            lambda a, b: jnp.where(accepted, a, b),
            (at, linear, after),
            (state.at, state.linear, state.pull),
        )
        gain = jnp.where(verdict.rounding, 1, verdict.gain)
        damping, growth = _new_damping(state, accepted, gain)
        size = jnp.max(jnp.abs(jnp.where(accepted, new_gaps, gaps)), initial=0)
        small = verdict.decrement <= self.tolerance**2 * noise
        small &= accepted & (state.damping <= 1e-4)
        status = jnp.where(small & self.continuity.closed(pull, new_gaps), Status.CONVERGED, -1)
        eps = jnp.finfo(damping.dtype).eps
        ended = jnp.where(fine, Status.STALLED, Status.NON_FINITE)
        status = jnp.where(damping > eps**-0.75, ended, status).astype(jnp.int32)
        k = state.steps
        done = ShootingRecord(
            linear.misfit, size, jnp.sqrt(verdict.decrement), state.damping, accepted
        )
        # A comparison rather than a scatter, which takes the compiler seconds.
        here = jnp.arange(self.max_steps, dtype=k.dtype) == k
        record = jax.tree.map(lambda new, old: jnp.where(here, new, old), done, state.record)
        return ShootingState(at, linear, pull, damping, growth, status, k + 1, record)

    def _foresee(self, state: ShootingState, change: Moved) -> tuple[Array, Array, Array]:
        """Return fall of the misfit, squared change of residuals, gaps, all by linearisation."""
        rows = state.linear.rows
        own, shared, starts = change
        theta = jnp.concatenate([own, jnp.broadcast_to(shared, (own.shape[0], *shared.shape))], 1)
        theta = jnp.broadcast_to(theta[:, None], (*starts.shape[:2], theta.shape[-1]))
        x = jnp.concatenate([starts, theta], axis=-1)
        shift = jnp.einsum("rkmx,rkx->rkm", rows.own[..., :-1], x)
        half = rows.own[..., -1] + shift / 2
        fall, bend = -jnp.sum(shift * half), jnp.sum(shift**2)
        for block, part in zip(self.residual.prior_rows(state.at), (own, shared), strict=True):
            shift = jnp.einsum("...mx,...x->...m", block[..., :-1], part)
            fall -= jnp.sum(shift * (block[..., -1] + shift / 2))
            bend += jnp.sum(shift**2)
        gaps = rows.gaps + jnp.einsum("rjnx,rjx->rjn", rows.ends, x[:, :-1]) - starts[:, 1:]
        return fall, bend, self.whiten(gaps)


def _scaling(curvature: Moved) -> Moved:
    """Return the root of the curvature along each unknown, starts averaged over windows."""
    tiny = jnp.finfo(curvature.starts.dtype).eps
    starts = jnp.mean(curvature.starts, axis=1, keepdims=True)

    def root(square):
        # An unknown that nothing depends on must still be held by the damping.
        least = tiny * jnp.max(square, initial=0)
        return jnp.sqrt(jnp.where(square > least, square, jnp.where(least > 0, least, 1)))

    return Moved(
        root(curvature.own),
        root(curvature.shared),
        root(jnp.broadcast_to(starts, curvature.starts.shape)),
    )


def _new_damping(state: ShootingState, accepted: Array, gain: Array) -> tuple[Array, Array]:
    """Lower the damping by how good the model was; raise it ever faster after rejections."""
    damping, growth = state.damping, state.growth
    lower = damping * jnp.clip(1 - (2 * gain - 1) ** 3, 1 / 5, 2)
    least = jnp.finfo(damping.dtype).eps
    return (
        jnp.where(accepted, jnp.maximum(lower, least), damping * growth),
        jnp.where(accepted, 2, 2 * growth),
    )


def _square(tree: Any) -> Array:
    return jnp.sum(jnp.stack([jnp.sum(x**2) for x in jax.tree.leaves(tree)]))


def _finite(tree: Any) -> Array:
    # One reduction over everything: the compiler copies a long conjunction to wherever it is used.
    return jnp.all(jnp.isfinite(jnp.concatenate([x.ravel() for x in jax.tree.leaves(tree)])))
