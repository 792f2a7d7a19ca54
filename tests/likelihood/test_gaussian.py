"""Beliefs carried through maps: Jacobians by blocks, cubature points."""

import jax
import jax.numpy as jnp
import numpy as np

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.likelihood import Gaussian, wide_start
from oscillib.likelihood._gaussian import (
    jacobian,
    local_blocks,
    pull_blocks,
    push_blocks,
    transport,
    whitener,
)


FLOW = HopfNetwork().saturation_flow(
    HopfParams([0.1, 0.2], [6.0, 5.0], shear=[0.3, -0.5]), jnp.asarray(0.7)
)
Y = jnp.array([[0.5, -0.3], [0.2, 0.9]])


def test_blocks_are_the_whole_jacobian_of_a_local_map():
    image, blocks = jax.jit(lambda y: local_blocks(FLOW, y))(Y)
    dense = jax.jit(lambda y: jacobian(FLOW, y))(Y)
    np.testing.assert_allclose(image, FLOW(Y), rtol=0, atol=1e-15)
    np.testing.assert_allclose(push_blocks(blocks, jnp.eye(4)), dense, rtol=0, atol=1e-15)
    np.testing.assert_allclose(pull_blocks(blocks, jnp.eye(4)), dense.T, rtol=0, atol=1e-15)
    np.testing.assert_allclose(
        dense, jax.jit(jax.jacrev(FLOW))(Y).reshape(4, 4), rtol=0, atol=1e-14
    )


def test_cubature_carries_the_mean_of_a_cubic_map_exactly():
    # E[x^3] = m^3 + 3 m v for a normal x.
    belief = Gaussian(jnp.array([[0.7]]), jnp.array([[0.2]]))
    carried, _ = transport(lambda y: y**3, belief, "cubature", local=False)
    np.testing.assert_allclose(carried.mean, [[0.7**3 + 3 * 0.7 * 0.2]], rtol=1e-14)


def test_both_ways_agree_on_narrow_beliefs():
    spread = 1e-6 * jnp.array(
        [[2.0, 0.3, 0.1, 0.0], [0.3, 1.0, 0.0, 0.2], [0.1, 0.0, 1.5, 0.4], [0.0, 0.2, 0.4, 3.0]]
    )
    belief = Gaussian(Y, spread)

    @jax.jit
    def carried(belief):
        by_jacobian, push = transport(FLOW, belief, "extended", local=True)
        by_points, regression = transport(FLOW, belief, "cubature", local=True)
        return by_jacobian, push(spread), by_points, regression(spread)

    by_jacobian, pushed, by_points, regressed = carried(belief)
    np.testing.assert_allclose(by_points.mean, by_jacobian.mean, atol=1e-5)
    np.testing.assert_allclose(by_points.covariance, by_jacobian.covariance, rtol=0, atol=1e-10)
    np.testing.assert_allclose(regressed, pushed, rtol=0, atol=1e-10)


def test_wide_start_takes_the_precision_of_its_scale():
    assert wide_start((2, 3), jnp.float32(2.0)).covariance.dtype == jnp.float32


def test_whitener_and_its_derivatives():
    root = jnp.array([[2.0, 0.0, 0.0], [0.3, 1.0, 0.0], [-0.5, 0.7, 0.4]])
    covariance, change = root @ root.T, jnp.array([[0.3, 0.1, 0.2], [0.1, -0.4, 0.0], [0.2, 0, 1]])
    white = whitener(covariance)
    np.testing.assert_allclose(white, jnp.linalg.inv(root), rtol=0, atol=1e-14)
    along = lambda e: jax.jvp(whitener, (covariance + e * change,), (change,))
    numeric = (along(1e-6)[0] - along(-1e-6)[0]) / 2e-6
    np.testing.assert_allclose(along(0.0)[1], numeric, rtol=1e-7, atol=1e-9)
    second = jax.jvp(lambda e: along(e)[1], (0.0,), (1.0,))[1]
    numeric = (along(1e-6)[1] - along(-1e-6)[1]) / 2e-6
    np.testing.assert_allclose(second, numeric, rtol=1e-6, atol=1e-8)
    assert bool(jnp.all(jnp.isnan(whitener(-covariance))[-1]))
