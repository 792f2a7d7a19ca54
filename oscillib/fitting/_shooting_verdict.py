"""What every setting of continuity answers to: how a step is weighed, judged and followed up."""

from abc import abstractmethod
from typing import Any, NamedTuple

import equinox as eqx
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float, Int


class Move(NamedTuple):
    """What one step of the solver did, in the terms that the settings of continuity judge by.

    Gaps are whitened: multiplied by the settings' factor.

    Attributes:
        misfit: before and after the step.
        fall: fall of the misfit that the linearised residuals promise.
        bend: squared change of the linearised residuals.
        drag: what the damping takes, `damping * |D change|^2`.
        gaps: before the step.
        linear_gaps: after it, by linearisation.
        new_gaps: after it.
    """

    misfit: tuple[Array, Array]
    fall: Array
    bend: Array
    drag: Array
    gaps: Array
    linear_gaps: Array
    new_gaps: Array


class Pull(NamedTuple):
    """State of the continuity: how strongly, and with which multipliers, windows are joined.

    Attributes:
        weight: multiplies the squared whitened gaps.
        multiplier: force on each whitened gap.
        stage: number of the stage of the schedule, or of multiplier updates.
        bound: the largest squared gap that a step may leave; the size of the gaps at the last
            update of the multipliers.
    """

    weight: Float[Array, ""]
    multiplier: Float[Array, "recording joint n"]
    stage: Int[Array, ""]
    bound: Float[Array, ""]


class Verdict(NamedTuple):
    """How good a step was.

    Attributes:
        gain: actual over promised improvement.
        rounding: whether the promise is below what rounding lets one measure.
        decrement: squared length of the step in standard errors.
    """

    gain: Float[Array, ""]
    rounding: Bool[Array, ""]
    decrement: Float[Array, ""]


class Continuity(eqx.Module):
    """Settings of how the gaps between windows are treated; one of the three classes below."""

    @abstractmethod
    def factor(self, joints: int, n: int, dtype: Any) -> Float[Array, "joint n n"]:
        """Return what whitens the gaps."""

    @abstractmethod
    def begin(self, gaps: Array, information: Array) -> Pull:
        """Return the state before the first step.

        Here and below gaps are whitened, and `information` is the greatest curvature of the misfit
        along a start, in the same units.
        """

    @abstractmethod
    def strength(self, pull: Pull, information: Array) -> Array:
        """Return what whitened continuity rows are multiplied by."""

    def hold(self, pull: Pull, information: Array) -> Array:
        """Return the strength once the fit is done, for the covariance: that of closed gaps.

        Beside it the data vanish, and yet it leaves them their digits.
        """
        eps = jnp.finfo(information.dtype).eps
        # Without any data about the starts there is nothing to be compared with.
        return eps**-0.4 * jnp.sqrt(jnp.where(information > 0, information, 1))

    @abstractmethod
    def aim(self, pull: Pull, damping: Array) -> Array:
        """Return the fraction of each gap that a step is to close."""

    @abstractmethod
    def judge(self, pull: Pull, move: Move, information: Array) -> Verdict:
        """Compare what a step promised and what it brought."""

    @abstractmethod
    def after(self, pull: Pull, move: Move, strength: Array, aim: Array, settled: Array) -> Pull:
        """Return the state after a step that was accepted; `settled`: the stage is done."""

    @abstractmethod
    def closed(self, pull: Pull, gaps: Array) -> Array:
        """Tell whether the gaps are as small as asked for, and no stage is left."""

    def cost(self, pull: Pull, gaps: Array) -> Array:
        """Return what continuity adds to the misfit."""
        return pull.weight / 2 * jnp.sum(gaps**2) + jnp.sum(pull.multiplier * gaps)

    @abstractmethod
    def yardstick(self, gaps: Array, information: Array) -> Array:
        """Return a cost of the gaps that does not depend on the stage a fit is in."""


def judge_sum(continuity: Continuity, pull: Pull, move: Move) -> Verdict:
    """Judge by the fall of misfit plus the cost of the gaps."""
    before, after = continuity.cost(pull, move.gaps), continuity.cost(pull, move.new_gaps)
    # From the normal equations: sums of squares, so that nothing cancels near the solution.
    bend = move.bend + pull.weight * jnp.sum((move.linear_gaps - move.gaps) ** 2)
    promised = bend / 2 + move.drag
    actual = (move.misfit[0] - move.misfit[1]) + (before - after)
    size = move.misfit[0] + jnp.abs(before)
    rounding = promised <= 32 * jnp.finfo(size.dtype).eps * size
    return Verdict(actual / promised, rounding, bend + move.drag)
