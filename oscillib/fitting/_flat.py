"""Everything that is fitted as one flat unconstrained vector, and the names of its entries."""

import math
from collections.abc import Callable
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax.flatten_util import ravel_pytree
from jaxtyping import Array, Float

from ..parameters import Constraint, Free, Interval, Positive, constrain, unconstrain


class Leaf(NamedTuple):
    """How one parameter array hangs together with its part of the flat vector.

    Arguments:
        name: where the array is, such as `field.growth`.
        shape: shape of the array.
        constraint: its constraint.
        size: how many entries of the flat vector are its own; 0 if fixed.
        places: the entry of the flattened array that each of them moves, and that nothing else
            moves; `None` if the constraint mixes entries.
    """

    name: str
    shape: tuple[int, ...]
    constraint: Constraint
    size: int
    places: np.ndarray | None


def from_flat(params: Any, constraints: Any) -> Callable[[Array], Any]:
    """Return the map from the flat unconstrained vector to parameters.

    Only shapes are looked at, and the values of what is not fitted, so that parameters on the very
    edge of their constraint do no harm.
    """
    shapes = _free_shapes(params, constraints)
    _, unravel = ravel_pytree(jax.tree.map(lambda s: jnp.zeros(s.shape, s.dtype), shapes))
    return lambda x: constrain(unravel(x), constraints, params)


def to_flat(params: Any, constraints: Any) -> Float[Array, " free"]:
    """Return the flat unconstrained vector of parameters."""
    _free_shapes(params, constraints)
    x = ravel_pytree(unconstrain(params, constraints))[0]
    # Not weakly typed, whatever the parameters are.
    return jnp.asarray(x, x.dtype)


def check_loss(loss: Callable[[Any], Any], params: Any) -> None:
    """Raise unless `loss(params)` is a floating-point scalar."""
    out = jax.eval_shape(loss, params)
    scalar = isinstance(out, jax.ShapeDtypeStruct) and out.shape == ()
    if not scalar or not jnp.issubdtype(out.dtype, jnp.floating):
        raise ValueError(
            f"`loss` must return one floating-point scalar, shape (); got {out}. "
            "Fix: sum over recordings, or `vmap` the fit over them."
        )


def slopes(to_params: Callable[[Array], Any], leaves: list[Leaf], x: Array) -> Array:
    """Return by how much each entry of the flat vector moves the value that it stands for."""

    def total(x):
        values = jax.tree.leaves(to_params(x))
        return sum(jnp.sum(v) for v, leaf in zip(values, leaves, strict=True) if leaf.size)

    return jax.grad(total)(x)


def check_entrywise(leaves: list[Leaf]) -> None:
    """Raise unless every constraint acts on its array entry by entry."""
    for leaf in leaves:
        if leaf.places is None:
            raise ValueError(
                f"the constraint of `{leaf.name}`, {leaf.constraint!r}, must act entry by entry, "
                "so that an entry has an interval of its own; this one mixes entries. Fix: fit "
                "parameters that need no mixing, or sample `log_density` instead."
            )


def scatter(leaves: list[Leaf], x: Array, params: Any, others: list[Array]) -> Any:
    """Return a tree like `params` with the entries of `x` at their places among `others`."""
    out, start = [], 0
    for leaf, other in zip(leaves, others, strict=True):
        part = x[start : start + leaf.size]
        start += leaf.size
        if leaf.size:
            other = other.reshape(-1).at[leaf.places].set(part).reshape(leaf.shape)
        out.append(other)
    return jax.tree.unflatten(jax.tree.structure(params), out)


def gather(leaves: list[Leaf], tree: Any) -> Array:
    """Return the entries of a tree like `params` that `scatter` would set."""
    values = jax.tree.leaves(tree)
    parts = [v.reshape(-1)[f.places] for v, f in zip(values, leaves, strict=True) if f.size]
    return jnp.concatenate(parts)


