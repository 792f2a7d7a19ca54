import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import (
    CorrectedParams,
    Correction,
    VanDerPolParams,
    corrected,
    van_der_pol,
)


FIELD = corrected(van_der_pol)
VDP = VanDerPolParams([1.0, 2.0, 3.0])
START = Correction(2, key=jax.random.key(0))
Y = jnp.asarray(np.random.default_rng(0).normal(size=(2, 3)))


def test_zero_at_the_start_yet_trainable():
    params = CorrectedParams(VDP, START)
    np.testing.assert_array_equal(FIELD(0.0, Y, params), van_der_pol(0.0, Y, VDP))
    loss = lambda c: jnp.sum((FIELD(0.0, Y, CorrectedParams(VDP, c)) - 1) ** 2)
    gradient = jax.jit(jax.grad(loss))(params.correction)
    assert jnp.any(gradient.layers[-1].weight != 0)


def test_learns_a_missing_term():
    # The known field lacks a linear friction 0.5 v; gradient descent on the last layers finds it.
    rng = np.random.default_rng(1)
    y = jnp.asarray(rng.uniform(-1, 1, size=(2, 200)))
    missing = jnp.stack([jnp.zeros(200), -0.5 * y[1]])
    start = Correction(2, width=8, depth=1, key=jax.random.key(0))
    loss = lambda c: jnp.mean((c(y) - missing) ** 2)

    @jax.jit
    def train(c):
        descend = lambda _, c: jax.tree.map(lambda x, g: x - 0.3 * g, c, jax.grad(loss)(c))
        return loss(c), loss(jax.lax.fori_loop(0, 1000, descend, c))

    before, after = train(start)
    assert after < 0.02 * before


def test_nodes_share_the_correction():
    correction = START
    moved = jax.tree.map(lambda x: x + 0.1, correction)
    order = np.array([2, 0, 1])
    np.testing.assert_allclose(moved(Y[:, order]), moved(Y)[:, order], rtol=1e-14)


def test_precision():
    correction = Correction(2, key=jax.random.key(0), dtype=jnp.float32)
    out = jax.eval_shape(correction, jax.ShapeDtypeStruct((2, 3), jnp.float32))
    assert out.dtype == jnp.float32


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`width` must be at least 1"):
        Correction(2, width=0, key=jax.random.key(0))
    with pytest.raises(ValueError, match=r"`y` must have shape \(component, node\) = \(3, any\)"):
        FIELD(0.0, Y, CorrectedParams(VDP, Correction(3, key=jax.random.key(0))))
    with pytest.raises(ValueError, match=r"`params.correction\(y\)` must have shape"):
        FIELD(0.0, Y, CorrectedParams(VDP, lambda y: y[:1]))
