"""Time the Gaussian filter, beside statsmodels' own on the same linear network.

Run: `python benchmarks/filter.py`. Prints, for a small and a large network, milliseconds of the
log-likelihood and of its value and gradient (medians of several runs), their ratio, what compiling
took, and the memory that the compiled programs ask for. statsmodels computes the same
log-likelihood, which is checked before anything is timed.
"""

import time

import jax
import jax.numpy as jnp
import numpy as np
import statsmodels.api as sm

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import (
    NoisyParams,
    linear_transition,
    noisy_rollout,
    noisy_strang,
    planar_rate,
)
from oscillib.likelihood import StateSpaceParams, gaussian_filter, readout_matrix, wide_start
from oscillib.observe import ReadoutParams, linear_readout


REPEATS = 40
H, START = 0.1, 0.5
FIELD = HopfNetwork()
STEP = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)


def simulate(nodes: int, samples: int):
    """Return a damped linear network, a recording of it, and which samples are there."""
    rng = np.random.default_rng(0)
    coupling = rng.uniform(0, 0.3 / nodes, (nodes, nodes))
    field = HopfParams(
        rng.uniform(-0.4, -0.2, nodes), rng.uniform(5.5, 6.5, nodes),
        saturation=np.zeros(nodes), coupling=coupling - np.diag(np.diag(coupling)),
    )  # fmt: skip
    params = StateSpaceParams(
        NoisyParams(field, np.full(nodes, 0.3)), ReadoutParams(np.ones(nodes)), np.full(nodes, 0.1)
    )
    ys = noisy_rollout(
        STEP, params.dynamics, jnp.zeros((2, nodes)), H, samples + 99, key=jax.random.key(0)
    )
    values = np.asarray(ys[100:, 0]) + 0.1 * rng.standard_normal((samples, nodes))
    mask = rng.random((samples, nodes)) > 0.05
    return params, jnp.asarray(np.where(mask, values, np.nan)), mask


def statsmodels_filter(params, values):
    """Return the same model, ready for its `loglike` filter."""
    start = wide_start((2, values.shape[1]), START)
    size = start.mean.size
    matrix, rate = FIELD.linear_matrix(params.dynamics.field), planar_rate(params.dynamics.noise)
    propagator, covariance = linear_transition(matrix, rate, H)
    model = sm.tsa.statespace.MLEModel(np.asarray(values), k_states=size, k_posdef=size)
    model["design"] = np.asarray(readout_matrix(linear_readout, params.readout, start.mean))
    model["obs_cov"] = np.diag(np.asarray(params.reading_noise) ** 2)
    model["transition"], model["state_cov"] = np.asarray(propagator), np.asarray(covariance)
    model["selection"] = np.eye(size)
    model.initialize_known(np.zeros(size), np.asarray(start.covariance))
    return model.ssm


def times(*calls) -> np.ndarray:
    """Return the milliseconds of each call, `(round, call)`.

    The calls of a round follow one another, so that a machine that is busy for a while is so for
    all of them: medians over rounds, of times and of ratios, can be trusted.
    """
    found = np.zeros((REPEATS, len(calls)))
    for row in found:
        for k, call in enumerate(calls):
            begin = time.perf_counter()
            jax.block_until_ready(call())
            row[k] = time.perf_counter() - begin
    return 1e3 * found


def compiled(function, *arguments):
    """Return a compiled function, seconds of tracing and compiling, and megabytes it asks for."""
    begin = time.perf_counter()
    program = jax.jit(function).lower(*arguments).compile()
    seconds = time.perf_counter() - begin
    memory = program.memory_analysis()
    return program, seconds, memory.temp_size_in_bytes / 2**20


def compare(nodes: int, samples: int) -> None:
    params, values, mask = simulate(nodes, samples)
    start = wide_start((2, nodes), START)

    def log_likelihood(params):
        return gaussian_filter(
            STEP, linear_readout, params, values, mask, h=H, start=start
        ).log_likelihood

    value, value_seconds, value_memory = compiled(log_likelihood, params)
    both, both_seconds, both_memory = compiled(jax.value_and_grad(log_likelihood), params)
    theirs = statsmodels_filter(params, values)
    np.testing.assert_allclose(value(params), theirs.loglike(), rtol=1e-8)
    np.testing.assert_allclose(value(params), both(params)[0], rtol=1e-12)
    found = times(lambda: value(params), lambda: both(params), theirs.loglike)
    value_time, both_time, their_time = np.median(found, axis=0)
    count = sum(x.size for x in jax.tree.leaves(params))
    print(
        f"{nodes} channels, {samples} samples, {2 * nodes} states, {count} parameters\n"
        f"  log-likelihood {float(value(params)):.6f}, the same as statsmodels' to 1e-8\n"
        f"  value              {value_time:8.1f} ms  compiled in {value_seconds:.1f} s,"
        f" {value_memory:.1f} MiB\n"
        f"  value and gradient {both_time:8.1f} ms  compiled in {both_seconds:.1f} s,"
        f" {both_memory:.1f} MiB\n"
        f"  ratio              {np.median(found[:, 1] / found[:, 0]):8.2f}\n"
        f"  statsmodels value  {their_time:8.1f} ms, {their_time / value_time:.2f} times ours"
    )


def compare_many(nodes: int, samples: int, recordings: int) -> None:
    params, values, mask = simulate(nodes, samples)
    start = wide_start((2, nodes), START)
    batch = jnp.stack([values] * recordings)

    def log_likelihood(params):
        one = lambda values: (
            gaussian_filter(
                STEP, linear_readout, params, values, mask, h=H, start=start
            ).log_likelihood
        )
        return jnp.sum(jax.vmap(one)(batch))

    value, _, _ = compiled(log_likelihood, params)
    both, _, both_memory = compiled(jax.value_and_grad(log_likelihood), params)
    found = times(lambda: value(params), lambda: both(params))
    value_time, both_time = np.median(found, axis=0)
    print(
        f"{recordings} recordings of {nodes} channels, {samples} samples at once\n"
        f"  value              {value_time:8.1f} ms\n"
        f"  value and gradient {both_time:8.1f} ms, {both_memory:.1f} MiB\n"
        f"  ratio              {np.median(found[:, 1] / found[:, 0]):8.2f}"
    )


if __name__ == "__main__":
    jax.config.update("jax_enable_x64", True)
    compare(3, 1000)
    compare(31, 250)
    compare_many(3, 250, 32)
