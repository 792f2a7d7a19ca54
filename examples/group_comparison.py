"""Two groups of recordings compared: means, their difference, and a sentence that says it.

Each recording has a value with an error of its own, and recordings differ among themselves: an
interval must hold both.
"""

from typing import Any, NamedTuple

import numpy as np
import scipy.stats


LEVEL = 0.95  # of each of two differences: both hold together with at least 90 percent


class Mean(NamedTuple):
    """Mean of a group."""

    value: float
    error: float
    count: int
    spread: float  # standard deviation from recording to recording beyond their own errors


def group_mean(value: np.ndarray, variance: np.ndarray) -> Mean:
    """Average recordings that differ among themselves and are each uncertain (random effects).

    Source: DerSimonian and Laird 1986; the error of the mean from the spread actually seen, Hartung
    and Knapp 2001, here never below what the recordings' own errors give (both from memory).
    """
    n = len(value)
    if n < 2:
        return Mean(np.nan, np.nan, n, np.nan)
    weight = 1 / variance
    middle = np.sum(weight * value) / np.sum(weight)
    beyond = np.sum(weight * (value - middle) ** 2) - (n - 1)
    between = max(0.0, beyond / (np.sum(weight) - np.sum(weight**2) / np.sum(weight)))
    weight = 1 / (variance + between)
    middle = np.sum(weight * value) / np.sum(weight)
    seen = np.sum(weight * (value - middle) ** 2) / (n - 1)
    error = np.sqrt(max(1.0, seen) / np.sum(weight))
    return Mean(float(middle), float(error), n, float(np.sqrt(between)))


def interval(mean: Mean, level: float = LEVEL) -> tuple[float, float, float]:
    """Return value, lower and upper end, by Student's t of one less than the recordings."""
    half = float(scipy.stats.t.ppf((1 + level) / 2, max(mean.count - 1, 1))) * mean.error
    return mean.value, mean.value - half, mean.value + half


def compare(one: Mean, other: Mean, level: float = LEVEL) -> tuple[float, float, float]:
    """Return one mean less the other with its interval; their errors may differ.

    Source: Welch 1947 (from memory).
    """
    value = one.value - other.value
    parts = np.array([one.error, other.error]) ** 2
    if not np.isfinite(value):
        return np.nan, np.nan, np.nan
    degrees = np.sum(parts) ** 2 / np.sum(parts**2 / np.array([one.count - 1, other.count - 1]))
    half = float(scipy.stats.t.ppf((1 + level) / 2, float(degrees))) * float(np.sqrt(np.sum(parts)))
    return value, value - half, value + half


def change(ends: tuple[float, float, float]) -> str:
    """Name a difference by its interval: lowered, raised, none seen, or unknown."""
    _, lower, upper = ends
    if not np.isfinite(lower + upper):
        return "unknown"
    return "lowered" if upper < 0 else "raised" if lower > 0 else "none seen"


def words(coupling: Any, growth: Any, treated_growth: Any) -> str:
    """Answer in sentences, by three intervals alone: two differences, and growth where treated."""
    told = lambda ends: (
        f"{ends[0]:+.3f} per hour ({100 * LEVEL:.0f} % interval {ends[1]:+.3f} to {ends[2]:+.3f})"
    )
    kinds = change(coupling), change(growth)
    if "unknown" in kinds:
        return "Too few slices converged for an answer."
    parts = {
        "lowered": ("it uncoupled the regions", "it damped the cells"),
        "raised": ("it coupled the regions more strongly", "it strengthened the cells' own rhythm"),
        "none seen": ("no uncoupling is seen", "no damping is seen"),
    }
    first, second = parts[kinds[0]][0], parts[kinds[1]][1]
    if kinds[0] == "none seen" != kinds[1]:
        first, second = second, first
    state = {
        "lowered": "Treated cells are damped",
        "raised": "Treated cells oscillate by themselves",
        "none seen": "Whether treated cells oscillate by themselves stays open",
    }[change(treated_growth)]
    return (
        f"Treatment changed coupling by {told(coupling)} and growth by {told(growth)}: "
        f"{first}; {second}. {state}: their growth is {told(treated_growth)}."
    )
