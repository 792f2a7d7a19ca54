"""Profile likelihood: the interval of one entry, whatever the shape of the likelihood."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jaxtyping import Array, Bool, Float, Int

from .._validate import as_float, check_count, check_shape, check_values
from ..parameters import Free
from ._flat import (
    Leaf,
    check_entrywise,
    check_loss,
    from_flat,
    gather,
    layout,
    parameter_names,
    scatter,
    slopes,
    to_flat,
)
from ._information import observed_information
from ._laplace import normal_quantile
from ._refine import refine_init, refine_step, run
from ._status import Status
from ._weak import default_widths, weak_directions


# Half of it is how much loss a refit may still have to lose when its point counts.
_DECREMENT = 1e-2


class Profile(NamedTuple):
    """What `profile` found about one entry.

    Arguments:
        grid: values of the entry, `(point,)`, in the parameter's unit.
        loss: least loss with the entry held there, `(point,)`; infinite where never finite.
        status: codes of `Status` of these refits, `(point,)`.
        lower: lower end of the interval; minus infinity if open.
        upper: upper end; infinity if open.
        lower_open: the profile does not reach the cut below the optimum, on this grid.
        upper_open: the same above.
        beaten: a refit went below the loss at `params` by more than 0.01: they are no optimum.
    """

    grid: Float[Array, " point"]
    loss: Float[Array, " point"]
    status: Int[Array, " point"]
    lower: Float[Array, ""]
    upper: Float[Array, ""]
    lower_open: Bool[Array, ""]
    upper_open: Bool[Array, ""]
    beaten: Bool[Array, ""]


def profile(
    loss: Callable[[Any], Array],
    params: Any,
    constraints: Any,
    entry: str | int,
    *,
    grid: Any = None,
    points: int = 8,
    reach: float = 2.0,
    level: float = 0.9,
    max_steps: int = 30,
    tolerance: float | None = None,
) -> Profile:
    """Hold one entry at each value of a grid, refit all others, and cut where the loss is too high.

    With l(v) the least loss where the entry is v, and l_min the least of all,

        interval = {v: 2 (l(v) - l_min) <= q},    q the chi-square quantile of `level`, 1 degree

    The refits (`refine`) go outward from the optimum on both sides, each starting from the last.
    Between the two points around the cut, `sqrt(2 (l - l_min))` is interpolated linearly on the
    unconstrained scale, exact for a parabola. Unlike `laplace` it needs no parabola in the entry
    itself or in the others: only a long enough recording for the chi-square law, and an optimum
    away from bounds.

    A side is open if the cut is not reached on the grid, or only beyond a refit that failed or is
    more than 0.1 standard errors off: widen the grid if `loss` still rises at its end.

    Arguments:
        loss: negative log-likelihood, `loss(params) -> scalar`.
        params: best fit.
        constraints: tree of constraints, each acting entry by entry.
        entry: its name as in `parameter_names`, or its place in the flat unconstrained vector.
        grid: values of the entry, `(point,)`, increasing, in its unit. Default: `2 points + 1`
            values evenly spaced on the unconstrained scale to `reach` times the half width of the
            `laplace` interval on each side (or of one with a standard error of the default width
            of `weak_directions`, if it is refused).
        points: points a side of the default grid, default 8.
        reach: see `grid`; default 2.
        level: probability of the interval, default 0.9.
        max_steps: most steps a refit, default 30.
        tolerance: as for `refine`.

    Returns:
        A `Profile`. Works under `jit`, and is much quicker there.

    Raises:
        ValueError: no such entry, a grid that does not increase or leaves the constraint, `loss`
            is not a scalar, `level` is not within (0, 1), a constraint mixes entries.
        TypeError: what is fitted is not of one floating dtype, or a count is not an int.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import profile
        >>> from oscillib.parameters import Free
        >>> loss = lambda x: 2 * x[0] ** 2 + x[0] * x[1] + x[1] ** 2
        >>> found = jax.jit(lambda x: profile(loss, x, Free(), "params[0]"))(jnp.zeros(2))
        >>> print(f"{found.lower:.4f} {found.upper:.4f}", found.upper_open)
        -0.8792 0.8792 False

    Source: Venzon and Moolgavkar 1988, Appl. Statist. 37:87 (from memory).
    """
    if not 0 < level < 1:
        raise ValueError(f"`level` must lie strictly between 0 and 1; got {level}.")
    check_loss(loss, params)
    max_steps = check_count("max_steps", max_steps)
    params = jax.tree.map(jnp.asarray, params)
    leaves = layout(params, constraints)
    check_entrywise(leaves)
    index = _index(entry, parameter_names(params, constraints))
    x, to_params = to_flat(params, constraints), from_flat(params, constraints)
    if grid is None:
        offsets = np.linspace(-reach, reach, 2 * check_count("points", points) + 1)
        spread = _spread(loss, params, constraints, leaves)[index]
        half_width = normal_quantile(level, x.dtype) * spread
        at = x[index] + jnp.asarray(offsets, x.dtype) * half_width
    else:
        at = _flat_grid(grid, params, constraints, leaves, index)
    held = lambda y, v: loss(to_params(jnp.concatenate([y[:index], v[None], y[index:]])))
    others = jnp.delete(x, index, assume_unique_indices=True)
    order = jnp.stack([at[::-1], at])
    active = jnp.stack([at[::-1] < x[index], at >= x[index]])
    losses, decrements, statuses = _outward(held, others, order, active, max_steps, tolerance)

    usable = jnp.isfinite(losses) & (decrements < _DECREMENT)
    here = loss(params).astype(x.dtype)
    least = jnp.minimum(here, jnp.min(jnp.where(active & usable, losses, jnp.inf)))
    z = normal_quantile(level, x.dtype)
    cut = lambda k: _crossing(order[k], losses[k], usable[k], active[k], x[index], here, least, z)
    (low, low_open), (high, high_open) = cut(0), cut(1)
    value = lambda v: gather(leaves, to_params(x.at[index].set(v)))[index]
    ends = value(low), value(high)
    # A constraint of the user's own may be decreasing.
    falls = slopes(to_params, leaves, x)[index] < 0
    swap = lambda a, b: (jnp.where(falls, b, a), jnp.where(falls, a, b))
    (lower, upper), (lower_open, upper_open) = swap(*ends), swap(low_open, high_open)
    join = lambda both: jnp.where(active[1], both[1], both[0][::-1])
    return Profile(
        grid=jax.vmap(value)(at),
        loss=join(losses),
        status=join(statuses),
        lower=jnp.where(lower_open, -jnp.inf, lower),
        upper=jnp.where(upper_open, jnp.inf, upper),
        lower_open=lower_open,
        upper_open=upper_open,
        beaten=here - least > _DECREMENT,
    )


def _outward(
    held: Callable, others: Array, order: Array, active: Array, max_steps: int, tolerance: Any
) -> tuple[Array, Array, Array]:
    """Refit along both sides; rows of `order` go outward, and what is not active is skipped."""
    if others.shape[0] == 0:
        values = jax.vmap(jax.vmap(lambda v: held(others, v)))(order).astype(order.dtype)
        good = jnp.isfinite(values)
        status = jnp.where(good, Status.CONVERGED, Status.NON_FINITE).astype(jnp.int32)
        return jnp.where(good, values, jnp.inf), jnp.zeros_like(values), status

    def refit(y, point):
        v, wanted = point
        loss = lambda y: held(y, v)
        state = refine_init(loss, y, Free())
        status = jnp.where(wanted, Status.RUNNING, Status.CONVERGED).astype(jnp.int32)
        step = lambda s: refine_step(loss, s, Free(), tolerance=tolerance)
        state = run(step, state._replace(status=status), max_steps)
        return state.x, (state.loss, state.decrement, state.status)

    # One side after the other, so that the compiled program holds the refit once.
    return lax.map(lambda side: lax.scan(refit, others, side)[1], (order, active))


def _crossing(
    at: Array,
    losses: Array,
    usable: Array,
    active: Array,
    best: Array,
    here: Array,
    least: Array,
    z: Array,
) -> tuple[Array, Array]:
    """Return where the signed root of the loss passes z, going outward, and whether it does not."""
    root = lambda loss: jnp.sqrt(2 * jnp.maximum(loss - least, 0))
    # What lies on the other side of the optimum comes first: put it onto the optimum.
    at = jnp.concatenate([best[None], jnp.where(active, at, best)])
    start = root(here)
    roots = jnp.concatenate([start[None], jnp.where(active & usable, root(losses), start)])
    sound = jnp.cumprod(jnp.where(active, usable, True).astype(jnp.int32)).astype(bool)
    passed = (roots[1:] >= z) & active & sound & (start < z)
    k = jnp.argmax(passed)
    rise = roots[k + 1] - roots[k]
    part = (z - roots[k]) / jnp.where(rise > 0, rise, 1)
    return at[k] + part * (at[k + 1] - at[k]), ~jnp.any(passed)


def _spread(loss: Callable, params: Any, constraints: Any, leaves: list[Leaf]) -> Array:
    """Return standard errors on the unconstrained scale, or default widths where refused."""
    information = observed_information(loss, params, constraints)
    found = weak_directions(information, params, constraints)
    error = jnp.sqrt(jnp.diagonal(found.covariance))
    return jnp.where(
        found.refused, default_widths(leaves, params, jnp.diagonal(information)), error
    )


def _flat_grid(grid: Any, params: Any, constraints: Any, leaves: list[Leaf], index: int) -> Array:
    """Return a grid of values on the unconstrained scale."""
    values = gather(leaves, params)
    grid = as_float(grid).astype(values.dtype)
    check_shape("grid", grid, (None,), "(point,)")
    check_values("grid", grid[1:] - grid[:-1], lambda d: d > 0, "increasing")

    def to_free(v):
        moved = scatter(leaves, values.at[index].set(v), params, jax.tree.leaves(params))
        return to_flat(moved, constraints)[index]

    at = jax.vmap(to_free)(grid)
    check_values("grid", at, np.isfinite, "within the constraint of its entry")
    return jnp.sort(at)


def _index(entry: str | int, names: tuple[str, ...]) -> int:
    if isinstance(entry, str):
        if entry not in names:
            raise ValueError(f"`entry` must be one of {', '.join(names)}; got {entry!r}.")
        return names.index(entry)
    index = check_count("entry", entry, least=0)
    if index >= len(names):
        raise ValueError(f"`entry` must be below {len(names)}, the number of entries; got {entry}.")
    return index
