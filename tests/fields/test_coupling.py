import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import Edges, received


RNG = np.random.default_rng(0)
DENSE = jnp.asarray(RNG.normal(size=(6, 6)) * (RNG.uniform(size=(6, 6)) < 0.4))
X = jnp.asarray(RNG.normal(size=(2, 6)))


@pytest.mark.parametrize("kind", ["additive", "diffusive"])
def test_sparse_equals_dense_in_value_and_derivative(kind):
    edges = Edges.from_matrix(DENSE)
    rate = jnp.asarray(RNG.normal(size=X.shape))
    value = lambda k, x: jnp.sum(rate * received(k, x, kind=kind))
    np.testing.assert_allclose(
        received(edges, X, kind=kind), received(DENSE, X, kind=kind), rtol=1e-13, atol=1e-13
    )
    gradient = jax.jit(jax.grad(value, argnums=(0, 1)))
    (k, x), (weight, y) = gradient(DENSE, X), gradient(edges, X)
    np.testing.assert_allclose(y, x, rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(weight.weight, k[edges.target, edges.source], rtol=1e-12, atol=1e-13)


def test_sum_by_hand():
    # Two edges from 0 to 1 add up; 2 has none.
    edges = Edges([0, 0, 1], [1, 1, 0], [1.0, 2.0, 5.0], nodes=3)
    x = jnp.array([[1.0, 10.0, 100.0]])
    np.testing.assert_allclose(received(edges, x), [[50.0, 3.0, 0.0]])
    np.testing.assert_allclose(received(edges, x, kind="diffusive"), [[45.0, -27.0, 0.0]])
    np.testing.assert_allclose(received(edges.matrix(), x, kind="diffusive"), [[45.0, -27.0, 0.0]])


def test_no_edges():
    edges = Edges([], [], [], nodes=2)
    np.testing.assert_array_equal(received(edges, jnp.ones((1, 2))), np.zeros((1, 2)))


def test_a_graph_compiles_once_for_all_weights_and_anew_for_another():
    traces = []

    @jax.jit
    def run(edges):
        traces.append(None)
        return received(edges, X)

    for weight in ([1.0, 2.0], [3.0, 4.0], np.array([5.0, 6.0])):
        run(Edges([0, 1], [1, 2], weight, nodes=6))
    assert len(traces) == 1
    run(Edges([0, 1], [1, 3], [1.0, 2.0], nodes=6))
    assert len(traces) == 2


@pytest.mark.parametrize(
    "make, error, match",
    [
        (lambda: Edges([0], [2], [1.0], nodes=2), ValueError, r"`target` must lie in 0 ... 1"),
        (lambda: Edges([-1], [0], [1.0], nodes=2), ValueError, "`source` must lie in"),
        (lambda: Edges([0, 1], [0], [1.0], nodes=2), ValueError, "`source` must have shape"),
        (lambda: Edges([0.5], [0], [1.0], nodes=2), TypeError, "`source` must hold node numbers"),
        (
            lambda: Edges([0], [0], [1.0], nodes=2.0),  # pyright: ignore[reportArgumentType]
            TypeError,
            "`nodes` must be a Python int",
        ),
        (lambda: received(DENSE, X[:, :3]), ValueError, "`coupling` must have shape"),
        (lambda: received(DENSE, X, kind="sum"), ValueError, "`kind` must be"),
        (
            lambda: received(Edges([0], [0], [1.0], nodes=2), X),
            ValueError,
            "`x` must have 2 nodes",
        ),
        (lambda: received(DENSE, X.astype(jnp.float32)), TypeError, "`x` is float32"),
        (lambda: jax.jit(Edges.from_matrix)(DENSE), TypeError, "`matrix` must be known"),
    ],
)
def test_errors(user_errors, make, error, match):
    with pytest.raises(error, match=match):
        make()
