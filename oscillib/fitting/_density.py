"""A log-density on one unconstrained vector, for any sampler."""

from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from ..parameters import Free, Interval, OffDiagonal, Positive
from ._flat import Leaf, check_loss, from_flat, layout, slopes, to_flat


class Density(NamedTuple):
    """What `log_density` returns.

    Arguments:
        log_prob: `log_prob(x) -> scalar`, of the flat unconstrained vector `(free,)`.
        unravel: `unravel(x) -> params`, back to constrained parameters.
        start: the template's flat vector, `(free,)`.
    """

    log_prob: Callable[[Array], Array]
    unravel: Callable[[Array], Any]
    start: Float[Array, " free"]


def log_density(
    loss: Callable[[Any], Array],
    constraints: Any,
    params: Any,
    *,
    prior: Callable[[Any], Array] | None = None,
    jacobian: bool = True,
) -> Density:
    """Build the log of a posterior density on one flat unconstrained vector x.

        log p(x) = -loss(value(x)) + prior(value(x)) + log |d value / d x|

    up to a constant. The last term makes samples of x, mapped back, have the density that `prior`
    states about the values themselves: whatever the constraint, the answer is the same.

    Arguments:
        loss: negative log-likelihood, `loss(params) -> scalar`.
        constraints: tree of constraints.
        params: template: supplies shapes, the values of what is fixed, and `start`.
        prior: `prior(params) -> scalar`, log density in the parameters' own units; default `None`:
            uniform in them, which the likelihood must make proper (a positive parameter about
            whose size nothing is known has no posterior then).
        jacobian: default True. False leaves the last term out, for a prior stated on the
            unconstrained scale (uniform there, if `prior` is `None`).

    Returns:
        A `Density`. `log_prob` is pure and works under `jit`, `vmap` and `grad`. It is minus
        infinity wherever it would not be a finite number, so that a sampler turns away.

    Raises:
        ValueError: `loss` is not a scalar, nothing is free, the trees disagree, or a constraint
            has no Jacobian determinant because its array and its free array differ in size.
        TypeError: what is fitted is not of one floating dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import log_density
        >>> from oscillib.parameters import Positive
        >>> density = log_density(lambda rate: rate - 2 * jnp.log(rate), Positive(), jnp.ones(()))
        >>> print(f"{density.log_prob(jnp.log(jnp.array([3.0]))):.6f}", density.start)
        0.295837 [0.]

    Source: common practice, no source.
    """
    check_loss(loss, params)
    params = jax.tree.map(jnp.asarray, params)
    leaves = layout(params, constraints)
    unravel = from_flat(params, constraints)
    if jacobian:
        _check_square(leaves)

    def log_prob(x):
        values = unravel(x)
        total = -loss(values).astype(x.dtype)
        if prior is not None:
            total = total + prior(values).astype(x.dtype)
        if jacobian:
            total = total + _log_jacobian(leaves, unravel, x)
        return jnp.where(jnp.isfinite(total), total, -jnp.inf)

    return Density(log_prob, unravel, to_flat(params, constraints))


def _log_jacobian(leaves: list[Leaf], to_params: Callable, x: Array) -> Array:
    """Return the log of the size of the Jacobian determinant, array by array."""
    total, start = jnp.zeros((), x.dtype), 0
    for k, leaf in enumerate(leaves):
        own = slice(start, start + leaf.size)
        start += leaf.size
        part = x[own]
        if leaf.size == 0 or isinstance(leaf.constraint, Free | OffDiagonal):
            continue
        if isinstance(leaf.constraint, Positive):
            total = total + jnp.sum(part)
        elif isinstance(leaf.constraint, Interval):
            # The derivative of the sigmoid would round to zero long before its logarithm does.
            both = jax.nn.log_sigmoid(part) + jax.nn.log_sigmoid(-part)
            width = leaf.constraint.upper - leaf.constraint.lower
            total = total + jnp.sum(both) + leaf.size * float(np.log(width))
        elif leaf.places is not None:
            total = total + jnp.sum(jnp.log(jnp.abs(slopes(to_params, leaves, x)[own])))
        else:
            total = total + _log_determinant(k, own, to_params, x)
    return total


def _log_determinant(k: int, own: slice, to_params: Callable, x: Array) -> Array:
    """Return the log-determinant of the `k`th array's Jacobian with respect to its own part."""

    def array(part):
        return jax.tree.leaves(to_params(x.at[own].set(part)))[k].reshape(-1)

    return jnp.linalg.slogdet(jax.jacfwd(array)(x[own]))[1]


def _check_square(leaves: list[Leaf]) -> None:
    for leaf in leaves:
        size = int(np.prod(leaf.shape))
        if leaf.places is None and leaf.size != size:
            raise ValueError(
                f"the constraint of `{leaf.name}` must map as many entries as the array has, "
                f"{size}, to have a Jacobian determinant; got {leaf.size}. Fix: state the prior on "
                "the unconstrained scale and pass `jacobian=False`."
            )
