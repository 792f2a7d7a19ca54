"""Many windowed fits in one compiled call: recordings times starts, chunk by chunk."""

from collections.abc import Callable, Sequence
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float, Int, PyTree

from .._validate import as_float, check_count, check_shape
from ..integrate import Windows
from ._shooting import GaussianPrior, Shooting, ShootingResult
from ._shooting_solver import ShootingState
from ._shooting_verdict import Continuity
from ._status import Status


class Agreement(NamedTuple):
    """Whether the starts of each recording found the same answer.

    Attributes:
        best: place in `ManyResult.fits` of the fit with the least objective among those that
            converged, or among the finite ones where none did.
        converged: number of kept starts that converged.
        agreeing: how many of them end within 1e-3 of the best objective, itself included; 0 where
            none converged.
        spread: largest distance of a converged fit's free parameters from the best one's, in its
            standard errors; 0 for a single one, NaN where none converged.
    """

    best: Int[Array, " recording"]
    converged: Int[Array, " recording"]
    agreeing: Int[Array, " recording"]
    spread: Float[Array, " recording"]


class ManyResult(NamedTuple):
    """What `shoot_many` returns.

    Attributes:
        fits: a `ShootingResult` whose arrays have leading axes `(recording, kept)`.
        start: which start each kept fit began from, `(recording, kept)`.
        agreement: of the kept fits of each recording.
    """

    fits: ShootingResult
    start: Int[Array, "recording kept"]
    agreement: Agreement


def shoot_many(
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
    continuity: Continuity | None = None,
    prior: GaussianPrior | None = None,
    tolerance: Any = None,
    damping: Any = 1e-3,
    max_steps: int = 100,
    halving: Sequence[int] = (),
    chunk: int | None = None,
    memory: float = 2e9,
) -> ManyResult:
    """Fit many recordings from many starts each, one by one independent, in one compiled call.

    Each fit is one of `shoot` with the same settings. A fit that fails or ends early leaves the
    others alone: they come out bit for bit as without it. With `halving=(8, 16)` each recording
    keeps the better half of its starts after 8 steps, and half of those after 16 (rounded up).

    Fits run in chunks, side by side within one; a chunk lasts as long as its slowest fit. Memory
    grows with the chunk, see `shoot_memory`.

    Arguments:
        step: `step(params, h) -> advance`.
        readout: `readout(y, params) -> (channel,)`.
        params: start values; every leaf has leading axes `(recording, start)`.
        starts: `(recording, start, window, *state)`.
        windows: from `cut`, the same for all recordings; or with a leading axis of recordings.
        values: `(recording, time, channel)`.
        scale: standard deviation of the reading noise, `(channel,)`.
        mask: True where observed, as `values`; default: everywhere.
        constraints: tree of constraints, in the structure of `params`; default: all free.
        continuity: as in `shoot`.
        prior: as in `shoot`, the same for all.
        tolerance: as in `shoot`.
        damping: as in `shoot`.
        max_steps: greatest number of steps of one fit.
        halving: step numbers, increasing, after which the worse half of the starts is dropped.
        chunk: fits side by side; default: as many as `memory` allows.
        memory: bytes that one chunk may take by `shoot_memory`; default 2e9. Not used if `chunk`
            is given.

    Returns:
        A `ManyResult`.

    Raises:
        ValueError: shapes that do not fit; `halving` does not increase or ends past `max_steps`.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import shoot_many
        >>> from oscillib.integrate import cut, rk4
        >>> times = jnp.linspace(0.0, 2.0, 11)
        >>> values = jnp.exp(-jnp.outer(jnp.array([1.0, 2.0]), times))[..., None]  # two recordings
        >>> rates = jnp.array([[0.5, 3.0], [0.5, 3.0]])  # two starts each
        >>> many = shoot_many(
        ...     rk4(lambda t, y, rate: -rate * y), lambda y, rate: y, rates,
        ...     jnp.ones((2, 2, 2, 1)), cut(times, 5), values, scale=jnp.ones(1),
        ... )
        >>> print(many.fits.params.round(2).tolist(), many.agreement.agreeing)
        [[1.0, 1.0], [2.0, 2.0]] [2 2]

    Source: dropping by halves is successive halving, Jamieson & Talwalkar 2016 (from memory).
    """
    params, starts, values = jax.tree.map(as_float, params), as_float(starts), as_float(values)
    mask = jnp.ones(values.shape, bool) if mask is None else jnp.asarray(mask)
    _check(params, starts, values, halving, check_count("max_steps", max_steps))
    settings = {
        "scale": scale, "constraints": constraints, "continuity": continuity, "prior": prior,
        "tolerance": tolerance, "damping": as_float(damping), "max_steps": max_steps,
    }  # fmt: skip
    problem = _Problem(step, readout, windows, values, mask, settings)
    if chunk is None:
        first = jax.tree.map(lambda x: x[0, 0], (params, starts))
        each = shoot_memory(problem.fit(0, *first))
        chunk = max(1, min(int(memory / each), starts.shape[0] * starts.shape[1]))
    return _run(problem, params, starts, tuple(halving), check_count("chunk", chunk))


