"""Directions in which the data say next to nothing, and what is known in spite of them."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_shape
from ..parameters import Interval, Positive
from ._flat import (
    Leaf,
    check_entrywise,
    from_flat,
    gather,
    layout,
    parameter_names,
    slopes,
    to_flat,
)


# Parameters named in a sentence.
_LISTED = 6


class Directions(NamedTuple):
    """What `weak_directions` found; all on the unconstrained scale, weakest direction first.

    Arguments:
        information: eigenvalues, `(direction,)`, of the scaled information.
        vectors: the directions in rows, `(direction, free)`: one unit of a direction moves the
            flat unconstrained vector by its row, and costs half its eigenvalue of log-likelihood.
        weak: directions that are too poorly known, `(direction,)`.
        unresolved: those among them whose eigenvalue is no more than error, `(direction,)`.
        negative: those along which the loss curves down: not a minimum, `(direction,)`.
        refused: entries that a weak direction moves, `(free,)`: no interval can be given.
        covariance: inverse of the information without the directions that it cannot resolve,
            `(free, free)`; right wherever neither entry is refused.
    """

    information: Float[Array, " direction"]
    vectors: Float[Array, "direction free"]
    weak: Bool[Array, " direction"]
    unresolved: Bool[Array, " direction"]
    negative: Bool[Array, " direction"]
    refused: Bool[Array, " free"]
    covariance: Float[Array, "free free"]


def weak_directions(
    information: Float[Array, "free free"],
    params: Any,
    constraints: Any,
    *,
    gradient: Any = None,
    widths: Any = None,
    limit: float = 10.0,
) -> Directions:
    """Find the directions that an information matrix leaves open, and the entries they spoil.

    With A = `information`, W = `widths` and 1 / S_i^2 = the larger of A_ii and 1 / (limit W_i)^2,

        S A S = sum_k v_k vec_k vec_k',    direction k: S vec_k in the unconstrained vector

    so that eigenvalues are the same in any unit: S_i is entry i's standard error, all others known,
    and `1 / sqrt(v_k)` is by how much the uncertainty about the others widens it. A direction is

    * unresolved if `|v_k| <= 100 free eps + max_j (|d_j| / W_j) sum_i |g_i d_i|`, with d = S vec_k
      and g the gradient: rounding noise, and what the choice of coordinates adds to a Hessian
      where the gradient has not quite vanished; negative if below minus that;
    * weak if it is either, or if one standard error along it moves some entry by more than
      `limit` of its widths, `|S_i vec_ik| / sqrt(v_k) > limit W_i`.

    An entry is refused if one standard error along a resolved direction moves it that far, or if
    an unresolved or negative direction moves it at all: `|vec_ik| > eps^(1/4)` (1e-4 in float64,
    0.02 in float32). Everything else keeps its covariance: what is unresolved has no part in it.

    Arguments:
        information: `(free, free)`, on the unconstrained scale in the order of `parameter_names`:
            Hessian, `fisher_gaussian`, `outer_product_information`, ... Not finite: all refused.
        params: PyTree of parameters at which it was taken.
        constraints: tree of constraints, each acting entry by entry.
        gradient: of the loss at `params` on the unconstrained scale, `(free,)`; default zero.
        widths: how far each entry may plausibly be off on the unconstrained scale (a standard
            deviation of its prior), `(free,)`. Default: 1 for `Positive` and `Interval`, which is
            a factor e of the value or of its odds; for others the largest magnitude in the array,
            or `A_ii^(-1/2)` if that is larger (an array of zeros has no scale of its own).
        limit: widths from which on a standard error is no knowledge, default 10.

    Returns:
        A `Directions`; `describe_directions` tells it in words.

    Raises:
        ValueError: shapes do not fit, or a constraint mixes entries.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import weak_directions
        >>> from oscillib.parameters import Positive
        >>> params = {"gain": jnp.asarray(2.0), "noise": jnp.ones(1), "rate": jnp.ones(())}
        >>> constraints = {"gain": Positive(), "noise": Positive(), "rate": Positive()}
        >>> information = jnp.array([[50.0, 50.0, 0.0], [50.0, 50.0, 0.0], [0.0, 0.0, 25.0]])
        >>> found = weak_directions(information, params, constraints)
        >>> print(found.refused, found.covariance[2, 2].round(6))
        [ True  True False] 0.04

    Source: common practice, no source.
    """
    leaves = layout(params, constraints)
    check_entrywise(leaves)
    n = sum(leaf.size for leaf in leaves)
    check_shape("information", information, (n, n), "(free, free)")
    # Without any knowledge every direction is unresolved, which is what this amounts to.
    information = jnp.where(jnp.all(jnp.isfinite(information)), information, 0)
    eps = jnp.finfo(information.dtype).eps
    diagonal = jnp.diagonal(information)
    widths = default_widths(leaves, params, diagonal) if widths is None else as_float(widths)
    check_shape("widths", widths, (n,), "(free,)")
    gradient = jnp.zeros_like(diagonal) if gradient is None else as_float(gradient)
    check_shape("gradient", gradient, (n,), "(free,)")
    scale = 1 / jnp.sqrt(jnp.maximum(diagonal, (limit * widths) ** -2.0))
    values, columns = jnp.linalg.eigh(information * scale[:, None] * scale[None, :])
    columns = columns.T
    vectors = columns * scale[None, :]
    # A path that bends within a width picks up this much curvature from the gradient.
    bend = jnp.max(jnp.abs(vectors) / widths[None, :], axis=1)
    doubt = 100 * n * eps + bend * (jnp.abs(vectors) @ jnp.abs(gradient))
    resolved, negative = values > doubt, values < -doubt
    error = 1 / jnp.sqrt(jnp.where(resolved, values, 1))
    far = jnp.abs(vectors) * error[:, None] > limit * widths[None, :]
    spoils = jnp.where(resolved[:, None], far, jnp.abs(columns) > eps**0.25)
    known = jnp.where(resolved, error, 0)[:, None] * vectors
    return Directions(
        information=values,
        vectors=vectors,
        weak=~resolved | jnp.any(far, axis=1),
        unresolved=~(resolved | negative),
        negative=negative,
        refused=jnp.any(spoils, axis=0),
        covariance=known.T @ known,
    )


def default_widths(leaves: list[Leaf], params: Any, diagonal: Array) -> Array:
    """Return a width for every entry: see `weak_directions`."""
    alone = 1 / jnp.sqrt(jnp.where(diagonal > 0, diagonal, 1))
    values = gather(leaves, params)
    out, start = [], 0
    for leaf in leaves:
        own = slice(start, start + leaf.size)
        start += leaf.size
        if isinstance(leaf.constraint, Positive | Interval):
            out.append(jnp.ones_like(alone[own]))
        elif leaf.size:
            out.append(jnp.maximum(jnp.max(jnp.abs(values[own])), alone[own]))
    return jnp.concatenate(out)


def describe_directions(directions: Directions, params: Any, constraints: Any) -> tuple[str, ...]:
    """Tell every weak direction in words. Host-side.

    Arguments:
        directions: from `weak_directions`, for one recording.
        params: the parameters given there.
        constraints: the constraints given there.

    Returns:
        A sentence for each weak direction: which parameters trade off, and how little the
        log-likelihood changes (by its curvature) if they are moved together so that the one that
        moves most moves by 1 percent. At most six parameters are listed.

    Raises:
        ValueError: the trees disagree.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import describe_directions, weak_directions
        >>> from oscillib.parameters import Positive
        >>> params = {"gain": jnp.asarray(2.0), "noise": jnp.ones(1)}
        >>> constraints = {"gain": Positive(), "noise": Positive()}
        >>> found = weak_directions(jnp.full((2, 2), 50.0), params, constraints)
        >>> print(*describe_directions(found, params, constraints))
        `gain` and `noise[0]` trade off: raising `gain` by 1 percent and lowering `noise[0]` by \
