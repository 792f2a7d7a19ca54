"""The noise of a joint: exact for linear networks; one-sample windows are Kalman smoothing."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import (
    NoisyParams,
    cut,
    linear_transition,
    noisy_rollout,
    planar_rate,
    roll_windows,
    without_noise,
)
from oscillib.likelihood import gaussian_filter, joint_noise, smooth, wide_start
from oscillib.losses import continuity, reconstruction
from oscillib.observe import linear_readout


FIELD = HopfNetwork()


def test_exact_for_a_linear_network_also_at_irregular_times(step, pair):
    dynamics = pair().dynamics
    times = jnp.array([0.0, 0.1, 0.4, 0.5, 0.9, 1.0, 1.3])
    windows = cut(times, 2)
    rolled = roll_windows(without_noise(step), dynamics, jnp.ones((3, 2, 2)), windows)
    joint = joint_noise(step, dynamics, rolled.states, windows)
    matrix, rate = FIELD.linear_matrix(dynamics.field), planar_rate(dynamics.noise)
    for k, length in enumerate((0.4, 0.5)):
        covariance = linear_transition(matrix, rate, length)[1]
        np.testing.assert_allclose(joint.covariance[k], covariance, rtol=0, atol=1e-14)
        np.testing.assert_allclose(joint.precision[k] @ covariance, np.eye(4), rtol=0, atol=1e-10)
        log_volume = np.linalg.slogdet(2 * np.pi * covariance)[1] / 2
        np.testing.assert_allclose(joint.log_volume[k], log_volume, rtol=1e-12)


def test_matches_the_spread_of_simulated_windows(step):
    params = NoisyParams(HopfParams([0.3], [6.0], shear=[0.5]), [0.02])
    start = jnp.array([[0.5], [0.0]])
    windows = cut(0.1 * jnp.arange(21.0), 10)
    rolled = roll_windows(without_noise(step), params, jnp.stack([start, start]), windows)
    joint = joint_noise(step, params, rolled.states, windows)
    one = lambda key: noisy_rollout(step, params, start, 0.1, 10, key=key)[-1].ravel()
    ends = np.asarray(jax.jit(jax.vmap(one))(jax.random.split(jax.random.key(0), 20_000)))
    np.testing.assert_allclose(joint.covariance[0], np.cov(ends.T), rtol=0.06, atol=1e-5)


@pytest.mark.long
def test_one_sample_windows_are_kalman_smoothing(step, pair):
    params, h = pair(), 0.1
    rng = np.random.default_rng(0)
    values, mask = jnp.asarray(rng.normal(size=(15, 3))), rng.random((15, 3)) > 0.2
    start = wide_start((2, 2), 0.7)
    windows = cut(h * jnp.arange(15.0), 1)
    quiet = without_noise(step)

    def loss(flat):
        # A window holds one step: its start is free, and the last window's end is the last state.
        states = flat.reshape(15, 2, 2)
        rolled = roll_windows(quiet, params.dynamics, states[:-1], windows)
        joint = joint_noise(step, params.dynamics, rolled.states, windows)
        # All gaps of this recording have one length, so the last joint's precision is the first's.
        gaps = rolled.ends - states[1:]
        seen = jax.vmap(lambda y: linear_readout(y, params.readout))(states)
        prior = (states[0] - start.mean).ravel()
        return (
            continuity(gaps, precision=joint.precision[0])
            + reconstruction(seen, values, mask, scale=params.reading_noise)
            + prior @ jnp.linalg.solve(start.covariance, prior) / 2
        )

    # The loss is quadratic: one Newton step from anywhere reaches its minimum.
    zero = jnp.zeros(60)
    slopes = jax.jit(jax.vmap(jax.grad(loss)))(jnp.concatenate([zero[None], jnp.eye(60)]))
    gradient, hessian = slopes[0], slopes[1:] - slopes[:1]
    found = -jnp.linalg.solve(hessian, gradient).reshape(15, 2, 2)
    smoothed = smooth(gaussian_filter(step, linear_readout, params, values, mask, h=h, start=start))
    np.testing.assert_allclose(found, smoothed.means, rtol=0, atol=1e-8)
    # Its inverse curvature is the smoother's covariance.
    spread = jnp.linalg.inv(hessian).reshape(15, 4, 15, 4)
    k = np.arange(15)
    np.testing.assert_allclose(spread[k, :, k], smoothed.covariances, rtol=0, atol=1e-8)


def test_weight_grows_without_bound_as_the_noise_vanishes(step):
    windows = cut(0.1 * jnp.arange(5.0), 2)
    states = jnp.full((2, 3, 2, 1), 0.3)
    precision = lambda s: (
        joint_noise(step, NoisyParams(HopfParams([0.2], [6.0]), [s]), states, windows).precision
    )
    np.testing.assert_allclose(precision(1e-3), 1e4 * precision(1e-1), rtol=1e-9)
    assert not bool(jnp.all(jnp.isfinite(precision(0.0))))
