"""Three ways to make windows join: a penalty, an augmented Lagrangian, a hard constraint."""

from typing import Any

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_values
from ._shooting_verdict import Continuity, Pull, Verdict, judge_sum


class SoftContinuity(Continuity):
    """Gaps are penalised: `weight / 2 sum g^2`, or by a scale or precision, as in `continuity`.

    The gaps do not close: they stay at the size where the penalty balances the data, which is
    right where noise drives the dynamics (scale: the spread that it adds over one window) and
    biased where it does not. A schedule begins with loose windows and tightens them stage by stage.

    Arguments:
        weight: a scalar, in inverse squared state units.
        scale: size of an ordinary gap in each component, shape `(*state)`, state units.
        precision: inverse covariance of a gap on the flattened state, `(size, size)` or one for
            each joint, `(joint, size, size)`; positive definite. Give exactly one of the three.
        schedule: factors on the penalty, one for each stage, shape `(stage,)`; default one stage
            with factor 1. A stage ends when a step is below a hundredth of a standard error.

    Raises:
        ValueError: none or several of `weight`, `scale` and `precision` are given; a known value
            of weight, scale or schedule is not positive.

    Example:
        >>> from oscillib.fitting import SoftContinuity
        >>> SoftContinuity(weight=100.0, schedule=[0.01, 0.1, 1.0]).schedule
        Array([0.01, 0.1 , 1.  ], dtype=float64)

    Source: common practice, no source.
    """

    weight: Float[Array, ""] | None
    scale: Float[Array, "*state"] | None
    precision: Float[Array, "*joint size size"] | None
    schedule: Float[Array, " stage"]

    def __init__(self, *, weight=None, scale=None, precision=None, schedule=(1.0,)):
        """Convert and check."""
        given = {"weight": weight, "scale": scale, "precision": precision}
        chosen = [name for name, value in given.items() if value is not None]
        if len(chosen) != 1:
            raise ValueError(
                "give exactly one of `weight`, `scale` and `precision`; "
                f"got {' and '.join(chosen) or 'none'}."
            )
        self.weight = None if weight is None else as_float(weight)
        self.scale = None if scale is None else as_float(scale)
        self.precision = None if precision is None else as_float(precision)
        self.schedule = as_float(schedule)
        for name in ("weight", "scale", "schedule"):
            if getattr(self, name) is not None:
                check_values(name, getattr(self, name), lambda x: x > 0, "positive")

    def factor(self, joints, n, dtype):
        """Return the transposed Cholesky factor of the precision."""
        if self.precision is not None:
            root = jnp.swapaxes(jnp.linalg.cholesky(self.precision.astype(dtype)), -1, -2)
        elif self.scale is not None:
            root = jnp.diag(1 / self.scale.astype(dtype).ravel())
        else:
            root = jnp.sqrt(self.weight.astype(dtype)) * jnp.eye(n, dtype=dtype)
        return jnp.broadcast_to(root, (joints, n, n))

    def begin(self, gaps, information):
        """Begin with the first factor of the schedule."""
        return Pull(
            weight=self.schedule[0].astype(gaps.dtype),
            multiplier=jnp.zeros_like(gaps),
            stage=jnp.zeros((), jnp.int32),
            bound=jnp.zeros((), gaps.dtype),
        )

    def strength(self, pull, information):
        """Return the square root of the weight."""
        return jnp.sqrt(pull.weight)

    def hold(self, pull, information):
        """Return the strength there is: gaps stay open."""
        return self.strength(pull, information)

    def aim(self, pull, damping):
        """Aim at the whole gap: the penalty says how much of it to close."""
        return jnp.ones_like(damping)

    def judge(self, pull, move, information):
        """Judge by misfit plus penalty."""
        return judge_sum(self, pull, move)

    def after(self, pull, move, strength, aim, settled):
        """Go on to the next stage once this one is done."""
        last = self.schedule.shape[0] - 1
        stage = pull.stage + (settled & (pull.stage < last)).astype(jnp.int32)
        return pull._replace(stage=stage, weight=self.schedule[stage].astype(pull.weight.dtype))

    def closed(self, pull, gaps):
        """Tell whether the last stage is reached."""
        return pull.stage == self.schedule.shape[0] - 1

    def yardstick(self, gaps, information):
        """Return the penalty of the last stage."""
        return self.schedule[-1].astype(gaps.dtype) / 2 * jnp.sum(gaps**2)


