"""A network of any single unit: the generic wrapper."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_shape
from ..parameters import Constraint, Fixed, Free
from ._arrays import scalar
from ._coupling import (
    Coupling,
    Edges,
    Kind,
    as_coupling,
    check_kind,
    coupling_constraint,
    gathered,
    received,
)


class CoupledParams(eqx.Module):
    """Parameters of a coupled network: those of its units, and their coupling.

    Arguments:
        unit: any PyTree of arrays: the unit's parameters with the node as last axis of every leaf;
            a scalar leaf is shared by all nodes.
        coupling: `K`, a matrix `(node, node)`, `K[i, j]` the drive of node i by node j, or `Edges`;
            per time unit.
        gain: `g`, a scalar that multiplies `K`; default 1.

    Raises:
        ValueError: the last axis of a leaf of `unit` is not the node.
        TypeError: coupling and gain differ in dtype.

    Example:
        >>> from oscillib.fields import CoupledParams, VanDerPolParams
        >>> CoupledParams(VanDerPolParams([1.0, 1.2]), coupling=[[0.0, 0.1], [0.1, 0.0]]).gain
        Array(1., dtype=float64)
    """

    unit: Any
    coupling: Coupling
    gain: Float[Array, ""]

    def __init__(self, unit: Any, coupling: Any, *, gain: Any = None):
        """Convert every array and check that the nodes agree."""
        self.unit = jax.tree.map(as_float, unit)
        edges = isinstance(coupling, Edges)
        weights = coupling.weight if edges else as_float(coupling)
        nodes = coupling.nodes if edges else weights.shape[0]
        self.coupling = as_coupling(
            "coupling", coupling, ("coupling", jnp.zeros(nodes, weights.dtype))
        )
        self.gain = scalar("gain", gain, 1.0, ("coupling", weights))
        for path, leaf in jax.tree_util.tree_leaves_with_path(self.unit):
            if leaf.ndim:
                name = "unit" + jax.tree_util.keystr(path)
                check_shape(name, leaf, (*leaf.shape[:-1], nodes), "(..., node)")

    def constraints(self) -> "CoupledParams":
        """Return the unit's own constraints, a free coupling (off its diagonal), a fixed gain.

        Where `unit` has no method `constraints()`, its leaves are free.

        Example:
            >>> import jax.numpy as jnp
            >>> from oscillib.fields import CoupledParams
            >>> params = CoupledParams(jnp.ones(2), coupling=[[0.0, 0.1], [0.1, 0.0]])
            >>> params.constraints()
            CoupledParams(unit=Free(), coupling=OffDiagonal(), gain=Fixed())
        """
        leaves = [*own_constraints(self.unit), coupling_constraint(self.coupling), Fixed()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


class CoupledNetwork(eqx.Module):
    """Vector field of a network of equal units; made by `coupled`.

    Arguments:
        unit: field of one unit (static).
        component: components that are coupled (static).
        kind: `"diffusive"` or `"additive"` (static).
    """

    unit: Callable = eqx.field(static=True)
    component: tuple[int, ...] = eqx.field(static=True)
    kind: Kind = eqx.field(static=True)

    def __call__(
        self, t: Array | float, y: Float[Array, "component node"], params: CoupledParams
    ) -> Float[Array, "component node"]:
        """Return `dy/dt`, shape `(component, node)`."""
        rows = self._rows(y)
        return self._with(t, y, received(params.coupling, y[rows], kind=self.kind), params)

    def delayed(
        self,
        t: Array | float,
        y: Float[Array, "component node"],
        past: Float[Array, "component edge"],
        params: CoupledParams,
    ) -> Float[Array, "component node"]:
        """Return `dy/dt` when every edge carries what its source was some time ago.

        Arguments:
            t: time.
            y: state, shape `(component, node)`.
            past: state of the source of each edge, as it now arrives, shape `(component, edge)`.
            params: with `Edges` as coupling.

        Returns:
            Shape `(component, node)`; for `integrate.delay_rollout`.

        Raises:
            ValueError: the coupling is a matrix.
        """
        edges = params.coupling
        if not isinstance(edges, Edges):
            raise ValueError(
                "`params.coupling` must be Edges, because each edge has a delay of its own; got "
                "a matrix. Fix: `Edges.from_matrix(coupling)`."
            )
        rows = self._rows(y)
        check_shape("past", past, (y.shape[0], len(edges.source)), "(component, edge)")
        sent = past[rows]
        if self.kind == "diffusive":
            sent = sent - y[rows][:, edges.target]
        return self._with(t, y, gathered(edges, sent), params)

    def _rows(self, y: Array) -> Any:
        if max(self.component) >= y.shape[0]:
            raise ValueError(
                f"`component` must be below {y.shape[0]}, the components of `y`; "
                f"got {self.component}."
            )
        return jnp.asarray(self.component)

    def _with(self, t: Any, y: Array, drive: Array, params: CoupledParams) -> Array:
        axes = jax.tree.map(lambda leaf: -1 if leaf.ndim else None, params.unit)
        alone = jax.vmap(lambda y, p: self.unit(t, y, p), in_axes=(1, axes), out_axes=1)
        dy = alone(y, params.unit)
        check_shape("unit(t, y, params)", dy, y.shape, "(component, node)")
        return dy.at[jnp.asarray(self.component)].add(params.gain * drive)


def coupled(
    unit: Callable[[Any, Any, Any], Any],
    *,
    component: int | tuple[int, ...] = 0,
    kind: Kind = "diffusive",
) -> CoupledNetwork:
    """Couple any single-unit field into a network.

        dy_i/dt = unit(t, y_i, p_i) + g sum_j K_ij (y_j - y_i)    on the chosen components

    and with `kind="additive"` the sum is over `K_ij y_j`.

    Arguments:
        unit: `unit(t, y, params) -> dy` for one unit, `y` of shape `(component,)`: one of this
            room's (`van_der_pol`, `fitzhugh_nagumo`, `goodwin`, `hopf_unit`) or your own.
        component: which component is coupled, or several, each to itself; default 0.
        kind: `"diffusive"` (default) or `"additive"`.

    Returns:
        A field `field(t, y, params)` on `(component, node)` with `CoupledParams`; its method
        `delayed` is the same network for `integrate.delay_rollout`.

    Raises:
        ValueError: `kind` is neither; a component is negative or named twice.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import CoupledParams, coupled
        >>> decay = lambda t, y, rate: -rate * y
        >>> params = CoupledParams(jnp.array([1.0, 2.0]), coupling=[[0.0, 0.5], [0.0, 0.0]])
        >>> coupled(decay)(0.0, jnp.array([[1.0, 3.0]]), params)  # -1 + 0.5 (3 - 1), -6
        Array([[ 0., -6.]], dtype=float64)

    Source: common practice, no source.
    """
    check_kind(kind)
    components = (component,) if isinstance(component, int) else tuple(component)
    if not components or min(components) < 0 or len(set(components)) < len(components):
        raise ValueError(
            f"`component` must name each component once, counted from 0; got {component}."
        )
    return CoupledNetwork(unit, components, kind)


def own_constraints(params: Any) -> list[Constraint]:
    """Return the leaves of `params.constraints()`, or `Free()` for every leaf where it has none."""
    if hasattr(params, "constraints"):
        return jax.tree.leaves(params.constraints())
    return [Free() for _ in jax.tree.leaves(params)]
