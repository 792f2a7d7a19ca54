"""Whole trees of parameters to and from their unconstrained leaves."""

from typing import TypeVar

import jax
import jax.numpy as jnp
import numpy as np
from jax.core import Tracer
from jaxtyping import Array, Bool, PyTree

from ._constraint import Constraint


P = TypeVar("P")


def unconstrain(params: PyTree, constraints: PyTree) -> PyTree:
    """Map every parameter to its unconstrained leaf.

    Arguments:
        params: PyTree of parameter arrays, each with a value its constraint allows.
        constraints: tree of the same structure with a `Constraint` at every array.

    Returns:
        The tree of unconstrained leaves; `None` where the constraint is `Fixed`, so that optax and
        `jax.grad` pass it by.

    Raises:
        ValueError: the trees differ in structure, or (where values are known) a parameter lies
            outside its constraint.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import Fixed, Positive, unconstrain
        >>> unconstrain({"a": jnp.ones(2), "b": jnp.ones(())}, {"a": Positive(), "b": Fixed()})
        {'a': Array([0., 0.], dtype=float64), 'b': None}
    """
    _check_structure(params, constraints)
    free = jax.tree.map(lambda c, p: c.to_free(p), constraints, params)
    for path, leaf in jax.tree_util.tree_leaves_with_path(free):
        if not isinstance(leaf, Tracer) and not np.all(np.isfinite(leaf)):
            name = jax.tree_util.keystr(path)
            raise ValueError(
                f"`params{name}` must lie strictly inside its constraint; its unconstrained value "
                f"is {leaf}. Fix: start from an inner point, or give it another constraint."
            )
    return free


def constrain(free: PyTree, constraints: PyTree, params: P) -> P:
    """Map unconstrained leaves back to parameters.

    Arguments:
        free: what `unconstrain` returned, moved by an optimiser.
        constraints: tree of constraints.
        params: template: supplies shapes, and the values of `Fixed` leaves.

    Returns:
        Parameters with the structure of `params`.

    Raises:
        ValueError: `params` and `constraints` differ in structure.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import Fixed, Positive, constrain, unconstrain
        >>> p, c = {"a": jnp.ones(2), "b": jnp.ones(())}, {"a": Positive(), "b": Fixed()}
        >>> constrain(unconstrain(p, c), c, p)
        {'a': Array([1., 1.], dtype=float64), 'b': Array(1., dtype=float64)}
    """
    _check_structure(params, constraints)
    structure = jax.tree.structure(constraints)
    free_leaves = structure.flatten_up_to(free)
    leaves = [
        c.to_value(f, p)
        for c, f, p in zip(
            jax.tree.leaves(constraints), free_leaves, structure.flatten_up_to(params), strict=True
        )
    ]
    return jax.tree.unflatten(structure, leaves)


def all_finite(tree: PyTree) -> Bool[Array, ""]:
    """Tell whether every entry of every floating leaf is finite.

    Arguments:
        tree: PyTree of arrays; `None` leaves are skipped.

    Returns:
        A boolean scalar; usable inside `jit`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import all_finite
        >>> bool(all_finite({"a": jnp.array([1.0, jnp.nan])}))
        False
    """
    leaves = [jnp.asarray(leaf) for leaf in jax.tree.leaves(tree)]
    leaves = [leaf for leaf in leaves if jnp.issubdtype(leaf.dtype, jnp.floating)]
    return jnp.all(jnp.array([jnp.all(jnp.isfinite(leaf)) for leaf in leaves], dtype=bool))


def _check_structure(params: PyTree, constraints: PyTree) -> None:
    for path, leaf in jax.tree_util.tree_leaves_with_path(constraints):
        if not isinstance(leaf, Constraint):
            name = jax.tree_util.keystr(path)
            raise ValueError(
                f"`constraints{name}` must be a Constraint (Free(), Positive(), ...); got {leaf!r}."
            )
    expected, got = jax.tree.structure(params), jax.tree.structure(constraints)
    if expected != got:
        raise ValueError(
            f"`constraints` must have the structure of `params`, {expected}; got {got}."
        )
