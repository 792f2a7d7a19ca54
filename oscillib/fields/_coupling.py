"""Coupling as a dense matrix or as a list of edges, with the same results."""

from typing import Any, Literal, TypeAlias

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float, Int

from .._validate import as_float, check_count, check_same_dtype, check_shape, is_concrete
from ..parameters import Constraint, Free, OffDiagonal


class Graph:
    """Which node drives which: two host arrays that hash and compare by value.

    JAX needs both of what is static: the same graph never compiles anew, another one does.
    """

    def __init__(self, source: np.ndarray, target: np.ndarray, nodes: int):
        """Freeze the arrays."""
        self.source, self.target, self.nodes = source.copy(), target.copy(), nodes
        self.source.flags.writeable = self.target.flags.writeable = False
        self._hash = hash((self.source.tobytes(), self.target.tobytes(), nodes))

    def __hash__(self) -> int:
        """Return the hash computed once."""
        return self._hash

    def __eq__(self, other: object) -> bool:
        """Compare by value."""
        return self is other or (
            isinstance(other, Graph)
            and self.nodes == other.nodes
            and np.array_equal(self.source, other.source)
            and np.array_equal(self.target, other.target)
        )

    def __repr__(self) -> str:
        """Return the sizes."""
        return f"Graph({self.nodes} nodes, {len(self.source)} edges)"


class Edges(eqx.Module):
    """Sparse coupling: a list of edges, each from a source node to a target node.

    Stands wherever a coupling matrix `K` may stand in `CoupledParams`, `KuramotoParams` and
    `WilsonCowanParams`, with `K[target, source] = weight`; several edges between the same two nodes
    add up. Work and memory grow with the number of edges, not with the square of that of nodes.
    The weights are parameters; which nodes are joined is structure, and changing it compiles anew.

    Arguments:
        source: node that drives, shape `(edge,)`, integers from 0; known values, not traced.
        target: node that is driven, shape `(edge,)`, likewise.
        weight: shape `(edge,)`, in the unit of the coupling.
        nodes: number of nodes of the network.

    Raises:
        ValueError: shapes differ; a node number is outside `0 ... nodes - 1`.
        TypeError: `source` or `target` holds no integers, or is traced.

    Example:
        >>> from oscillib.fields import Edges
        >>> Edges(source=[0, 2], target=[1, 1], weight=[0.5, 0.25], nodes=3).matrix()
        Array([[0.  , 0.  , 0.  ],
               [0.5 , 0.  , 0.25],
               [0.  , 0.  , 0.  ]], dtype=float64)

    Source: common practice, no source.
    """

    weight: Float[Array, " edge"]
    graph: Graph = eqx.field(static=True)

    def __init__(self, source: Any, target: Any, weight: Any, *, nodes: int):
        """Check the node numbers on the host and convert the weights."""
        nodes = check_count("nodes", nodes)
        self.weight = as_float(weight)
        check_shape("weight", self.weight, (None,), "(edge,)")
        shape = self.weight.shape
        source = _node_numbers("source", source, shape, nodes)
        self.graph = Graph(source, _node_numbers("target", target, shape, nodes), nodes)

    @classmethod
    def from_matrix(cls, matrix: Float[Array, "node node"]) -> "Edges":
        """List the entries of a matrix that are not zero; `matrix[i, j]` drives i by j.

        Example:
            >>> import jax.numpy as jnp
            >>> from oscillib.fields import Edges
            >>> Edges.from_matrix(jnp.array([[0.0, 2.0], [0.0, 0.0]])).source
            array([1], dtype=int32)
        """
        if not is_concrete(matrix):
            raise TypeError(
                "`matrix` must be known, because its zeros set array shapes; got a tracer."
            )
        matrix = as_float(matrix)
        check_shape("matrix", matrix, (matrix.shape[0], matrix.shape[0]), "(node, node)")
        target, source = np.nonzero(np.asarray(matrix))
        return cls(source, target, matrix[target, source], nodes=matrix.shape[0])

    @property
    def source(self) -> Int[np.ndarray, " edge"]:
        """Node that drives, one an edge."""
        return self.graph.source

    @property
    def target(self) -> Int[np.ndarray, " edge"]:
        """Node that is driven, one an edge."""
        return self.graph.target

    @property
    def nodes(self) -> int:
        """Number of nodes."""
        return self.graph.nodes

    def matrix(self) -> Float[Array, "node node"]:
        """Return the dense matrix `K`, `K[target, source] = weight`, as `HopfParams` takes it."""
        empty = jnp.zeros((self.nodes, self.nodes), self.weight.dtype)
        return empty.at[self.target, self.source].add(self.weight)


