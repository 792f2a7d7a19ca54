"""Recurrence in both directions that skips what is outside the recording."""

from typing import Any, Literal

import equinox as eqx
import jax
import jax.numpy as jnp
from jax import lax
from jaxtyping import Array, Bool, Float

from .._validate import check_count, check_same_dtype, check_shape
from ._rows import check_rows


Cell = eqx.nn.GRUCell | eqx.nn.LSTMCell


def recur(
    cell: Cell,
    inputs: Float[Array, "time input"],
    inside: Bool[Array, " time"],
    *,
    reverse: bool = False,
) -> Float[Array, "time hidden"]:
    """Run a cell of equinox along a recording, in one direction.

        state_k = cell(inputs_k, state_(k-1)) inside,  state_(k-1) outside;    state_(-1) = 0

    Rows outside are skipped, wherever they are, so that a padded recording gives bit for bit the
    output of the bare one, in both directions.

    Arguments:
        cell: `eqx.nn.GRUCell` or `eqx.nn.LSTMCell`.
        inputs: shape `(time, input)`; anything, also NaN, outside.
        inside: True within the recording, shape `(time,)`; see `extent`.
        reverse: from the last row to the first; default False.

    Returns:
        The hidden state after each row, shape `(time, hidden)`, in the order of the rows; 0
        outside.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ, `inside` is not boolean.

    Example:
        >>> import equinox as eqx
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import recur
        >>> cell = eqx.nn.LSTMCell(2, 3, key=jax.random.key(0))
        >>> recur(cell, jnp.ones((4, 2)), jnp.array([True, True, False, False]))[2:, 0]
        Array([0., 0.], dtype=float64)

    Source: gated recurrent unit, Cho et al. 2014; long short-term memory, Hochreiter and
        Schmidhuber 1997, with the forget gate of Gers et al. 2000 (from memory).
    """
    inputs = jnp.asarray(inputs)
    inside = check_rows("inputs", inputs, "inside", inside)
    check_shape("inputs", inputs, (None, cell.input_size), "(time, input)")
    check_same_dtype("inputs", inputs, "the weights of the cell", cell.weight_ih)
    rest = jnp.zeros(cell.hidden_size, inputs.dtype)
    start: Any = (rest, rest) if isinstance(cell, eqx.nn.LSTMCell) else rest
    # Replaced before the cell sees it, so that NaN in padding cannot reach a gradient.
    clean = jnp.where(inside[:, None], inputs, 0)

    def body(state, row):
        x, here = row
        state = jax.tree.map(lambda new, old: jnp.where(here, new, old), cell(x, state), state)
        hidden = state[0] if isinstance(state, tuple) else state
        return state, jnp.where(here, hidden, 0)

    return lax.scan(body, start, (clean, inside), reverse=reverse)[1]


class Recurrence(eqx.Module):
    """Recurrence in both directions, each with a cell of its own.

        output_k = (forward state after row k, backward state after row k)

    Arguments:
        inputs: entries of a row.
        hidden: units of each direction; an output has `2 hidden` entries.
        cell: `"gru"` (default) or `"lstm"`.
        key: random key of the first weights.
        dtype: precision of the weights; default that of JAX.

    Raises:
        ValueError: a size is below 1, `cell` is neither; on a call, shapes do not fit.
        TypeError: a size is not an int; on a call, dtypes differ.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import Recurrence
        >>> recurrence = Recurrence(2, 3, key=jax.random.key(0))
        >>> recurrence(jnp.ones((4, 2)), jnp.ones(4, bool)).shape
        (4, 6)

    Source: Schuster and Paliwal 1997 (from memory).
    """

    forward: Cell
    backward: Cell

    def __init__(
        self,
        inputs: int,
        hidden: int,
        *,
        cell: Literal["gru", "lstm"] = "gru",
        key: Array,
        dtype=None,
    ):
        """Draw the weights."""
        inputs, hidden = check_count("inputs", inputs), check_count("hidden", hidden)
        kinds = {"gru": eqx.nn.GRUCell, "lstm": eqx.nn.LSTMCell}
        if cell not in kinds:
            raise ValueError(f"`cell` must be 'gru' or 'lstm'; got {cell!r}.")
        ahead, back = jax.random.split(key)
        self.forward = kinds[cell](inputs, hidden, key=ahead, dtype=dtype)
        self.backward = kinds[cell](inputs, hidden, key=back, dtype=dtype)

    @property
    def outputs(self) -> int:
        """Entries of an output."""
        return self.forward.hidden_size + self.backward.hidden_size

    def __call__(
        self, inputs: Float[Array, "time input"], inside: Bool[Array, " time"]
    ) -> Float[Array, "time feature"]:
        """Return the outputs of both directions, shape `(time, 2 hidden)`; 0 outside."""
        forward = recur(self.forward, inputs, inside)
        backward = recur(self.backward, inputs, inside, reverse=True)
        return jnp.concatenate([forward, backward], axis=1)