class AugmentedContinuity(Continuity):
    """Gaps are closed by forces: penalty and multipliers, which grow until the gaps vanish.

        misfit + sum (force . g) + weight / 2 sum g^2

    After each inner solution the forces take over what the penalty did, and the weight grows where
    gaps shrink by less than a factor of 4. Slower than the hard constraint, and the sturdier of the
    two where the start is poor: windows begin loose.

    Arguments:
        scale: unit of a gap in each component, shape `(*state)`; default ones.
        strength: first weight, relative to what the data say about the starts; default 1e-4.
        growth: factor on the weight; default 10.
        gap_tolerance: largest gap that counts as closed, in units of `scale`; default
            `eps^0.7`, 1e-11 in float64.

    Example:
        >>> from oscillib.fitting import AugmentedContinuity
        >>> AugmentedContinuity().growth
        Array(10., dtype=float64)

    Source: Hestenes 1969, Powell 1969; Nocedal & Wright 2006, chapter 17 (from memory).
    """

    scale: Float[Array, "*state"] | None
    first: Float[Array, ""]
    growth: Float[Array, ""]
    gap_tolerance: Float[Array, ""] | None

    def __init__(self, *, scale=None, strength=1e-4, growth=10.0, gap_tolerance=None):
        """Convert and check."""
        self.scale = None if scale is None else as_float(scale)
        self.first, self.growth = as_float(strength), as_float(growth)
        self.gap_tolerance = None if gap_tolerance is None else as_float(gap_tolerance)
        check_values("strength", self.first, lambda x: x > 0, "positive")
        check_values("growth", self.growth, lambda x: x > 1, "above 1")

    def factor(self, joints, n, dtype):
        """Return one over the scale."""
        return _scaled(self.scale, joints, n, dtype)

    def begin(self, gaps, information):
        """Begin without forces."""
        return _loose(self.first, gaps, information)

    def strength(self, pull, information):
        """Return the square root of the weight."""
        return jnp.sqrt(pull.weight)

    def aim(self, pull, damping):
        """Aim at the whole gap: penalty and forces say how much of it to close."""
        return jnp.ones_like(damping)

    def judge(self, pull, move, information):
        """Judge by the augmented Lagrangian."""
        return judge_sum(self, pull, move)

    def after(self, pull, move, strength, aim, settled):
        """Update the forces, and the weight if need be, once the inner problem is solved."""
        gaps = move.new_gaps
        size = jnp.max(jnp.abs(gaps), initial=0)
        on = settled & ~self.closed(pull, gaps)
        grow = on & (size > pull.bound / 4)
        growth = self.growth.astype(gaps.dtype)
        return Pull(
            weight=jnp.where(grow, pull.weight * growth, pull.weight),
            multiplier=jnp.where(on, pull.multiplier + pull.weight * gaps, pull.multiplier),
            stage=pull.stage + on.astype(jnp.int32),
            bound=jnp.where(on, size, pull.bound),
        )

    def closed(self, pull, gaps):
        """Tell whether every gap is within the tolerance."""
        return jnp.max(jnp.abs(gaps), initial=0) <= _tolerance(self.gap_tolerance, gaps.dtype)

    def yardstick(self, gaps, information):
        """Return the squared gaps in units of what the data can tell about the starts."""
        return information / 2 * jnp.sum(gaps**2)


