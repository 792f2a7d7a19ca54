"""Parameters to and from the flat vectors of free values that windowed shooting moves."""

import math
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, PyTree

from .._validate import is_concrete
from ..parameters import Constraint, unconstrain


class Unknowns(eqx.Module):
    """Which entries of a parameter tree are free, and which belong to each recording alone.

    Attributes:
        constraints: tree of constraints.
        own: tree of bools, True where a leaf has a leading axis of recordings.
        template: parameters; supplies shapes and the values of `Fixed` leaves.
    """

    constraints: PyTree
    own: PyTree
    template: PyTree

    def pack(self, params: PyTree, recordings: int) -> tuple[Array, Array]:
        """Return the free values as `(recording, own)` and `(shared,)`."""
        free = [
            jax.vmap(constraint.to_free)(leaf) if is_own else constraint.to_free(leaf)
            for constraint, is_own, leaf in self._leaves(params)
        ]
        return self._flatten(free, recordings)

    def pack_free(self, free: PyTree, recordings: int) -> tuple[Array, Array]:
        """Flatten a tree that has the structure of the free leaves, such as a prior's mean."""
        structure = jax.tree.structure(self.constraints)
        return self._flatten(structure.flatten_up_to(free), recordings)

    def split_template(self) -> tuple[list[Array], list[Array]]:
        """Return the template's leaves as those with and those without a recording axis."""
        leaves = self._leaves(self.template)
        return [x for _, o, x in leaves if o], [x for _, o, x in leaves if not o]

    def first(self) -> PyTree:
        """Return the template's parameters of the first recording."""
        leaves = [leaf[0] if is_own else leaf for _, is_own, leaf in self._leaves(self.template)]
        return jax.tree.unflatten(jax.tree.structure(self.constraints), leaves)

    def one(self, own: Array, shared: Array, own_template: list[Array]) -> PyTree:
        """Return the parameters of one recording from its flat free values."""
        _, common = self.split_template()
        local, common = iter(own_template), iter(common)
        at, leaves = {True: 0, False: 0}, []
        for constraint, is_own, _ in self._leaves(self.template):
            template = next(local if is_own else common)
            shape = jax.eval_shape(constraint.to_free, template)
            if shape is None:
                leaves.append(constraint.to_value(None, template))
                continue
            size = math.prod(shape.shape)
            vector = own if is_own else shared
            piece = vector[at[is_own] : at[is_own] + size].reshape(shape.shape)
            at[is_own] += size
            leaves.append(constraint.to_value(piece, template))
        return jax.tree.unflatten(jax.tree.structure(self.constraints), leaves)

    def unpack(self, own: Array, shared: Array) -> PyTree:
        """Return the whole tree, own leaves with their recording axis."""
        own_template, _ = self.split_template()
        stacked = jax.vmap(self.one, in_axes=(0, None, 0))(own, shared, own_template)
        structure = jax.tree.structure(self.constraints)
        leaves = [
            leaf if is_own else leaf[0]
            for is_own, leaf in zip(self._own(), structure.flatten_up_to(stacked), strict=True)
        ]
        return jax.tree.unflatten(structure, leaves)

    def at_bound(
        self, begin: tuple[Array, Array], end: tuple[Array, Array], covariance: Array
    ) -> Array:
        """Tell whether a value has ceased to answer to its free leaf, and the data to hold it.

        The slope of an `Interval` falls below a ten-thousandth of what it was only next to its
        ends; the standard error of a free leaf that still matters is not 10.
        """
        own_template, _ = self.split_template()

        def slopes(own, shared, template):
            basis = jnp.eye(own.shape[0] + shared.shape[0], dtype=shared.dtype)

            def move(v):
                direction = (v[: own.shape[0]], v[own.shape[0] :])
                one = lambda o, s: self.one(o, s, template)
                moved = jax.jvp(one, (own, shared), direction)[1]
                return jnp.sqrt(sum(jnp.sum(leaf**2) for leaf in jax.tree.leaves(moved)))

            return jax.vmap(move)(basis)

        each = jax.vmap(slopes, in_axes=(0, None, 0))
        left = each(*end, own_template) < 1e-4 * each(*begin, own_template)
        loose = ~(jnp.diagonal(covariance, axis1=1, axis2=2) < 100)
        return jnp.any(left & loose)

    def _flatten(self, free: list[Any], recordings: int) -> tuple[Array, Array]:
        dtype = jax.tree.leaves(self.template)[0].dtype
        own, shared = [jnp.zeros((recordings, 0), dtype)], [jnp.zeros(0, dtype)]
        for leaf, is_own in zip(free, self._own(), strict=True):
            if leaf is not None and is_own:
                own.append(leaf.reshape(recordings, -1))
            elif leaf is not None:
                shared.append(leaf.ravel())
        return jnp.concatenate(own, axis=1), jnp.concatenate(shared)

    def _own(self) -> list[bool]:
        return jax.tree.structure(self.constraints).flatten_up_to(self.own)

    def _leaves(self, params: PyTree) -> list[tuple[Constraint, bool, Any]]:
        structure = jax.tree.structure(self.constraints)
        return list(
            zip(
                jax.tree.leaves(self.constraints),
                self._own(),
                structure.flatten_up_to(params),
                strict=True,
            )
        )


def check_start(params: PyTree, constraints: PyTree, own: PyTree) -> None:
    """Raise unless the trees agree and (where known) every start lies inside its constraint."""
    if own is None:
        unconstrain(params, constraints)
        return
    if jax.tree.structure(own) != jax.tree.structure(params):
        raise ValueError(
            f"`own` must have the structure of `params`, {jax.tree.structure(params)}, with a bool "
            f"at every leaf; got {jax.tree.structure(own)}."
        )
    counts = {x.shape[0] for x, o in zip(*map(jax.tree.leaves, (params, own)), strict=True) if o}
    known = is_concrete(*jax.tree.leaves(params))
    for r in range(max(counts, default=1) if known else 1):
        one = jax.tree.map(lambda x, o, r=r: x[r] if o else x, params, own)
        unconstrain(one, constraints)
