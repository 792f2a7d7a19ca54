"""Lyapunov exponents: how fast neighbouring trajectories part, in every direction."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Float

from .._validate import check_count, check_floating
from ..integrate._types import State, Step


class Lyapunov(NamedTuple):
    """What `lyapunov_spectrum` returns.

    Attributes:
        exponents: shape `(exponent,)`, per time unit, in the order of the directions: decreasing,
            up to the error of the estimate.
        running: the estimate after each block, `(block, exponent)`; look whether it has settled.
        times: elapsed time at the end of each block, `(block,)`, transient not counted.
        state: where the trajectory ended, `(*state)`, to go on from.
    """

    exponents: Float[Array, " exponent"]
    running: Float[Array, "block exponent"]
    times: Float[Array, " block"]
    state: Float[Array, "*state"]


def lyapunov_spectrum(
    step: Step,
    params: Any,
    y0: State,
    h: Float[Array, ""] | float,
    blocks: int,
    *,
    every: int = 10,
    transient: int = 0,
    exponents: int | None = None,
) -> Lyapunov:
    """Estimate Lyapunov exponents by following small disturbances along a trajectory.

        V <- D advance(y) V,   V = Q R,   exponent_i = mean of log R_ii / time

    Disturbances V are pushed through the step by forward mode, `every` steps at a time, and made
    orthonormal again by a QR decomposition. They start in fixed directions that favour no entry.

    The exponents are those of the step's map; the error of the step enters with its order. On a
    chaotic trajectory the estimate scatters like `1 / sqrt(time)`, otherwise the start is forgotten
    like `1 / time`: read the scatter from `running`. Directions must not shrink below rounding
    within a block: `every * h` times the spread of the exponents well below 36 (16 in float32).
    Derivatives exist but grow as the trajectory's sensitivity does: useless over long chaotic runs.

    Arguments:
        step: `step(params, h) -> advance`, as `rk4(field)` makes it.
        params: PyTree of parameters.
        y0: start, shape `(*state)`.
        h: step size, time units.
        blocks: number of blocks that count.
        every: steps a block; default 10.
        transient: blocks run before, to reach the attractor and turn the directions; default 0.
        exponents: how many, largest first; default all, the size of the state.

    Returns:
        Exponents, running estimates, their times and the last state.

    Raises:
        ValueError: a count is below 1, or more exponents are asked for than the state has entries.
        TypeError: a count is not an int; `y0` is not floating.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import lyapunov_spectrum
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import rk4
        >>> p = HopfParams([0.5], [6.0])
        >>> y0 = jnp.array([[0.7], [0.0]])
        >>> print(lyapunov_spectrum(rk4(HopfNetwork()), p, y0, 0.01, 400, transient=400)
        ...       .exponents.round(4) + 0)
        [ 0. -1.]

    Source: Benettin, Galgani, Giorgilli & Strelcyn 1980; Shimada & Nagashima 1979 (from memory).
    """
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    dtype, size = y0.dtype, y0.size
    blocks, every = check_count("blocks", blocks), check_count("every", every)
    transient = check_count("transient", transient, least=0)
    count = size if exponents is None else check_count("exponents", exponents)
    if count > size:
        raise ValueError(
            f"`exponents` must be at most the {size} entries of the state; got {count}."
        )
    h = jnp.asarray(h, dtype)
    advance = step(params, h)

    def push(carry, k):
        y, directions = carry
        along = lambda v: jax.jvp(lambda y: advance(h * k.astype(dtype), y), (y,), (v,))
        return jax.vmap(along, out_axes=(None, 0))(directions), None

    def block(carry, k):
        (y, directions), _ = lax.scan(push, carry, k * every + jnp.arange(every))
        q, r = jnp.linalg.qr(directions.reshape(count, size).T)
        return (y, q.T.reshape(directions.shape)), jnp.log(jnp.abs(jnp.diagonal(r)))

    start = y0, _generic_directions(size, count, dtype).reshape(count, *y0.shape)
    turned, _ = lax.scan(block, start, jnp.arange(transient))
    (state, _), logs = lax.scan(block, turned, transient + jnp.arange(blocks))
    times = every * h * (1 + jnp.arange(blocks)).astype(dtype)
    running = jnp.cumsum(logs, axis=0) / times[:, None]
    return Lyapunov(running[-1], running, times, state)


def kaplan_yorke(exponents: Float[Array, " exponent"]) -> Float[Array, ""]:
    """Return the dimension of an attractor that its Lyapunov exponents suggest.

        D = j + (l_1 + ... + l_j) / |l_(j+1)|,  j the last with a sum not below 0

    Zero exponents that come out as small negative numbers matter where the sum before is 0: on a
    limit cycle D is 1 up to the ratio of that error to the next exponent.

    Arguments:
        exponents: `l`, shape `(exponent,)`, per time unit, decreasing; all that are needed for the
            sum to become negative.

    Returns:
        A scalar without unit: 0 where even the first exponent is negative; the number of exponents
        where their sum is not negative, which means that more are needed.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import kaplan_yorke
        >>> print(kaplan_yorke(jnp.array([0.5, 0.0, -2.0])))
        2.25

    Source: Kaplan & Yorke 1979 (from memory).
    """
    sums = jnp.cumsum(exponents)
    whole = jnp.sum(jnp.cumprod((sums >= 0).astype(jnp.int32)))
    padded = jnp.concatenate([jnp.zeros_like(sums[:1]), sums])
    inside = whole < exponents.shape[0]
    following = jnp.where(inside, exponents[jnp.minimum(whole, exponents.shape[0] - 1)], -1)
    part = jnp.where(inside, padded[whole] / -following, 0)
    return whole.astype(exponents.dtype) + part


def _generic_directions(size: int, count: int, dtype) -> Array:
    """Return orthonormal rows, none along an entry: units that are not coupled are all seen."""
    k = jnp.arange(1, size + 1).astype(dtype)
    golden = (5**0.5 - 1) / 2
    spread = jnp.sin(golden * jnp.outer(k, k) ** 1.5)
    return jnp.linalg.qr(spread)[0].T[:count]
