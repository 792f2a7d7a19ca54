"""A learned correction added to a known field."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import check_count, check_shape
from ..parameters import Free
from ._coupled import own_constraints


class Correction(eqx.Module):
    """A small network from the components of a node to a correction of their derivative.

        correction = W_2 tanh(W_1 tanh(W_0 y_i + b_0) + b_1) + b_2

    shared by all nodes. The last layer starts at zero, so the correction is exactly zero until it
    is trained; the first steps of an optimiser then move the last layer alone.

    Arguments:
        components: components of a node.
        width: units of a hidden layer; default 16.
        depth: hidden layers; default 2.
        key: random key of the first weights.
        dtype: precision of the weights; default that of JAX.

    Raises:
        ValueError: a size is below 1.
        TypeError: a size is not an int.

    Example:
        >>> import jax
        >>> from oscillib.fields import Correction
        >>> correction = Correction(2, key=jax.random.key(0))
        >>> float(abs(correction(jax.numpy.ones((2, 3)))).max())
        0.0

    Source: universal differential equations, Rackauckas et al. 2020 (from memory).
    """

    layers: tuple[eqx.nn.Linear, ...]

    def __init__(self, components: int, *, width: int = 16, depth: int = 2, key: Array, dtype=None):
        """Draw the hidden layers and set the last one to zero."""
        components = check_count("components", components)
        width, depth = check_count("width", width), check_count("depth", depth)
        sizes = [components, *[width] * depth, components]
        keys = jax.random.split(key, depth + 1)
        layers = [
            eqx.nn.Linear(a, b, key=k, dtype=dtype)
            for a, b, k in zip(sizes[:-1], sizes[1:], keys, strict=True)
        ]
        layers[-1] = jax.tree.map(jnp.zeros_like, layers[-1])
        self.layers = tuple(layers)

    def __call__(self, y: Float[Array, "component node"]) -> Float[Array, "component node"]:
        """Return the correction of every node, shape `(component, node)`."""
        check_shape("y", y, (self.layers[0].weight.shape[1], None), "(component, node)")
        return jax.vmap(self._one, in_axes=1, out_axes=1)(y)

    def _one(self, x: Array) -> Array:
        for layer in self.layers[:-1]:
            x = jnp.tanh(layer(x))
        return self.layers[-1](x)


class CorrectedParams(eqx.Module):
    """Parameters of a corrected field.

    Arguments:
        known: parameters of the known field, any PyTree.
        correction: a `Correction`, or an `eqx.Module` of your own, `correction(y) -> dy`.

    Example:
        >>> import jax
        >>> from oscillib.fields import CorrectedParams, Correction, VanDerPolParams
        >>> correction = Correction(2, key=jax.random.key(0))
        >>> CorrectedParams(VanDerPolParams([1.0]), correction).known.damping
        Array([1.], dtype=float64)
    """

    known: Any
    correction: Any

    def constraints(self) -> "CorrectedParams":
        """Return the known field's constraints (free where it has none); all weights are free.

        To fit the correction alone, give every leaf of `known` the constraint `Fixed()`.

        Example:
            >>> import jax
            >>> from oscillib.fields import CorrectedParams, Correction, VanDerPolParams
            >>> correction = Correction(2, key=jax.random.key(0))
            >>> params = CorrectedParams(VanDerPolParams([1.0]), correction)
            >>> params.constraints().known.damping
            Positive()
        """
        leaves = [*own_constraints(self.known), *[Free() for _ in jax.tree.leaves(self.correction)]]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def corrected(field: Callable[[Any, Any, Any], Any]) -> Callable[[Any, Any, Any], Any]:
    """Add a learned correction to a known field.

        dy/dt = field(t, y, known) + correction(y)

    Arguments:
        field: `field(t, y, params) -> dy` on `(component, node)`.

    Returns:
        A field with `CorrectedParams`.

    Raises:
        ValueError: on tracing, the correction has another shape than the state.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import (
        ...     CorrectedParams, Correction, VanDerPolParams, corrected, van_der_pol)
        >>> params = CorrectedParams(VanDerPolParams([1.0]), Correction(2, key=jax.random.key(0)))
        >>> corrected(van_der_pol)(0.0, jnp.array([[2.0], [1.0]]), params).ravel()
        Array([ 1., -5.], dtype=float64)

    Source: universal differential equations, Rackauckas et al. 2020 (from memory).
    """

    def with_correction(t, y, params):
        change = params.correction(y)
        check_shape("params.correction(y)", change, y.shape, "(component, node)")
        return field(t, y, params.known) + change

    return with_correction