class HardContinuity(Continuity):
    """Gaps are constraints: every step meets the linearised continuity and fits the data best.

    The generalised Gauss-Newton method of Bock: the least squares of the linearised residuals
    subject to `g + dg = 0`, the starts condensed out window by window. Condensing runs through
    orthogonal steps in which data and continuity of both neighbours take part, and not by the
    forward recursion from the first start alone, whose columns grow as `e^(rate time)`: with
    dynamics as unstable as that it has no digit left. A step of damping `d` aims at the fraction
    `1 / (1 + d)` of each gap; it is accepted by the fall of the misfit as long as gaps stay below
    a bound, or by the fall of the gaps, which lowers the bound.

    Far from the solution a linearised gap says little, so a loose stage comes first: gaps are
    penalised lightly until a step is below a hundredth of a standard error.

    Arguments:
        scale: unit of a gap in each component, shape `(*state)`; default ones.
        strength: weight of the loose stage, relative to what the data say about the starts;
            default 1e-4.
        gap_tolerance: largest gap that counts as closed, in units of `scale`; default
            `eps^0.7`, 1e-11 in float64.

    Example:
        >>> from oscillib.fitting import HardContinuity
        >>> HardContinuity(gap_tolerance=1e-9).gap_tolerance
        Array(1.e-09, dtype=float64)

    Source: Bock 1983; acceptance after Gould & Toint 2010 (both from memory).
    """

    scale: Float[Array, "*state"] | None
    first: Float[Array, ""]
    gap_tolerance: Float[Array, ""] | None

    def __init__(self, *, scale=None, strength=1e-4, gap_tolerance=None):
        """Convert and check."""
        self.scale = None if scale is None else as_float(scale)
        self.first = as_float(strength)
        self.gap_tolerance = None if gap_tolerance is None else as_float(gap_tolerance)
        check_values("strength", self.first, lambda x: x > 0, "positive")

    def factor(self, joints, n, dtype):
        """Return one over the scale."""
        return _scaled(self.scale, joints, n, dtype)

    def begin(self, gaps, information):
        """Begin loose."""
        return _loose(self.first, gaps, information)

    def strength(self, pull, information):
        """Return that of closed gaps; multipliers make up for its not being infinite."""
        return jnp.where(pull.stage == 0, jnp.sqrt(pull.weight), self.hold(pull, information))

    def aim(self, pull, damping):
        """Aim at less of each gap the shorter a step is to be."""
        return jnp.where(pull.stage == 0, 1, 1 / (1 + damping))

    def judge(self, pull, move, information):
        """Judge by the misfit if the step promises to lower it, otherwise by the gaps."""
        before, linear, new = (
            jnp.sum(g**2) / 2 for g in (move.gaps, move.linear_gaps, move.new_gaps)
        )
        by_misfit = (move.fall >= 1e-4 * information * before) & (new <= pull.bound)
        promised = jnp.where(by_misfit, move.fall, before - linear)
        actual = jnp.where(by_misfit, move.misfit[0] - move.misfit[1], before - new)
        rounding = move.fall <= 32 * jnp.finfo(before.dtype).eps * move.misfit[0]
        rounding &= information * jnp.maximum(new, before) <= 1e-4
        hard = Verdict(actual / promised, rounding, move.bend + move.drag)
        loose = judge_sum(self, pull, move)
        return jax.tree.map(lambda a, b: jnp.where(pull.stage == 0, a, b), loose, hard)

    def after(self, pull, move, strength, aim, settled):
        """Take over the multipliers; lower the bound after a step judged by the gaps."""
        force = strength**2 * (move.linear_gaps - (1 - aim) * move.gaps)
        before, new = jnp.sum(move.gaps**2) / 2, jnp.sum(move.new_gaps**2) / 2
        lower = jnp.minimum(pull.bound, jnp.maximum(pull.bound / 2, (before + new) / 2))
        loose = pull.stage == 0
        on = loose & settled
        return Pull(
            weight=jnp.where(on, 0, pull.weight),
            multiplier=pull.multiplier
            + jnp.where(loose, jnp.where(on, pull.weight, 0) * move.new_gaps, force),
            stage=pull.stage + on.astype(jnp.int32),
            bound=jnp.where(on, 2 * new, jnp.where(new < before, lower, pull.bound)),
        )

    def closed(self, pull, gaps):
        """Tell whether every gap is within the tolerance, by way of the constraint."""
        small = jnp.max(jnp.abs(gaps), initial=0) <= _tolerance(self.gap_tolerance, gaps.dtype)
        return small & (pull.stage > 0)

    def yardstick(self, gaps, information):
        """Return the squared gaps in units of what the data can tell about the starts."""
        return information / 2 * jnp.sum(gaps**2)


def _loose(first: Array, gaps: Array, information: Array) -> Pull:
    return Pull(
        weight=first.astype(gaps.dtype) * jnp.where(information > 0, information, 1),
        multiplier=jnp.zeros_like(gaps),
        stage=jnp.zeros((), jnp.int32),
        bound=jnp.full((), jnp.inf, gaps.dtype),
    )


def _scaled(scale: Array | None, joints: int, n: int, dtype: Any) -> Array:
    inverse = jnp.ones(n, dtype) if scale is None else 1 / scale.astype(dtype).ravel()
    return jnp.broadcast_to(jnp.diag(inverse), (joints, n, n))


def _tolerance(given: Array | None, dtype: Any) -> Array:
    return jnp.asarray(jnp.finfo(dtype).eps ** 0.7 if given is None else given, dtype)
