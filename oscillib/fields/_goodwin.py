"""The Goodwin oscillator: three steps and a negative feedback."""

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jaxtyping import Array, Float

from .._validate import as_float, check_shape
from ..parameters import Constraint, Positive
from ._arrays import check_state, matching


class GoodwinParams(eqx.Module):
    """Parameters of Goodwin units.

    Arguments:
        production: `k`, shape `(3, node)`, or `(3,)` for a single unit, per time unit: how fast
            each step is made; only the product of the three and the units of the state matter.
        degradation: `d`, same shape, per time unit.
        hill: `n`, shape `(node,)` or `()`: steepness of the feedback.

    Raises:
        ValueError: shapes other than these.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import GoodwinParams
        >>> GoodwinParams(production=jnp.full((3, 2), 1.0), degradation=jnp.full((3, 2), 0.1),
        ...               hill=[10.0, 12.0]).hill
        Array([10., 12.], dtype=float64)
    """

    production: Float[Array, "3 *node"]
    degradation: Float[Array, "3 *node"]
    hill: Float[Array, "*node"]

    def __init__(self, production, degradation, hill):
        """Convert every array and check that they fit."""
        self.hill = as_float(hill)
        full = jnp.zeros((3, *self.hill.shape), self.hill.dtype)
        self.production = matching("production", production, 1.0, ("hill", full))
        self.degradation = matching("degradation", degradation, 1.0, ("hill", full))

    def constraints(self) -> "GoodwinParams":
        """Return the usual constraints: all positive.

        Example:
            >>> from oscillib.fields import GoodwinParams
            >>> GoodwinParams([1.0, 1.0, 1.0], [0.1, 0.1, 0.1], 10.0).constraints().hill
            Positive()
        """
        leaves: list[Constraint] = [Positive(), Positive(), Positive()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def goodwin(
    t: Array | float, y: Float[Array, "3 *node"], params: GoodwinParams
) -> Float[Array, "3 *node"]:
    """Vector field of a Goodwin unit, or of several that are not coupled: a clock gene's loop.

        dx/dt = k_1 / (1 + z^n) - d_1 x,    dy/dt = k_2 x - d_2 y,    dz/dt = k_3 y - d_3 z

    The last product `z` is counted in units of the amount that halves the production of the first;
    `k, d, n` are `production, degradation, hill`. A negative `z`, which only a step that is too
    long produces, counts as 0 in the feedback.

    Known facts. One fixed point (`goodwin_rest`). With three equal degradations it loses stability
    where `goodwin_loop_gain` reaches 8, with angular frequency `sqrt(3) d`; the loop gain is below
    `n`, so no unit with `n <= 8` oscillates. Unequal degradations need a larger gain still.

    Arguments:
        t: not used.
        y: state `(x, y, z)`, shape `(3, node)`, or `(3,)` for a single unit; not negative.
        params: production, degradation, hill.

    Returns:
        `dy/dt`, shape of `y`.

    Raises:
        ValueError: the state does not fit the parameters.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import GoodwinParams, goodwin
        >>> params = GoodwinParams([2.0, 1.0, 1.0], [0.1, 0.1, 0.1], 10.0)
        >>> print(goodwin(0.0, jnp.array([0.0, 0.0, 1.0]), params))
        [ 1.   0.  -0.1]

    Source: Goodwin 1965; Griffith 1968; Tyson & Othmer 1978 (from memory).
    """
    del t
    check_state(y, 3, ("hill", params.hill))
    k, d = params.production, params.degradation
    made = jnp.stack([k[0] * _feedback(y[2], params.hill), k[1] * y[0], k[2] * y[1]])
    return made - d * y


def _feedback(z: Array, hill: Array) -> Array:
    """Return `1 / (1 + z^n)` with finite derivatives at and below 0 and for large `z`."""
    # Below this z^n cannot be seen beside 1, but 1 / z in its derivative would overflow.
    least = float(np.sqrt(np.finfo(z.dtype).tiny))
    positive = z > least
    return jnp.where(positive, jax.nn.sigmoid(-hill * jnp.log(jnp.where(positive, z, 1))), 1)


def goodwin_rest(params: GoodwinParams) -> Float[Array, "3 *node"]:
    """Return the fixed point of Goodwin units.

        z (1 + z^n) = k_1 k_2 k_3 / (d_1 d_2 d_3),    y = d_3 z / k_3,    x = d_2 y / k_2

    Solved by Newton's method in `log z`, where the equation is convex and increasing, so that it
    converges from the start used whatever the parameters.

    Arguments:
        params: production, degradation, hill.

    Returns:
        State, shape `(3, node)` or `(3,)`.

    Example:
        >>> from oscillib.fields import GoodwinParams, goodwin_rest
        >>> params = GoodwinParams([2.0, 1.0, 1.0], [1.0, 1.0, 1.0], 10.0)
        >>> print(goodwin_rest(params))
        [1. 1. 1.]

    Source: Griffith 1968 (from memory); the iteration: common practice, no source.
    """
    k, d, n = params.production, params.degradation, params.hill
    check_shape("production", k, d.shape, "(3, node)")
    total = jnp.sum(jnp.log(k) - jnp.log(d), axis=0)

    def newton(_, u):
        error = u + jax.nn.softplus(n * u) - total
        return u - error / (1 + n * jax.nn.sigmoid(n * u))

    z = jnp.exp(lax.fori_loop(0, 40, newton, total))
    y = d[2] * z / k[2]
    return jnp.stack([d[1] * y / k[1], y, z])


def goodwin_loop_gain(params: GoodwinParams) -> Float[Array, "*node"]:
    """Return how strongly the loop answers at its fixed point; above 8 it can oscillate.

        G = n z^n / (1 + z^n)

    With three equal degradations the fixed point is unstable exactly where `G > sec(pi/3)^3 = 8`;
    with unequal ones a larger `G` is needed.

    Arguments:
        params: production, degradation, hill.

    Returns:
        Shape of the hill exponent; no unit; always below the exponent.

    Example:
        >>> from oscillib.fields import GoodwinParams, goodwin_loop_gain
        >>> print(goodwin_loop_gain(GoodwinParams([2.0, 1.0, 1.0], [1.0, 1.0, 1.0], 10.0)))
        5.0

    Source: secant condition, Tyson & Othmer 1978 (from memory).
    """
    z = goodwin_rest(params)[2]
    return params.hill * (1 - _feedback(z, params.hill))