def layout(params: Any, constraints: Any) -> list[Leaf]:
    """Describe every array of `params`, in the order of the flat vector."""
    shapes = _free_shapes(params, constraints)
    free = jax.tree.structure(constraints).flatten_up_to(shapes)
    paths = jax.tree_util.tree_leaves_with_path(params)
    out = []
    for (path, value), constraint, shape in zip(
        paths, jax.tree.leaves(constraints), free, strict=True
    ):
        size = 0 if shape is None else math.prod(shape.shape)
        places = _places(constraint, shape, value) if size else np.zeros(0, int)
        out.append(Leaf(_path_name(path), jnp.shape(value), constraint, size, places))
    return out


def parameter_names(params: Any, constraints: Any) -> tuple[str, ...]:
    """Name every entry that is fitted, in the order of the flat unconstrained vector.

    Arguments:
        params: PyTree of parameter arrays; only shapes are looked at.
        constraints: tree of constraints.

    Returns:
        One name per entry: the way to the array and the index within it. Where a constraint mixes
        the entries of its array, `free 0`, `free 1`, ... stand in place of the index.

    Raises:
        ValueError: the trees differ in structure, or nothing is fitted.
        TypeError: what is fitted is not of one floating dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import parameter_names
        >>> from oscillib.parameters import Fixed, OffDiagonal, Positive
        >>> params = {"coupling": jnp.zeros((2, 2)), "gain": jnp.ones(()), "noise": jnp.ones(1)}
        >>> constraints = {"coupling": OffDiagonal(), "gain": Fixed(), "noise": Positive()}
        >>> parameter_names(params, constraints)
        ('coupling[0,1]', 'coupling[1,0]', 'noise[0]')
    """
    return tuple(name for leaf in layout(params, constraints) for name in _entry_names(leaf))


def _entry_names(leaf: Leaf) -> list[str]:
    if leaf.places is None:
        return [f"{leaf.name}[free {i}]" for i in range(leaf.size)]
    if leaf.shape == ():
        return [leaf.name] * leaf.size
    indices = np.stack(np.unravel_index(leaf.places, leaf.shape), axis=-1)
    return [f"{leaf.name}[{','.join(map(str, index))}]" for index in indices.tolist()]


def _path_name(path: tuple) -> str:
    parts = []
    for key in path:
        if isinstance(key, jax.tree_util.SequenceKey):
            parts.append(f"[{key.idx}]")
        elif isinstance(key, jax.tree_util.DictKey):
            parts.append(f".{key.key}")
        else:
            parts.append(str(key))
    return "".join(parts).removeprefix(".") or "params"


def _places(constraint: Constraint, free: Any, value: Any) -> np.ndarray | None:
    """Return which entry of the array each free entry moves, or `None` if entries are mixed."""
    if isinstance(constraint, Free | Positive | Interval):
        return np.arange(math.prod(free.shape))
    # Any other constraint is asked, at a point without symmetry; shapes decide, so this works
    # while the parameters themselves are being traced.
    with jax.ensure_compile_time_eval():
        template = jnp.zeros(jnp.shape(value), jnp.result_type(value))
        point = jnp.linspace(0.3, 0.7, math.prod(free.shape), dtype=free.dtype)
        jacobian = jax.jacfwd(
            lambda x: constraint.to_value(x.reshape(free.shape), template).reshape(-1)
        )(point)
        moves = np.asarray(jacobian) != 0
    one_to_one = (moves.sum(axis=0) == 1).all() and (moves.sum(axis=1) <= 1).all()
    return moves.argmax(axis=0) if one_to_one else None


def _free_shapes(params: Any, constraints: Any) -> Any:
    """Return shapes of the unconstrained leaves, after checking that they fit one flat vector."""
    shapes = jax.eval_shape(lambda p: unconstrain(p, constraints), params)
    leaves = jax.tree.leaves(shapes)
    if not sum(math.prod(s.shape) for s in leaves):
        raise ValueError(
            "`constraints` must leave at least one entry of `params` free; all are fixed. "
            "Fix: give what is to be fitted another constraint than Fixed()."
        )
    dtypes = sorted({str(s.dtype) for s in leaves})
    if len(dtypes) > 1 or not jnp.issubdtype(leaves[0].dtype, jnp.floating):
        raise TypeError(
            f"`params` must hold one floating dtype wherever something is fitted; got "
            f"{', '.join(dtypes)}. Fix: `.astype` them all to one, or fix the others with Fixed()."
        )
    return shapes