Coupling: TypeAlias = Float[Array, "node node"] | Edges
Kind: TypeAlias = Literal["diffusive", "additive"]


def received(
    coupling: Coupling, x: Float[Array, "component node"], *, kind: str = "additive"
) -> Float[Array, "component node"]:
    """Return what every node receives from the others.

        additive: sum_j K_ij x_j        diffusive: sum_j K_ij (x_j - x_i)

    Arguments:
        coupling: `K`, a matrix `(node, node)` or `Edges`.
        x: shape `(component, node)`.
        kind: `"additive"` (default) or `"diffusive"`.

    Returns:
        Shape `(component, node)`.

    Raises:
        ValueError: `kind` is neither; the coupling has another number of nodes.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import Edges, received
        >>> x = jnp.array([[1.0, 5.0]])
        >>> received(Edges([1], [0], [0.5], nodes=2), x, kind="diffusive")  # 0.5 (5 - 1)
        Array([[2., 0.]], dtype=float64)
    """
    check_kind(kind)
    nodes = x.shape[-1]
    if isinstance(coupling, Edges):
        check_same_dtype("x", x, "coupling.weight", coupling.weight)
        if coupling.nodes != nodes:
            raise ValueError(f"`x` must have {coupling.nodes} nodes, as `coupling`; got {nodes}.")
        sent = x[:, coupling.source]
        if kind == "diffusive":
            sent = sent - x[:, coupling.target]
        return gathered(coupling, sent)
    check_shape("coupling", coupling, (nodes, nodes), "(node, node)")
    check_same_dtype("x", x, "coupling", coupling)
    total = x @ coupling.T
    return total - jnp.sum(coupling, axis=1)[None] * x if kind == "diffusive" else total


def gathered(edges: Edges, sent: Float[Array, "component edge"]) -> Float[Array, "component node"]:
    """Add up at every node, by weight, what its edges carry."""
    carried = (edges.weight[None] * sent).T
    return jax.ops.segment_sum(carried, edges.target, num_segments=edges.nodes).T


def as_coupling(name: str, coupling: Any, reference: tuple[str, Array]) -> Coupling:
    """Convert a coupling, or fill in zeros; one row for each entry of the reference `(node,)`."""
    of, array = reference
    n = array.shape[0]
    if isinstance(coupling, Edges):
        if coupling.nodes != n:
            raise ValueError(f"`{name}` must have {n} nodes, as `{of}`; got {coupling.nodes}.")
        check_same_dtype(f"{name}.weight", coupling.weight, of, array)
        return coupling
    matrix = jnp.zeros((n, n), array.dtype) if coupling is None else as_float(coupling)
    check_shape(name, matrix, (n, n), "(node, node)")
    check_same_dtype(name, matrix, of, array)
    return matrix


def coupling_constraint(coupling: Coupling) -> Constraint:
    """Return the usual constraint: free off the diagonal, or on every edge."""
    return Free() if isinstance(coupling, Edges) else OffDiagonal()


def check_kind(kind: str) -> None:
    """Refuse an unknown kind of coupling."""
    if kind not in ("diffusive", "additive"):
        raise ValueError(f"`kind` must be 'diffusive' or 'additive'; got {kind!r}.")


def _node_numbers(name: str, x: Any, shape: tuple[int, ...], nodes: int) -> np.ndarray:
    if not is_concrete(x):
        raise TypeError(f"`{name}` must be known, because it is structure; got a tracer.")
    x = np.asarray(x)
    if x.size == 0:
        x = x.astype(np.int32)
    if not np.issubdtype(x.dtype, np.integer):
        raise TypeError(f"`{name}` must hold node numbers (integers); got dtype {x.dtype}.")
    check_shape(name, x, shape, "(edge,), as `weight`")
    if np.any((x < 0) | (x >= nodes)):
        raise ValueError(f"`{name}` must lie in 0 ... {nodes - 1}; got {x.min()} to {x.max()}.")
    return x.astype(np.int32)