1 percent changes the log-likelihood by less than 2.3e-16.

    Source: common practice, no source.
    """
    names = parameter_names(params, constraints)
    leaves = layout(params, constraints)

    def of_entries(params):
        x = to_flat(params, constraints)
        return gather(leaves, params), slopes(from_flat(params, constraints), leaves, x)

    # One small program is built faster than its operations one by one.
    values, slope = (np.asarray(v) for v in jax.jit(of_entries)(params))
    eps = np.finfo(values.dtype).eps
    sentences = []
    for value, vector, negative in zip(*_tidy(directions), strict=True):
        # Relative changes, or absolute ones of what is zero.
        change = slope * vector / np.where(values == 0, 1, np.abs(values))
        size = np.abs(change)
        lead, listed = size.argmax(), np.flatnonzero(size > eps**0.25 * size.max())
        unit = 0.01 / change[lead]
        order = listed[np.argsort(-size[listed], kind="stable")]
        moves = [_move(names[i], change[i] * unit, bool(values[i] == 0)) for i in order[:_LISTED]]
        cost = max(abs(value), 100 * len(names) * eps) * unit**2 / 2
        sentences.append(_sentence([names[i] for i in order], moves, cost, negative))
    return tuple(sentences)


def _tidy(directions: Directions) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return values, vectors and signs of the weak directions, each moving as few as may be.

    Directions without any information are only known up to mixtures of each other: elimination
    with pivots takes apart what has nothing to do with each other.
    """
    weak = np.asarray(directions.weak)
    rows = np.array(directions.vectors)[weak]
    empty = np.flatnonzero(np.asarray(directions.unresolved)[weak])
    for k in empty:
        pivot = np.abs(rows[k]).argmax()
        for other in empty[empty != k]:
            rows[other] -= rows[k] * rows[other, pivot] / rows[k, pivot]
    return np.asarray(directions.information)[weak], rows, np.asarray(directions.negative)[weak]


def _move(name: str, change: Any, absolute: bool) -> str:
    verb = "raising" if change > 0 else "lowering"
    amount = f"{abs(change):.2g}" if absolute else f"{100 * abs(change):.2g} percent"
    return f"{verb} `{name}` by {amount}"


def _sentence(names: list[str], moves: list[str], cost: Any, negative: Any) -> str:
    quoted = [f"`{name}`" for name in names[:_LISTED]]
    if len(names) > _LISTED:
        quoted.append(f"{len(names) - _LISTED} more")
    listed = _join(quoted)
    together = _join(moves) + (" (and so on)" if len(names) > _LISTED else "")
    if negative:
        return (
            f"{listed}: not at a minimum: {together} raises the log-likelihood by about "
            f"{cost:.2g}. Refine the fit first."
        )
    what = "trade off" if len(names) > 1 else "is hardly informed"
    return f"{listed} {what}: {together} changes the log-likelihood by less than {1.05 * cost:.2g}."


def _join(words: list[str]) -> str:
    return " and ".join([", ".join(words[:-1]), words[-1]] if len(words) > 1 else words)
