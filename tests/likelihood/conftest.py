"""Networks, recordings and the dense Gaussian law that the tests of this room share."""

import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg
import scipy.stats

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_strang
from oscillib.likelihood import StateSpaceParams
from oscillib.observe import ReadoutParams


FIELD = HopfNetwork()


@pytest.fixture(scope="session")
def step():
    return noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)


@pytest.fixture(scope="session")
def pair():
    """Two coupled damped nodes, of which three channels read mixtures."""

    def make(saturation=0.0):
        field = HopfParams(
            [-0.3, -0.2], [6.0, 5.0], saturation=[saturation] * 2,
            coupling=[[0.0, 0.5], [0.2, 0.0]],
        )  # fmt: skip
        gain = [[1.0, 0.2], [-0.4, 0.9], [0.5, 0.5]]
        readout = ReadoutParams(gain, [0.1, 0.0, -0.2])
        return StateSpaceParams(NoisyParams(field, [0.3, 0.2]), readout, [0.2, 0.1, 0.3])

    return make


@pytest.fixture(scope="session")
def dense():
    """Joint law of all states of a linear network at given times, by matrix exponentials."""

    def make(params, start, times):
        matrix = np.asarray(FIELD.linear_matrix(params.dynamics.field))
        rate = np.diag(np.tile(np.asarray(params.dynamics.noise), 2) ** 2)
        size, count = len(matrix), len(times)
        block = lambda h: scipy.linalg.expm(
            h * np.block([[-matrix, rate], [np.zeros_like(rate), matrix.T]])
        )
        mean = [np.asarray(start.mean).ravel()]
        variance = [np.asarray(start.covariance)]
        for h in np.diff(times):
            whole = block(h)
            propagator = whole[size:, size:].T
            mean.append(propagator @ mean[-1])
            added = propagator @ whole[:size, size:]
            variance.append(propagator @ variance[-1] @ propagator.T + added)
        covariance = np.zeros((count, size, count, size))
        for j in range(count):
            for i in range(j, count):
                cross = scipy.linalg.expm((times[i] - times[j]) * matrix) @ variance[j]
                covariance[i, :, j], covariance[j, :, i] = cross, cross.T
        return np.concatenate(mean), covariance.reshape(count * size, count * size)

    return make


@pytest.fixture(scope="session")
def recording():
    """Forty irregular times and values for three channels, a fifth of them missing."""
    rng = np.random.default_rng(0)
    times = np.cumsum(rng.uniform(0.05, 0.4, 40))
    values = rng.normal(size=(40, 3))
    mask = rng.random((40, 3)) > 0.2
    mask[7] = False
    return times, jnp.asarray(np.where(mask, values, np.nan)), mask
