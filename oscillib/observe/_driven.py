"""A slow observer driven by the activity of a field, as further rows of the state."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import check_count, check_shape
from ..parameters import Constraint, Free


class ObservedParams(eqx.Module):
    """Parameters of an observed field: those of the field and those of its observer.

    Arguments:
        field: parameters of the field, any PyTree.
        observer: parameters of the observer, such as `BalloonParams` or `LowPassParams`.

    Example:
        >>> from oscillib.fields import HopfParams
        >>> from oscillib.observe import LowPassParams, ObservedParams
        >>> ObservedParams(HopfParams([0.1], [6.0]), LowPassParams([2.0])).observer.time
        Array([2.], dtype=float64)
    """

    field: Any
    observer: Any

    def constraints(self) -> "ObservedParams":
        """Return the constraints of both; free where one has no `constraints()`.

        Example:
            >>> from oscillib.fields import HopfParams
            >>> from oscillib.observe import LowPassParams, ObservedParams
            >>> params = ObservedParams(HopfParams([0.1], [6.0]), LowPassParams([2.0]))
            >>> params.constraints().observer.time
            Positive()
        """
        leaves: list[Constraint] = []
        for part in (self.field, self.observer):
            own = part.constraints() if hasattr(part, "constraints") else None
            leaves += (
                [Free() for _ in jax.tree.leaves(part)] if own is None else jax.tree.leaves(own)
            )
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def observed(
    field: Callable[[Any, Any, Any], Any],
    observer: Callable[[Any, Any, Any, Any], Any],
    *,
    rows: int,
    component: int = 0,
) -> Callable[[Any, Any, Any], Any]:
    """Join a field and an observer that follows one of its components.

        d(y, z)/dt = (field(t, y, p), observer(t, z, y[component], q))

    The state holds the field's components first and then the observer's, so that readouts, windows
    and filters see one field. The observer does not act back.

    Arguments:
        field: `field(t, y, params) -> dy` on `(component, node)`.
        observer: `observer(t, z, drive, params) -> dz`, `z` of shape `(rows, node)`, `drive`
            `(node,)`: `balloon`, `low_pass`, or your own.
        rows: rows of the observer's state: 4 for `balloon`, 1 for `low_pass`.
        component: which component of the field drives the observer; default 0.

    Returns:
        A field on `(component + rows, node)` with `ObservedParams`.

    Raises:
        ValueError: `rows` is below 1; on tracing, too few components.
        TypeError: `rows` is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.observe import LowPassParams, ObservedParams, low_pass, observed
        >>> field = observed(HopfNetwork(), low_pass, rows=1)
        >>> params = ObservedParams(HopfParams([1.0], [6.0]), LowPassParams([2.0]))
        >>> field(0.0, jnp.array([[1.0], [0.0], [0.5]]), params)
        Array([[0.  ],
               [6.  ],
               [0.25]], dtype=float64)

    Source: common practice, no source.
    """
    rows = check_count("rows", rows)

    def joint(t, y, params):
        if not 0 <= component < y.shape[0] - rows:
            raise ValueError(
                f"`component` must lie in 0 ... {y.shape[0] - rows - 1}, the components of the "
                f"field in `y` of shape {y.shape} with rows={rows}; got {component}."
            )
        inner, z = y[:-rows], y[-rows:]
        dz = observer(t, z, inner[component], params.observer)
        check_shape("observer(t, z, drive, params)", dz, z.shape, "(rows, node)")
        return jnp.concatenate([field(t, inner, params.field), dz])

    return joint


def observer_rows(y: Float[Array, "row node"], rows: int) -> Float[Array, "rows node"]:
    """Return the last rows of a state, those of the observer."""
    if y.ndim != 2 or y.shape[0] < rows:
        raise ValueError(
            f"`y` must have shape (row, node) with at least {rows} rows; got {y.shape}."
        )
    return y[-rows:]