def shoot_memory(fit: Shooting) -> int:
    """Estimate the memory that one fit takes while it runs, in bytes.

    Counts the Jacobian of states and channels with its copies, and two states of the solver; the
    working memory of the field itself is not known here. Times the chunk of `shoot_many`.

    Arguments:
        fit: the fit.

    Returns:
        Bytes.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import Shooting, shoot_memory
        >>> from oscillib.integrate import cut, rk4
        >>> fit = Shooting(
        ...     rk4(lambda t, y, params: -params * y), lambda y, params: y, jnp.asarray(1.0),
        ...     jnp.ones((4, 1)), cut(jnp.linspace(0.0, 2.0, 21), 5), jnp.ones((21, 1)),
        ...     scale=jnp.ones(1),
        ... )
        >>> shoot_memory(fit) < 20_000
        True
    """
    recordings, count, n = fit.at.starts.shape
    width = n + fit.at.own.shape[1] + fit.at.shared.shape[0] + 1
    sample = n + 3 * fit.values.shape[-1]
    jacobian = recordings * count * (fit.windows.length + 1) * sample * width
    state = jax.eval_shape(lambda: fit.init())
    held = sum(leaf.size * leaf.dtype.itemsize for leaf in jax.tree.leaves(state))
    return jacobian * fit.values.dtype.itemsize + 2 * held


class _Problem(eqx.Module):
    """What all fits share."""

    step: Callable
    readout: Callable
    windows: Windows
    values: Float[Array, "recording time channel"]
    mask: Any
    settings: dict[str, Any]

    def fit(self, recording: Any, params: PyTree, starts: Array) -> Shooting:
        """Return one fit, at its start."""
        windows = self.windows
        if windows.t0.ndim == 2:
            windows = jax.tree.map(lambda x: x[recording], windows)
        return Shooting(
            self.step,
            self.readout,
            params,
            starts,
            windows,
            self.values[recording],
            mask=self.mask[recording],
            **self.settings,
        )


@eqx.filter_jit
def _run(
    problem: _Problem, params: PyTree, starts: Array, halving: tuple[int, ...], chunk: int
) -> ManyResult:
    recordings, kept = starts.shape[:2]
    number = jnp.broadcast_to(jnp.arange(kept), (recordings, kept))
    owner = jnp.broadcast_to(jnp.arange(recordings)[:, None], (recordings, kept))
    begin = (owner, params, starts)
    state = _map(lambda b: problem.fit(*b).init(), begin, chunk)
    for limit in halving:

        def advance(args, limit=limit):
            b, s = args
            fit = problem.fit(*b)
            s = fit.run(s, limit)
            return s, fit.score(s)

        state, score = _map(advance, (begin, state), chunk)
        kept = -(-kept // 2)
        order = jnp.argsort(_comparable(score, state), axis=1)[:, :kept]
        begin, state, number = jax.tree.map(
            lambda x, order=order: jax.vmap(lambda a, i: a[i])(x, order), (begin, state, number)
        )

    def finish(args):
        b, s = args
        fit = problem.fit(*b)
        result = fit.result(fit.run(s))
        return result, fit.solver.residual.unknowns.pack(result.params, 1)[1]

    fits, free = _map(finish, (begin, state), chunk)
    return ManyResult(fits, number, jax.vmap(_agree)(fits, free))


def _map(f: Callable, xs: Any, chunk: int) -> Any:
    """Apply `f` over two leading axes, `chunk` at a time side by side."""
    lead = jax.tree.leaves(xs)[0].shape[:2]
    total = lead[0] * lead[1]
    groups = -(-total // chunk)

    def cut(x):
        x = x.reshape(total, *x.shape[2:])
        # The last chunk is filled up with copies of the last fit: every chunk runs one program.
        place = jnp.minimum(jnp.arange(groups * chunk), total - 1)
        return x[place].reshape(groups, chunk, *x.shape[1:])

    def join(y):
        return y.reshape(groups * chunk, *y.shape[2:])[:total].reshape(*lead, *y.shape[2:])

    return jax.tree.map(join, lax.map(jax.vmap(f), jax.tree.map(cut, xs)))


def _comparable(score: Array, state: ShootingState) -> Array:
    good = jnp.isfinite(score) & (state.status != Status.NON_FINITE)
    return jnp.where(good, score, jnp.inf)


def _agree(fits: ShootingResult, free: Array) -> Agreement:
    converged = fits.status == Status.CONVERGED
    finite = jnp.isfinite(fits.objective) & (fits.status != Status.NON_FINITE)
    objective = jnp.where(finite, fits.objective, jnp.inf)
    candidate = jnp.where(converged | ~jnp.any(converged), objective, jnp.inf)
    best = jnp.argmin(candidate)
    near = converged & (objective <= candidate[best] + 1e-3)
    error = jnp.sqrt(jnp.diagonal(fits.covariance[best]))
    distance = jnp.max(jnp.abs(free - free[best][None]) / error[None], axis=1, initial=0)
    spread = jnp.max(jnp.where(converged, distance, 0))
    return Agreement(
        best=best,
        converged=jnp.sum(converged),
        agreeing=jnp.sum(near),
        spread=jnp.where(jnp.any(converged), spread, jnp.nan),
    )


def _check(
    params: PyTree, starts: Array, values: Array, halving: Sequence[int], max_steps: int
) -> None:
    if starts.ndim < 3:
        raise ValueError(
            "`starts` must have shape (recording, start, window, *state); "
            f"got shape {starts.shape}."
        )
    lead = starts.shape[:2]
    check_shape("values", values, (lead[0], None, None), "(recording, time, channel)")
    for path, leaf in jax.tree_util.tree_leaves_with_path(params):
        name = f"params{jax.tree_util.keystr(path)}"
        check_shape(name, leaf, (*lead, *leaf.shape[2:]), "(recording, start, ...)")
    if list(halving) != sorted(set(halving)) or any(not 0 < h < max_steps for h in halving):
        raise ValueError(
            f"`halving` must hold increasing step numbers between 1 and `max_steps` - 1 = "
            f"{max_steps - 1}; got {tuple(halving)}."
        )
