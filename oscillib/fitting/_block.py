"""Least squares over windows: eliminates the start states window by window, by orthogonal steps.

The linearised residuals of windowed shooting touch one start each, the gaps touch two neighbours,
and all touch the shared parameters: a block bidiagonal matrix with a border. Its QR factor is
built here in one sweep, at a cost linear in the number of windows. Forming normal equations (block
tridiagonal, with the same border) would be a little cheaper but squares the condition number, and
the heavy continuity rows of a hard constraint would then cost half of the digits.
"""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jax import lax
from jax.scipy.linalg import solve_triangular
from jaxtyping import Array, Float


class Rows(NamedTuple):
    """Linearised residuals of the windows of one recording.

    With `x = (change of the start, change of the parameters)`, `n` entries of a state and `p`
    parameters.

    Attributes:
        own: residuals of each window as `own[:, :-1] @ x + own[:, -1]`; upper triangular,
            at least `n` rows.
        ends: derivative of each window's end by `x`, for all windows but the last.
        gaps: end of a window minus start of the next.
    """

    own: Float[Array, "window row column"]
    ends: Float[Array, "joint n width"]
    gaps: Float[Array, "joint n"]


class Sweep(NamedTuple):
    """What `eliminate` returns.

    Attributes:
        pivots: rows that give each start from the next one and the parameters, with columns
            `(start, next start, parameters, constant)`.
        border: rows left for the parameters alone, with columns `(parameters, constant)`.
    """

    pivots: Float[Array, "window n width"]
    border: Float[Array, "row column"]


def triangle(matrix: Float[Array, "row column"], least: int = 0) -> Float[Array, "kept column"]:
    """Return the R factor of a QR, with zero rows added where there are fewer than `least`."""
    factor = jnp.linalg.qr(matrix, mode="r")
    missing = max(least - factor.shape[0], 0)
    return jnp.pad(factor, ((0, missing), (0, 0)))


def eliminate(
    rows: Rows,
    weights: Float[Array, "joint n n"],
    targets: Float[Array, "joint n"],
    damping: Float[Array, "window n"],
) -> Sweep:
    """Eliminate the starts from `|own|^2 + sum |weights (ends x - next) + targets|^2 + damping`.

    Arguments:
        rows: linearised residuals.
        weights: what the continuity rows are multiplied by.
        targets: constants of the continuity rows, already weighted.
        damping: one row for each entry of each start, `damping * change`.
    """
    n = rows.gaps.shape[-1]
    p = rows.own.shape[-1] - n - 1

    def widened(block):  # columns (start, parameters, constant) -> with the next start between
        zeros = jnp.zeros((*block.shape[:-1], n), block.dtype)
        return jnp.concatenate([block[..., :n], zeros, block[..., n:]], axis=-1)

    # Heavy rows come first: Householder steps then keep the light ones to full precision. What
    # does not depend on the sweep is laid out before it; a step of the sweep should do little.
    eye = jnp.broadcast_to(jnp.eye(n, dtype=weights.dtype), weights.shape)
    continuity = weights @ jnp.concatenate([rows.ends[..., :n], -eye, rows.ends[..., n:]], axis=-1)
    continuity = jnp.concatenate([continuity, targets[..., None]], axis=-1)
    drag = jax.vmap(jnp.diag)(damping)
    drag = jnp.concatenate([drag, jnp.zeros((*drag.shape[:2], p + 1), drag.dtype)], axis=-1)
    light = widened(jnp.concatenate([rows.own[:, :n], drag], axis=1))
    fixed = jnp.concatenate([continuity, light[:-1]], axis=1)

    def body(carried, block):
        factor = triangle(jnp.concatenate([block, carried]), 2 * n)
        return widened(factor[n : 2 * n, n:]), factor  # the next start becomes the start

    carried = jnp.zeros((n, 2 * n + p + 1), rows.own.dtype)
    carried, factors = lax.scan(body, carried, fixed)
    # Their columns of the next start are zero, so that it makes no difference there is none.
    last = triangle(jnp.concatenate([light[-1], carried]), 2 * n)
    pivots = jnp.concatenate([factors[:, :n], last[None, :n]])
    left = (factors[:, 2 * n :], rows.own[:, n:, n:], last[None, n:])
    flat = [block[..., -p - 1 :].reshape(-1, p + 1) for block in left]
    return Sweep(pivots, jnp.concatenate(flat))


