import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting._block import (
    Rows,
    border_covariance,
    eliminate,
    reduce_border,
    solve_border,
    substitute,
    triangle,
)


WINDOWS, N, P, SAMPLES = 6, 2, 3, 5


def draw(seed):
    keys = jax.random.split(jax.random.key(seed), 3)
    jacobian = jax.random.normal(keys[0], (WINDOWS, SAMPLES, N + P + 1))
    ends = jax.random.normal(keys[1], (WINDOWS - 1, N, N + P))
    return jacobian, ends, jax.random.normal(keys[2], (WINDOWS - 1, N))


@jax.jit
def solve(jacobian, ends, gaps, weight, damping):
    rows = Rows(jax.vmap(lambda a: triangle(a, N))(jacobian), ends, gaps)
    weights = weight * jnp.broadcast_to(jnp.eye(N), (WINDOWS - 1, N, N))
    sweep = eliminate(rows, weights, weight * gaps, jnp.full((WINDOWS, N), damping))
    nothing = jnp.zeros((1, 0, 1)), jnp.zeros((0, P + 1))
    border = reduce_border(sweep.border[None], *nothing)
    shared = solve_border(border)[1]
    return substitute(sweep.pivots, shared), shared, border_covariance(border)[0]


def dense(jacobian, ends, gaps, weight, damping):
    """The same least squares as one matrix over (starts, parameters) and its right side."""
    size = WINDOWS * N + P
    blocks, right = [], []
    for k in range(WINDOWS):
        own = slice(k * N, (k + 1) * N)
        block = np.zeros((SAMPLES + N, size))
        block[:SAMPLES, own], block[:SAMPLES, -P:] = jacobian[k, :, :N], jacobian[k, :, N:-1]
        block[SAMPLES:, own] = damping * np.eye(N)
        blocks.append(block)
        right.append(np.concatenate([jacobian[k, :, -1], np.zeros(N)]))
        if k + 1 < WINDOWS:
            joint = np.zeros((N, size))
            joint[:, own], joint[:, -P:] = weight * ends[k, :, :N], weight * ends[k, :, N:]
            joint[:, (k + 1) * N : (k + 2) * N] = -weight * np.eye(N)
            blocks.append(joint)
            right.append(weight * gaps[k])
    return np.concatenate(blocks), np.concatenate(right)


@pytest.mark.parametrize("weight", [0.3, 30.0])
def test_equals_a_dense_least_squares(weight):
    problem = draw(0)
    starts, shared, covariance = solve(*problem, weight, 0.1)
    matrix, right = dense(*problem, weight, 0.1)
    expected = np.linalg.lstsq(matrix, -right)[0]
    np.testing.assert_allclose(starts.ravel(), expected[:-P], rtol=1e-10, atol=1e-12)
    np.testing.assert_allclose(shared, expected[-P:], rtol=1e-10)
    inverse = np.linalg.inv(matrix.T @ matrix)[-P:, -P:]
    np.testing.assert_allclose(covariance, inverse, rtol=1e-9, atol=1e-14)


def test_heavy_continuity_is_the_condensed_step():
    # Bock 1983: starts by the forward recursion from the first one and the parameters, and the
    # least squares over these alone.
    jacobian, ends, gaps = draw(1)
    to_start, constant = np.eye(N, N + P), np.zeros(N)
    everything, right = [], []
    for k in range(WINDOWS):
        through = np.concatenate([to_start, np.eye(N + P)[N:]])
        everything.append(jacobian[k, :, :-1] @ through)
        right.append(jacobian[k, :, :N] @ constant + jacobian[k, :, -1])
        if k + 1 < WINDOWS:
            constant = ends[k, :, :N] @ constant + gaps[k]
            to_start = ends[k] @ through
    matrix, right = np.concatenate(everything), np.concatenate(right)
    expected = np.linalg.lstsq(matrix, -right)[0]
    starts, shared, covariance = solve(jacobian, ends, gaps, 1e7, 0.0)
    np.testing.assert_allclose(starts[0], expected[:N], rtol=1e-8)
    np.testing.assert_allclose(shared, expected[N:], rtol=1e-8)
    inverse = np.linalg.inv(matrix.T @ matrix)[N:, N:]
    np.testing.assert_allclose(covariance, inverse, rtol=1e-8)


def test_own_and_shared_parameters_of_several_recordings():
    # Rows left for (own, shared, constant) of three recordings, two own and one shared parameter.
    border = jax.random.normal(jax.random.key(2), (3, 6, 4))
    own = jax.random.normal(jax.random.key(3), (3, 1, 3))
    shared = jax.random.normal(jax.random.key(4), (2, 2))
    reduced = reduce_border(border, own, shared)
    matrix, right = np.zeros((3 * 7 + 2, 7)), np.zeros(3 * 7 + 2)
    for r in range(3):
        at = slice(2 * r, 2 * r + 2)
        matrix[7 * r : 7 * r + 6, at], matrix[7 * r : 7 * r + 6, 6] = (
            border[r, :, :2],
            border[r, :, 2],
        )
        matrix[7 * r + 6, at] = own[r, 0, :2]
        right[7 * r : 7 * r + 6], right[7 * r + 6] = border[r, :, 3], own[r, 0, 2]
    matrix[-2:, 6], right[-2:] = shared[:, 0], shared[:, 1]
    expected = np.linalg.lstsq(matrix, -right)[0]
    found = solve_border(reduced)
    np.testing.assert_allclose(found[0].ravel(), expected[:6], rtol=1e-10)
    np.testing.assert_allclose(found[1], expected[6:], rtol=1e-10)
    inverse = np.linalg.inv(matrix.T @ matrix)
    for r in range(3):
        chosen = np.ix_([2 * r, 2 * r + 1, 6], [2 * r, 2 * r + 1, 6])
        np.testing.assert_allclose(border_covariance(reduced)[r], inverse[chosen], rtol=1e-9)


def test_nothing_to_fit_but_starts():
    border = reduce_border(jnp.ones((1, 4, 1)), jnp.zeros((1, 0, 1)), jnp.zeros((0, 1)))
    own, shared = solve_border(border)
    assert own.shape == (1, 0) and shared.shape == (0,)
    assert border_covariance(border).shape == (1, 0, 0)
