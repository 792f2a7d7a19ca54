import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg

from oscillib.fields._exponential import expm


RNG = np.random.default_rng(0)


@pytest.fixture(scope="module")
def exponential():
    return jax.jit(expm)


@pytest.mark.parametrize("norm", [0.0, 1e-8, 0.49, 0.51, 3.0, 30.0, 300.0])
def test_agrees_with_scipy(exponential, norm):
    matrix = RNG.normal(size=(6, 6))
    matrix *= norm / np.abs(matrix).sum(axis=0).max()
    expected = scipy.linalg.expm(matrix)
    out = exponential(jnp.asarray(matrix))
    # Squaring doubles the rounding, as often as the norm has been halved.
    tolerance = 1e-15 * max(1, norm) * np.abs(expected).max()
    np.testing.assert_allclose(out, expected, rtol=0, atol=3 * tolerance)


def test_rotation_by_many_turns(exponential):
    turn = 2 * np.pi * 1000 + 0.5
    out = exponential(jnp.array([[0.0, -turn], [turn, 0.0]]))
    expected = [[np.cos(0.5), -np.sin(0.5)], [np.sin(0.5), np.cos(0.5)]]
    np.testing.assert_allclose(out, expected, rtol=0, atol=1e-11)


@pytest.mark.parametrize("norm", [0.1, 5.0])
def test_derivatives_agree_with_scipy(norm):
    matrix, along = RNG.normal(size=(2, 4, 4))
    matrix *= norm / np.abs(matrix).sum(axis=0).max()
    weights = RNG.normal(size=(4, 4))
    loss = lambda m: jnp.sum(jnp.asarray(weights) * expm(m))
    primal, tangent = jnp.asarray(matrix), jnp.asarray(along)
    both = jax.jit(lambda m, v: jax.jvp(jax.grad(loss), (m,), (v,)))
    gradient, hessian = both(primal, tangent)
    frechet = lambda m: np.asarray(scipy.linalg.expm_frechet(m, along, compute_expm=False))
    np.testing.assert_allclose(np.sum(gradient * along), np.sum(weights * frechet(matrix)), 1e-11)
    e = 1e-5
    second = (frechet(matrix + e * along) - frechet(matrix - e * along)) / (2 * e)
    np.testing.assert_allclose(np.sum(hessian * along), np.sum(weights * second), 1e-6)


def test_zero_matrix_has_derivatives():
    slope = jax.jacfwd(expm)(jnp.zeros((2, 2)))
    np.testing.assert_array_equal(slope, jnp.eye(4).reshape(2, 2, 2, 2))


def test_not_finite_where_it_cannot_be_told(exponential):
    # Angles beyond half a million radians have lost what would be returned.
    assert jnp.all(jnp.isnan(exponential(jnp.full((6, 6), 1e6))))
    assert jnp.all(jnp.isnan(exponential(jnp.full((6, 6), jnp.nan))))


def test_no_batched_solve():
    # Several batched solves in one program wait for each other's threads for ever on two cores.
    text = jax.jit(jax.vmap(jax.grad(lambda m: jnp.sum(expm(m))))).lower(jnp.ones((3, 2, 2)))
    assert "custom_call" not in text.as_text()