def substitute(
    pivots: Float[Array, "window n width"], parameters: Float[Array, " p"]
) -> Float[Array, "window n"]:
    """Return the change of every start, given that of the parameters."""
    n = pivots.shape[1]
    constant = pivots[..., 2 * n : -1] @ parameters + pivots[..., -1]
    right = jnp.concatenate([pivots[..., n : 2 * n], constant[..., None]], axis=-1)
    solved = -jax.vmap(solve_triangular)(pivots[..., :n], right)

    def body(following, block):
        slope, offset = block
        start = jnp.sum(slope * following[None], axis=1) + offset
        return start, start

    zero = jnp.zeros(n, pivots.dtype)
    return lax.scan(body, zero, (solved[..., :n], solved[..., n]), reverse=True)[1]


class Border(NamedTuple):
    """The triangular factor of what the parameters of all recordings still have to meet.

    Attributes:
        own: rows for each recording's own parameters, columns `(own, shared, constant)`.
        shared: rows for the shared ones, columns `(shared, constant)`.
    """

    own: Float[Array, "recording po width"]
    shared: Float[Array, "ps column"]


def reduce_border(
    border: Float[Array, "recording row column"],
    own: Float[Array, "recording extra po_column"],
    shared: Float[Array, "more ps_column"],
) -> Border:
    """Reduce the rows of all recordings to triangular form.

    Arguments:
        border: from `eliminate`, columns `(own, shared, constant)`.
        own: more rows on each recording's own parameters (priors, damping), `(own, constant)`.
        shared: more rows on the shared ones, `(shared, constant)`.
    """
    po, ps = own.shape[-1] - 1, shared.shape[-1] - 1
    wide = jnp.concatenate(
        [own[..., :po], jnp.zeros((*own.shape[:-1], ps), own.dtype), own[..., po:]], axis=-1
    )
    factor = jax.vmap(lambda a: triangle(a, po))(jnp.concatenate([border, wide], axis=1))
    below = factor[:, po:, po:].reshape(-1, ps + 1)
    return Border(factor[:, :po], triangle(jnp.concatenate([below, shared]), ps)[:ps])


def solve_border(border: Border) -> tuple[Array, Array]:
    """Return the change of each recording's own parameters, and that of the shared ones."""
    po, ps = border.own.shape[1], border.shared.shape[0]
    shared = -_solve(border.shared[:, :ps], border.shared[:, ps])
    right = border.own[..., po:-1] @ shared + border.own[..., -1]
    return -jax.vmap(_solve)(border.own[..., :po], right), shared


def border_covariance(border: Border) -> Float[Array, "recording p p"]:
    """Return `(J'J)^-1` for each recording's own and the shared parameters, in this order."""
    po, ps = border.own.shape[1], border.shared.shape[0]
    root = _solve(border.shared[:, :ps], jnp.eye(ps, dtype=border.shared.dtype))

    def one(rows):
        local = _solve(rows[:, :po], jnp.eye(po, dtype=rows.dtype))
        through = -local @ rows[:, po:-1] @ root
        # own = local e + through s, shared = root s, with independent unit e and s
        left = jnp.concatenate([local, jnp.zeros((ps, po), rows.dtype)])
        right = jnp.concatenate([through, root])
        return left @ left.T + right @ right.T

    return jax.vmap(one)(border.own)


def _solve(upper: Any, right: Any) -> Array:
    if upper.shape[0] == 0:  # nothing to solve for; the triangular solver refuses empty arrays
        return jnp.zeros_like(right)
    return solve_triangular(upper, right)
