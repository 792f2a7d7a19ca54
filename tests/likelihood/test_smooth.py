"""The smoother, against regression on all data at once."""

import jax.numpy as jnp
import numpy as np

from oscillib.likelihood import gaussian_filter, readout_matrix, smooth, wide_start
from oscillib.observe import linear_readout


def test_equals_dense_regression(step, pair, dense, recording):
    times, values, mask = recording
    params, start = pair(), wide_start((2, 2), 0.7)
    out = smooth(
        gaussian_filter(
            step, linear_readout, params, values, mask, h=jnp.asarray(np.diff(times)), start=start
        )
    )
    mean, covariance = dense(params, start, times)
    matrix = np.asarray(readout_matrix(linear_readout, params.readout, start.mean))
    keep = mask.ravel()
    full = np.kron(np.eye(40), matrix)[keep]
    noise = np.tile(np.asarray(params.reading_noise), 40)[keep] ** 2
    expected = full @ mean + np.tile(np.asarray(params.readout.offset), 40)[keep]
    cross = covariance @ full.T
    gain = np.linalg.solve(full @ cross + np.diag(noise), cross.T).T
    data = np.asarray(values).ravel()[keep]
    np.testing.assert_allclose(
        out.means.ravel(), mean + gain @ (data - expected), rtol=0, atol=1e-10
    )
    spread = (covariance - gain @ cross.T).reshape(40, 4, 40, 4)
    k = np.arange(40)
    np.testing.assert_allclose(out.covariances, spread[k, :, k], rtol=0, atol=1e-10)
    np.testing.assert_allclose(out.lag_covariances, spread[k[1:], :, k[:-1]], rtol=0, atol=1e-10)


def test_without_noise_from_a_known_start_nothing_is_left_to_learn(step, pair, recording):
    import equinox as eqx

    _, values, mask = recording
    params = eqx.tree_at(lambda p: p.dynamics.noise, pair(1.0), jnp.zeros(2))
    start = wide_start((2, 2), 0.0)._replace(mean=jnp.full((2, 2), 0.4))
    found = gaussian_filter(step, linear_readout, params, values, mask, h=0.1, start=start)
    out = smooth(found)
    assert bool(out.finite)
    np.testing.assert_array_equal(out.means, found.predicted_means)
