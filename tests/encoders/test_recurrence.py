import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.encoders import Recurrence, recur


RNG = np.random.default_rng(0)
INPUTS = jnp.asarray(RNG.normal(size=(5, 2)))
INSIDE = jnp.ones(5, bool)
CELLS = {
    "gru": eqx.nn.GRUCell(2, 3, key=jax.random.key(1)),
    "lstm": eqx.nn.LSTMCell(2, 3, key=jax.random.key(2)),
}


def sigmoid(x):
    return 1 / (1 + np.exp(-x))


def textbook_lstm(cell, x, h, c):
    """Hochreiter and Schmidhuber 1997 with the forget gate of Gers et al. 2000 (from memory)."""
    w, u, b = (np.asarray(a) for a in (cell.weight_ih, cell.weight_hh, cell.bias))
    i, f, g, o = np.split(w @ x + u @ h + b, 4)
    c = sigmoid(f) * c + sigmoid(i) * np.tanh(g)
    return sigmoid(o) * np.tanh(c), c


def textbook_gru(cell, x, h):
    """Cho et al. 2014, the reset gate after the product (from memory)."""
    (wr, wz, wn), (ur, uz, un) = (
        np.split(np.asarray(a), 3) for a in (cell.weight_ih, cell.weight_hh)
    )
    br, bz, bn = np.split(np.asarray(cell.bias), 3)
    r, z = sigmoid(wr @ x + br + ur @ h), sigmoid(wz @ x + bz + uz @ h)
    n = np.tanh(wn @ x + bn + r * (un @ h + np.asarray(cell.bias_n)))
    return (1 - z) * n + z * h


def textbook(cell, inputs, reverse=False):
    h = c = np.zeros(3)
    out = np.zeros((len(inputs), 3))
    for k in reversed(range(len(inputs))) if reverse else range(len(inputs)):
        x = np.asarray(inputs[k])
        if isinstance(cell, eqx.nn.LSTMCell):
            h, c = textbook_lstm(cell, x, h, c)
        else:
            h = textbook_gru(cell, x, h)
        out[k] = h
    return out


@pytest.fixture(scope="module")
def run():
    """Outputs of both directions, and the gradients of their weighted sum."""

    @jax.jit
    def both(cell, inputs, inside):
        def outputs(cell, inputs):
            ahead = recur(cell, inputs, inside)
            return ahead, recur(cell, inputs, inside, reverse=True)

        out, pull = jax.vjp(outputs, cell, inputs)
        return out, pull(jax.tree.map(jnp.cos, out))

    return both


def test_textbook_cell_has_the_published_value():
    """Gate order i, f, g, o; computed from the formula with 30 digits."""
    cell = eqx.nn.LSTMCell(2, 1, key=jax.random.key(0))
    weights = (
        jnp.array([[0.1, -0.2], [0.3, 0.05], [-0.15, 0.25], [0.2, 0.1]]),
        jnp.array([[0.05], [-0.1], [0.2], [0.15]]),
        jnp.array([0.01, 0.5, -0.02, 0.03]),
    )
    cell = eqx.tree_at(lambda c: (c.weight_ih, c.weight_hh, c.bias), cell, weights)
    x, h, c = np.array([0.7, -1.1]), np.array([0.2]), np.array([-0.4])
    expected = [-0.2249669840149, -0.4605978205885]
    for out in (
        textbook_lstm(cell, x, h, c),
        cell(jnp.asarray(x), (jnp.asarray(h), jnp.asarray(c))),
    ):
        np.testing.assert_allclose(np.ravel(out), expected, atol=1e-12)


@pytest.mark.parametrize("kind", CELLS)
def test_recurrence_equals_the_textbook_cell(run, kind):
    (ahead, back), _ = run(CELLS[kind], INPUTS, INSIDE)
    np.testing.assert_allclose(ahead, textbook(CELLS[kind], INPUTS), atol=1e-12)
    np.testing.assert_allclose(back, textbook(CELLS[kind], INPUTS, reverse=True), atol=1e-12)


@pytest.mark.parametrize("kind", CELLS)
@pytest.mark.parametrize("before, after, junk", [(0, 3, 0.0), (2, 0, np.nan), (1, 2, np.inf)])
def test_padding_changes_no_bit(run, kind, before, after, junk):
    rows = ((before, after), (0, 0))
    padded = jnp.pad(INPUTS, rows, constant_values=junk)
    inside = jnp.pad(INSIDE, (before, after))
    bare, (bare_cell, bare_slope) = run(CELLS[kind], INPUTS, INSIDE)
    long, (cell, slope) = run(CELLS[kind], padded, inside)
    part = slice(before, before + 5)
    for a, b in zip(long, bare, strict=True):
        assert np.asarray(a)[part].tobytes() == np.asarray(b).tobytes()
        assert not np.any(np.asarray(a)[~np.asarray(inside)])
    # Nor a gradient, neither that of the inputs nor that of the weights.
    assert np.asarray(slope)[part].tobytes() == np.asarray(bare_slope).tobytes()
    assert np.all(np.asarray(slope)[~np.asarray(inside)] == 0)
    jax.tree.map(np.testing.assert_array_equal, cell, bare_cell)


def test_rows_outside_are_skipped_wherever_they_are(run):
    inside = jnp.array([True, False, True, True, False, True, False, True])
    spread = jnp.full((8, 2), jnp.nan).at[jnp.flatnonzero(inside)].set(INPUTS)
    out, _ = run(CELLS["gru"], spread, inside)
    bare, _ = run(CELLS["gru"], INPUTS, INSIDE)
    jax.tree.map(lambda a, b: np.testing.assert_array_equal(a[inside], b), out, bare)


def test_both_directions_stand_side_by_side():
    recurrence = Recurrence(2, 3, cell="lstm", key=jax.random.key(0), dtype=jnp.float32)
    inputs = INPUTS.astype(jnp.float32)
    out = recurrence(inputs, INSIDE)
    assert out.shape == (5, recurrence.outputs) == (5, 6) and out.dtype == jnp.float32
    np.testing.assert_array_equal(out[:, :3], recur(recurrence.forward, inputs, INSIDE))
    backward = recur(recurrence.backward, inputs[::-1], INSIDE)[::-1]
    np.testing.assert_array_equal(out[:, 3:], backward)


def test_errors(user_errors):
    cell = CELLS["gru"]
    with pytest.raises(ValueError, match="`cell` must be 'gru' or 'lstm'; got 'rnn'"):
        Recurrence(2, 3, cell="rnn", key=jax.random.key(0))  # pyright: ignore[reportArgumentType]
    with pytest.raises(ValueError, match=r"`inputs` must have shape \(time, input\) = \(any, 2\)"):
        recur(cell, INPUTS[:, :1], INSIDE)
    with pytest.raises(ValueError, match=r"`inputs` must have shape \(time, feature\).*vmap"):
        recur(cell, INPUTS[None], INSIDE)
    with pytest.raises(ValueError, match=r"`inside` must have shape \(time,\) = \(5,\)"):
        recur(cell, INPUTS, INSIDE[1:])
    with pytest.raises(TypeError, match="`inside` must be boolean"):
        recur(cell, INPUTS, INSIDE.astype(float))
    with pytest.raises(TypeError, match="`inputs` is float32 but `the weights of the cell`"):
        recur(cell, INPUTS.astype(jnp.float32), INSIDE)
