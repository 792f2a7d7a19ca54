"""A guard around a first-order optimiser: what is not finite never reaches the parameters."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float, Int

from .._validate import check_count


# Updates that a return to the good parameters may take; the first all but always does.
_RETURNS = 8


class GuardState(NamedTuple):
    """State of an optimiser under `guarded`.

    Attributes:
        inner: state of the optimiser.
        good_params: last good parameters; before the first good step those given to `init`.
        good_inner: state of the optimiser when it saw them.
        bad_steps: bad steps so far.
        consecutive: bad steps since the last good one.
        rollbacks: rollbacks so far.
        factor: what updates are multiplied by; 1 unless a rollback has just happened.
        returning: updates that a rollback may still take to arrive; 0 if none is under way.
    """

    inner: Any
    good_params: Any
    good_inner: Any
    bad_steps: Int[Array, ""]
    consecutive: Int[Array, ""]
    rollbacks: Int[Array, ""]
    factor: Float[Array, ""]
    returning: Int[Array, ""]


def guarded(optimiser: Any, *, patience: int = 3, backtrack: float = 0.5) -> Any:
    """Wrap an optax optimiser so that nothing non-finite ever reaches the parameters.

    A step is good if the gradient, the loss (where it is given as `value`), the optimiser's update,
    the parameters moved by it and the optimiser's new state are all finite. Otherwise

    * the update is zero, and the optimiser's state stays as it was;
    * after `patience` bad steps in a row, and again after as many more, the parameters go back to
      the last good ones, those of the last good step before it was taken, and the optimiser's state
      to the one that saw them;
    * the next updates are multiplied by `backtrack`, once more for every rollback that follows, so
      that a loss that is the same at every call does not lead to the same bad place again. From
      the second good step in a row on, the factor grows back to 1 as it fell.

    It never gives up: however long the gradient stays non-finite, no such update passes. As long
    as every step is good, it changes no update by a single bit (compiled together with it, the
    optimiser's own arithmetic may round otherwise).

    A rollback is an update too, `good - params`, so that any loop works with `optax.apply_updates`.
    Adding it rounds if the two differ by more than a factor of 2; then further updates of this kind
    follow (at most 7, mostly one) until the parameters equal the good ones bit for bit. Their
    gradients are passed over and count as neither good nor bad.

    Put the guard outermost, clipping inside it: one NaN in a gradient makes its global norm NaN,
    and clipping by that turns all entries NaN. Works under `jit`, `scan` and `vmap`, where every
    lane is guarded by itself. What is checked is real or complex; other arrays pass by. Memory: one
    more copy of the parameters and of the optimiser's state.

    Arguments:
        optimiser: optax transformation, such as `optax.adam(1e-2)` or a chain.
        patience: bad steps in a row that lead to a rollback, default 3.
        backtrack: factor on updates after a rollback, above 0 and at most 1; default 0.5; 1 leaves
            them as they are.

    Returns:
        An `optax.GradientTransformationExtraArgs`, its state a `GuardState`. Its
        `update(gradient, state, params, *, value=None, ...)` needs `params`; give it `value`, the
        loss at `params`, since a loss may be infinite where its gradient is finite. All
        further keyword arguments, and `value` if it is given, go on to the optimiser.

    Raises:
        TypeError: `patience` is not an int.
        ValueError: `patience` is below 1, `backtrack` is out of range; on update, `params` is
            missing.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> import optax
        >>> from oscillib.fitting import guarded
        >>> optimiser = guarded(optax.sgd(0.5), patience=2)
        >>> params = jnp.asarray(1.0)
        >>> state = optimiser.init(params)
        >>> for _ in range(4):  # the first step leads to -0.375, where log is NaN
        ...     value, slope = jax.value_and_grad(lambda x: 3 * x - jnp.log(x) / 4)(params)
        ...     change, state = optimiser.update(slope, state, params, value=value)
        ...     params = optax.apply_updates(params, change)
        >>> print(params, state.bad_steps, state.rollbacks)  # half of that first step
        0.3125 2 1

    Source: common practice, no source.
    """
    import optax

    patience = check_count("patience", patience)
    if not 0 < backtrack <= 1:
        raise ValueError(f"`backtrack` must be above 0 and at most 1; got {backtrack}.")
    inner = optax.with_extra_args_support(optimiser)

    def init(params):
        memory = inner.init(params)
        none = jnp.zeros((), jnp.int32)
        # Copies, so that buffers given away to a compiled step are not given away twice.
        kept, kept_memory = jax.tree.map(jnp.array, (params, memory))
        one = jnp.ones((), jnp.float32)
        return GuardState(memory, kept, kept_memory, none, none, none, one, none)

    def update(updates, state, params=None, *, value=None, **extra):
        if params is None:
            raise ValueError(
                "`params` must be given to `update`, so that the last good ones can be kept. "
                "Fix: `optimiser.update(gradient, state, params)`."
            )
        more = extra if value is None else {"value": value, **extra}
        proposed, memory = inner.update(updates, state.inner, params, **more)
        proposed = jax.tree.map(lambda u: _scaled(u, state.factor), proposed)
        moved = jax.tree.map(lambda p, u: p + u, params, proposed)
        good = (
            _finite(updates)
            & _finite(value)
            & _finite(proposed)
            & _still_finite(params, moved)
            & _still_finite(state.inner, memory)
        )
        arrived = _equal(params, state.good_params)
        returning = (state.returning > 0) & ~arrived
        good, bad = good & ~returning, ~good & ~returning
        consecutive = jnp.where(good, 0, state.consecutive + bad.astype(jnp.int32))
        rollback = bad & (consecutive % patience == 0)
        # A good step from where a rollback has just led to has not got past the bad place yet.
        risen = good & ~(arrived & (state.consecutive > 0))
        factor = jnp.where(risen, jnp.minimum(state.factor / backtrack, 1), state.factor)
        # It cannot have led there if the parameters never left, and must not end as zero.
        smaller = jnp.maximum(factor * backtrack, jnp.finfo(factor.dtype).tiny)
        back = jax.tree.map(_way_back, params, state.good_params, proposed)
        still = jax.tree.map(jnp.zeros_like, proposed)
        out = _select(good, proposed, _select(rollback | returning, back, still))
        return out, GuardState(
            inner=_select(good, memory, _select(rollback, state.good_inner, state.inner)),
            good_params=_select(good, params, state.good_params),
            good_inner=_select(good, state.inner, state.good_inner),
            bad_steps=state.bad_steps + bad.astype(jnp.int32),
            consecutive=consecutive,
            rollbacks=state.rollbacks + rollback.astype(jnp.int32),
            factor=jnp.where(rollback & ~arrived, smaller, factor),
            returning=jnp.where(
                rollback, _RETURNS - 1, jnp.where(returning, state.returning - 1, 0)
            ).astype(jnp.int32),
        )

    return optax.GradientTransformationExtraArgs(init, update)


def _inexact(tree: Any) -> list[Array]:
    leaves = [jnp.asarray(leaf) for leaf in jax.tree.leaves(tree)]
    return [leaf for leaf in leaves if jnp.issubdtype(leaf.dtype, jnp.inexact)]


def _finite(tree: Any) -> Array:
    return jnp.all(jnp.array([jnp.all(jnp.isfinite(x)) for x in _inexact(tree)], dtype=bool))


def _still_finite(before: Any, after: Any) -> Array:
    """Tell whether all that was finite still is: some states begin with an infinite best loss."""
    pairs = zip(_inexact(before), _inexact(after), strict=True)
    kept = [jnp.all(jnp.isfinite(b) | ~jnp.isfinite(a)) for a, b in pairs]
    return jnp.all(jnp.array(kept, dtype=bool))


def _equal(a: Any, b: Any) -> Array:
    pairs = zip(jax.tree.leaves(a), jax.tree.leaves(b), strict=True)
    return jnp.all(jnp.array([jnp.all(x == y) for x, y in pairs], dtype=bool))


def _scaled(update: Any, factor: Array) -> Array:
    update = jnp.asarray(update)
    if not jnp.issubdtype(update.dtype, jnp.inexact):
        return update
    return update * factor.astype(update.dtype)


def _way_back(p: Any, good: Any, update: Array) -> Array:
    """Return the finite update from `p` towards the good value, in the dtype of an update."""
    difference = jnp.asarray(good) - jnp.asarray(p)
    if jnp.issubdtype(difference.dtype, jnp.floating):
        # From one end of the number range to the other takes two updates.
        most = jnp.finfo(difference.dtype).max
        difference = jnp.clip(difference, -most, most)
    usable = jnp.isfinite(difference) & (p != good)
    return jnp.where(usable, difference, 0).astype(update.dtype)


def _select(condition: Array, new: Any, old: Any) -> Any:
    return jax.tree.map(lambda a, b: jnp.where(condition, a, b), new, old)
