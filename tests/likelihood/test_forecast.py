"""Forecasts: exact for linear networks, honest bands for a noisy rhythm."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_rollout
from oscillib.likelihood import (
    Gaussian,
    StateSpaceParams,
    forecast,
    gaussian_filter,
    readout_matrix,
    wide_start,
)
from oscillib.observe import ReadoutParams, linear_readout


FIELD = HopfNetwork()


def test_equals_the_dense_law_of_a_linear_network(step, pair, dense):
    params = pair()
    origin = Gaussian(jnp.array([[0.5, -0.2], [0.1, 0.3]]), wide_start((2, 2), 0.3).covariance)
    h = jnp.array([0.1, 0.5, 0.2])
    batch = Gaussian(origin.mean[None], origin.covariance[None])
    out = forecast(step, linear_readout, params, batch, 3, h=h)
    mean, covariance = dense(params, origin, [0.0, 0.1, 0.6, 0.8])
    matrix = np.asarray(readout_matrix(linear_readout, params.readout, origin.mean))
    for k in range(3):
        at = slice(4 * k + 4, 4 * k + 8)
        expected = matrix @ mean[at] + np.asarray(params.readout.offset)
        np.testing.assert_allclose(out.means[0, k], expected, rtol=0, atol=1e-12)
        spread = np.diag(matrix @ covariance[at, at] @ matrix.T) + params.reading_noise**2
        np.testing.assert_allclose(out.variances[0, k], spread, rtol=0, atol=1e-12)


def test_one_step_ahead_is_what_the_filter_predicts(step, pair, recording):
    _, values, mask = recording
    params = pair(1.0)
    found = gaussian_filter(
        step, linear_readout, params, values, mask, h=0.1, start=wide_start((2, 2), 0.7)
    )
    origins = Gaussian(found.means[:-1], found.covariances[:-1])
    out = forecast(step, linear_readout, params, origins, 2, h=0.1)
    np.testing.assert_allclose(out.means[:, 0], found.channel_means[1:], rtol=0, atol=1e-12)
    np.testing.assert_allclose(out.variances[:, 0], found.channel_variances[1:], rtol=0, atol=1e-12)
    assert bool(jnp.all(out.finite))


@pytest.mark.parametrize("method", ["extended", "cubature"])
def test_bands_cover_a_noisy_rhythm(step, method):
    params = StateSpaceParams(
        NoisyParams(HopfParams([0.4], [6.0]), [0.15]), ReadoutParams([1.0]), [0.1]
    )

    @jax.jit
    def covered(key):
        noise, reading = jax.random.split(key)
        ys = noisy_rollout(step, params.dynamics, jnp.array([[0.6], [0.0]]), 0.1, 279, key=noise)
        values = ys[:, 0] + 0.1 * jax.random.normal(reading, (280, 1))
        out = gaussian_filter(
            step, linear_readout, params, values, jnp.ones_like(values, bool), h=0.1,
            start=wide_start((2, 1), 0.5), method=method,
        )  # fmt: skip
        chosen = jnp.arange(50, 260, 10)
        origins = Gaussian(out.means[chosen], out.covariances[chosen])
        ahead = forecast(step, linear_readout, params, origins, 20, h=0.1, method=method)
        truth = values[chosen[:, None] + jnp.arange(1, 21)[None]]
        return jnp.mean(jnp.abs(truth - ahead.means) < 1.645 * jnp.sqrt(ahead.variances), axis=0)

    share = jax.vmap(covered)(jax.random.split(jax.random.key(0), 40))
    share = np.asarray(jnp.mean(share, axis=0))[:, 0]
    # 840 origins a horizon, correlated within a recording.
    assert np.all(np.abs(share - 0.9) < 0.05)


@pytest.mark.usefixtures("user_errors")
def test_messages(step, pair):
    good = Gaussian(jnp.zeros((5, 2, 2)), jnp.zeros((5, 4, 4)))
    with pytest.raises(ValueError, match=r"`origins\.covariance` must have shape"):
        forecast(step, linear_readout, pair(), Gaussian(good.mean, good.covariance[0]), 3, h=0.1)
    with pytest.raises(ValueError, match="`horizon` must be at least 1"):
        forecast(step, linear_readout, pair(), good, 0, h=0.1)
