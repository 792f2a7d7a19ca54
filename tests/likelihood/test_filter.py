"""The Gaussian filter: exact for linear networks, safe, differentiable, blind to masked entries."""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats

from oscillib.evaluate import portmanteau
from oscillib.fields import HopfNetwork, HopfParams, LinearNetwork, LinearParams
from oscillib.integrate import (
    NoisyParams,
    euler_maruyama,
    linear_transition,
    noisy_rollout,
    noisy_strang,
    planar_rate,
    rk4,
    split_noise,
)
from oscillib.likelihood import (
    Gaussian,
    StateSpaceParams,
    gaussian_filter,
    readout_matrix,
    smooth,
    stationary_start,
    wide_start,
)
from oscillib.observe import ReadoutParams, linear_readout


FIELD = HopfNetwork()


@pytest.fixture(scope="module")
def filtering(step):
    def one(params, values, mask, h, start):
        return gaussian_filter(step, linear_readout, params, values, mask, h=h, start=start)

    return jax.jit(one)


def seen(params, values, mask, mean, covariance):
    """Mean and covariance of the observed entries, and their values, from the states' law."""
    matrix = np.asarray(readout_matrix(linear_readout, params.readout, jnp.zeros((2, 2))))
    full = np.kron(np.eye(len(values)), matrix)
    expected = full @ mean + np.tile(np.asarray(params.readout.offset), len(values))
    noise = np.tile(np.asarray(params.reading_noise), len(values)) ** 2
    total = full @ covariance @ full.T + np.diag(noise)
    keep = np.asarray(mask).ravel()
    return expected[keep], total[np.ix_(keep, keep)], np.asarray(values).ravel()[keep], full[keep]


def test_published_style_check_values(step):
    # Multivariate normal density with covariance P0 e^(a lag) cos(w lag); statsmodels agrees.
    values = jnp.array([0.31, 0.52, 0.27, -0.11, -0.44, -0.38, 0.05, 0.36])[:, None]
    field = HopfParams([-0.2], [2 * np.pi * 0.05], saturation=[0.0])
    params = StateSpaceParams(NoisyParams(field, [0.3]), ReadoutParams([1.0]), [0.1])
    start = stationary_start(FIELD.linear_matrix(field), planar_rate(jnp.array([0.3])), (2, 1))
    out = gaussian_filter(
        step, linear_readout, params, values, jnp.ones_like(values, bool), h=1.0, start=start
    )
    np.testing.assert_allclose(out.log_likelihood, -1.42235448638, rtol=0, atol=1e-10)
    np.testing.assert_allclose(smooth(out).means[4, 0, 0], -0.410243850916, rtol=0, atol=1e-10)


def test_equals_the_dense_normal_with_missing_samples_at_irregular_times(
    filtering, pair, dense, recording
):
    times, values, mask = recording
    params, start = pair(), wide_start((2, 2), 0.7)
    out = filtering(params, values, mask, jnp.asarray(np.diff(times)), start)
    mean, covariance = dense(params, start, times)
    expected, total, data, full = seen(params, values, mask, mean, covariance)
    density = scipy.stats.multivariate_normal(expected, total).logpdf(data)
    np.testing.assert_allclose(out.log_likelihood, density, rtol=1e-10)
    np.testing.assert_allclose(jnp.sum(out.contributions), out.log_likelihood, rtol=1e-13)
    # The last filtered state has seen everything: ordinary regression on all the data.
    cross = covariance[-4:] @ full.T
    last = mean[-4:] + cross @ np.linalg.solve(total, data - expected)
    np.testing.assert_allclose(out.means[-1].ravel(), last, rtol=0, atol=1e-10)
    spread = covariance[-4:, -4:] - cross @ np.linalg.solve(total, cross.T)
    np.testing.assert_allclose(out.covariances[-1], spread, rtol=0, atol=1e-10)
    # Whitened residuals carry the whole quadratic form, and nothing where nothing was seen.
    quadratic = (data - expected) @ np.linalg.solve(total, data - expected)
    np.testing.assert_allclose(jnp.sum(out.residuals**2), quadratic, rtol=1e-10)
    assert not np.any(np.asarray(out.residuals)[~mask])


def test_local_level_of_the_nile():
    # Annual flow 1871-1970 as a random walk seen through noise. At the variances 15,099 and 1,469.1
    # (Durbin & Koopman 2012, section 2.10, from memory) the likelihood of all but the first value,
    # which a vague start takes up, is -632.5456 (seen in public tests).
    from statsmodels.datasets import nile

    table: Any = nile.load_pandas().data
    values = jnp.asarray(table["volume"].to_numpy(float))[:, None]
    field = LinearNetwork()
    step = noisy_strang(field.saturation_flow, field.linear_matrix, rate=field.noise_rate)
    walk = NoisyParams(LinearParams.relaxing([0.0]), jnp.sqrt(jnp.array([[1469.1]])))
    params = StateSpaceParams(walk, ReadoutParams([1.0]), jnp.sqrt(jnp.array([15099.0])))
    out = gaussian_filter(
        step, linear_readout, params, values, jnp.ones_like(values, bool), h=1.0,
        start=wide_start((1, 1), 1e6),
    )  # fmt: skip
    assert abs(jnp.sum(out.contributions[1:]) + 632.5456) < 1e-4


@pytest.mark.parametrize("missing", [False, True])
def test_equals_statsmodels(filtering, pair, missing):
    import statsmodels.api as sm

    params, h = pair(), 0.1
    rng = np.random.default_rng(1)
    values = rng.normal(size=(60, 3))
    mask = rng.random((60, 3)) > 0.3 if missing else np.ones((60, 3), bool)
    matrix = FIELD.linear_matrix(params.dynamics.field)
    rate = planar_rate(params.dynamics.noise)
    start = stationary_start(matrix, rate, (2, 2))
    propagator, covariance = linear_transition(matrix, rate, h)
    model = sm.tsa.statespace.MLEModel(np.where(mask, values, np.nan), k_states=4, k_posdef=4)
    model["design"] = np.asarray(readout_matrix(linear_readout, params.readout, start.mean))
    model["obs_intercept"] = np.asarray(params.readout.offset)[:, None]
    model["obs_cov"] = np.diag(np.asarray(params.reading_noise) ** 2)
    model["transition"], model["state_cov"] = np.asarray(propagator), np.asarray(covariance)
    model["selection"] = np.eye(4)
    model.initialize_known(np.zeros(4), np.asarray(start.covariance))
    model.ssm.tolerance = 0  # else its filter freezes once it has nearly converged
    theirs: Any = model.ssm.smooth()
    ours = filtering(params, jnp.asarray(values), mask, jnp.asarray(h), start)
    np.testing.assert_allclose(ours.log_likelihood, theirs.llf, rtol=1e-8)
    filtered = ours.means.reshape(60, 4).T
    np.testing.assert_allclose(filtered, theirs.filtered_state, rtol=0, atol=1e-9)
    smoothed = smooth(ours)
    np.testing.assert_allclose(
        smoothed.means.reshape(60, 4).T, theirs.smoothed_state, rtol=0, atol=1e-9
    )
    np.testing.assert_allclose(
        jnp.moveaxis(smoothed.covariances, 0, -1), theirs.smoothed_state_cov, atol=1e-9
    )


@pytest.fixture(scope="module")
def value_and_gradient(step):
    def loss(params, values, mask, h, start):
        return gaussian_filter(
            step, linear_readout, params, values, mask, h=h, start=start
        ).log_likelihood

    return jax.jit(jax.value_and_grad(loss, argnums=(0, 4)))


def test_gradient_against_central_differences(value_and_gradient, pair, recording):
    times, values, mask = recording
    h = jnp.asarray(np.diff(times))
    params, start = pair(1.0), wide_start((2, 2), 0.7)
    _, gradient = value_and_gradient(params, values, mask, h, start)
    leaves, structure = jax.tree.flatten((params, start))
    rng = np.random.default_rng(2)
    for _ in range(3):
        direction = [jnp.asarray(rng.normal(size=x.shape)) for x in leaves]
        # Only the symmetric part of a covariance has a meaning.
        direction[-1] = (direction[-1] + direction[-1].T) / 2

        def at(e, direction=direction):
            moved = [x + e * d for x, d in zip(leaves, direction, strict=True)]
            return value_and_gradient(
                *(lambda p, s: (p, values, mask, h, s))(*jax.tree.unflatten(structure, moved))
            )[0]

        numeric = (at(1e-5) - at(-1e-5)) / 2e-5
        slope = sum(
            jnp.sum(g * d) for g, d in zip(jax.tree.leaves(gradient), direction, strict=True)
        )
        np.testing.assert_allclose(slope, numeric, rtol=1e-6)


def test_masked_entries_change_nothing_by_a_single_bit(value_and_gradient, pair, recording):
    times, values, mask = recording
    h = jnp.asarray(np.diff(times))
    start = wide_start((2, 2), 0.7)
    first = value_and_gradient(pair(1.0), values, mask, h, start)
    other = jnp.where(mask, values, 1e30)
    second = value_and_gradient(pair(1.0), other, mask, h, start)
    jax.tree.map(np.testing.assert_array_equal, first, second)
    assert all(bool(jnp.all(jnp.isfinite(x))) for x in jax.tree.leaves(first))


def test_gradient_at_zero_noise_is_finite(value_and_gradient, pair, recording):
    import equinox as eqx

    times, values, mask = recording
    params = eqx.tree_at(lambda p: p.dynamics.noise, pair(1.0), jnp.zeros(2))
    value, gradient = value_and_gradient(
        params, values, mask, jnp.asarray(np.diff(times)), wide_start((2, 2), 0.7)
    )
    assert bool(jnp.isfinite(value))
    assert all(bool(jnp.all(jnp.isfinite(x))) for x in jax.tree.leaves(gradient))


@pytest.mark.long
def test_second_derivative(step):
    values = jnp.sin(jnp.arange(12.0))[:, None]

    def loss(x):
        field = HopfParams(x[:1], jnp.array([6.0]))
        params = StateSpaceParams(NoisyParams(field, x[1:2]), ReadoutParams(jnp.ones(1)), x[2:])
        return gaussian_filter(
            step, linear_readout, params, values, values < 2, h=0.1,
            start=wide_start((2, 1), 1.0),
        ).log_likelihood  # fmt: skip

    x = jnp.array([-0.2, 0.3, 0.2])
    direction = jnp.array([1.0, 0.5, -0.7])
    along = jax.jit(lambda x: jax.jvp(jax.grad(loss), (x,), (direction,)))
    ahead, behind = along(x + 1e-5 * direction)[0], along(x - 1e-5 * direction)[0]
    np.testing.assert_allclose(along(x)[1], (ahead - behind) / 2e-5, rtol=1e-5)


def runner(recording, step, **options):
    """Compile the log-likelihood, as a function of the parameters."""
    _, values, mask = recording
    start = wide_start((2, 2), 0.4)
    return jax.jit(
        lambda params: (
            gaussian_filter(
                step, linear_readout, params, values, mask, h=0.1, start=start, **options
            ).log_likelihood
        )
    )


def test_methods_locality_and_segments_agree_where_they_must(pair, recording, step):
    linear, bent = pair(), pair(0.5)
    run = runner(recording, step)
    by_points = runner(recording, step, method="cubature")
    np.testing.assert_allclose(by_points(linear), run(linear), rtol=1e-11)
    # They differ on a bent network, by little while beliefs are narrow.
    assert 1e-7 < abs(by_points(bent) / run(bent) - 1) < 0.02
    pieces = runner(recording, step, segment=7)
    np.testing.assert_allclose(pieces(bent), run(bent), rtol=1e-12)
    whole = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix, local=False)
    np.testing.assert_allclose(runner(recording, whole)(bent), run(bent), rtol=1e-11)


def test_substeps_and_any_step_of_the_users_own(pair, recording, step):
    linear, bent = pair(), pair(0.5)
    fine = runner(recording, step, substeps=8)
    np.testing.assert_allclose(fine(linear), runner(recording, step)(linear), rtol=1e-11)
    other = runner(recording, split_noise(rk4(FIELD)), substeps=8)
    np.testing.assert_allclose(other(bent), fine(bent), rtol=1e-3)
    # Euler-Maruyama at the sampling interval describes another system.
    assert runner(recording, euler_maruyama(FIELD))(bent) < fine(bent) - 1


def test_vmap_over_recordings(filtering, pair, recording):
    times, values, mask = recording
    h, start = jnp.asarray(np.diff(times)), wide_start((2, 2), 0.7)
    both = jnp.stack([values, 2 * values])
    out = jax.vmap(filtering, (None, 0, None, None, None))(pair(1.0), both, mask, h, start)
    for k in range(2):
        one = filtering(pair(1.0), both[k], mask, h, start)
        np.testing.assert_allclose(out.log_likelihood[k], one.log_likelihood, rtol=1e-12)


def test_single_precision_with_hardly_any_reading_noise_stays_positive(step, pair, recording):
    import equinox as eqx

    _, values, mask = recording
    params = eqx.tree_at(lambda p: p.reading_noise, pair(1.0), jnp.full(3, 1e-3))
    cast = lambda tree: jax.tree.map(lambda x: x.astype(jnp.float32), tree)
    out = gaussian_filter(
        step, linear_readout, cast(params), cast(values), mask, h=0.1,
        start=cast(wide_start((2, 2), 1.0)),
    )  # fmt: skip
    assert out.log_likelihood.dtype == jnp.float32
    assert bool(out.finite)
    least = np.linalg.eigvalsh(np.asarray(out.covariances, np.float64)).min(axis=1)
    assert np.all(least > -1e-9)


def test_a_blow_up_is_no_success(filtering, pair, recording):
    times, values, mask = recording
    h = jnp.asarray(np.diff(times))
    assert not bool(filtering(pair(-5.0), values, mask, h, wide_start((2, 2), 3.0)).finite)


@pytest.mark.usefixtures("user_errors")
def test_messages(step, pair, recording):
    _, values, mask = recording
    start = wide_start((2, 2), 1.0)
    run = lambda values=values, mask=mask, start=start, **k: gaussian_filter(
        step, linear_readout, pair(), values, mask, **{"h": 0.1, "start": start, **k}
    )
    with pytest.raises(ValueError, match=r"`values` must have shape \(time, channel\)"):
        run(values=values[:, :2])
    with pytest.raises(TypeError, match="`mask` must be boolean"):
        run(mask=jnp.ones(mask.shape))
    with pytest.raises(ValueError, match=r"`h` must have shape \(time - 1,\)"):
        run(h=jnp.ones(40))
    with pytest.raises(ValueError, match="`method` must be 'extended' or 'cubature'"):
        run(method="unscented")
    with pytest.raises(ValueError, match=r"`start\.covariance` must have shape"):
        run(start=Gaussian(start.mean, jnp.eye(3)))
    with pytest.raises(TypeError, match=r"`start\.covariance` is float32"):
        run(start=Gaussian(start.mean, jnp.eye(4, dtype=jnp.float32)))


def p_values(residuals):
    """P-values of Ljung & Box 1978, 20 lags, for each recording `(recording, time)`."""
    columns = jnp.asarray(residuals).T
    return np.asarray(portmanteau(columns, jnp.ones_like(columns, dtype=bool), lags=20).p_value)


def residuals_of_simulated_recordings(step, truth, model, *, recordings, samples, method):
    """Whitened residuals `(recording, time)` of `model` on recordings made by `truth`."""

    def one(key):
        noise, reading = jax.random.split(key)
        warm = 100
        ys = noisy_rollout(
            step, truth.dynamics, jnp.array([[0.1], [0.0]]), 0.05, 2 * (warm + samples) - 1,
            key=noise,
        )[2 * warm :: 2]  # fmt: skip
        error = truth.reading_noise[None] * jax.random.normal(reading, (samples, 1))
        values = jax.vmap(lambda y: linear_readout(y, truth.readout))(ys) + error
        out = gaussian_filter(
            step, linear_readout, model, values, jnp.ones_like(values, bool), h=0.1,
            start=wide_start((2, 1), 0.5), method=method,
        )  # fmt: skip
        # The wide start needs some samples to be forgotten.
        return out.residuals[20:, 0]

    keys = jax.random.split(jax.random.key(11), recordings)
    return np.asarray(jax.jit(jax.vmap(one))(keys))


def unit(a, w, s):
    dynamics = NoisyParams(HopfParams([a], [w]), [s])
    return StateSpaceParams(dynamics, ReadoutParams([1.0]), [0.1])


@pytest.mark.parametrize(
    ("recordings", "samples", "method"),
    [
        (100, 300, "extended"),
        pytest.param(1000, 1000, "extended", marks=pytest.mark.long),
        pytest.param(1000, 1000, "cubature", marks=pytest.mark.long),
    ],
)
def test_whitened_residuals_pass_a_portmanteau_test_at_its_nominal_rate(
    step, recordings, samples, method
):
    truth = unit(0.2, 6.0, 0.2)
    options = {"recordings": recordings, "samples": samples, "method": method}
    right = residuals_of_simulated_recordings(step, truth, truth, **options)
    rejected = int(np.sum(p_values(right) < 0.05))
    print(f"rejected at 5 percent: {rejected} of {recordings}")
    low, high = scipy.stats.binom(recordings, 0.05).interval(0.999)
    assert low <= rejected <= high
    assert abs(np.mean(right**2) - 1) < 0.03
    # The same recordings, filtered with a frequency 15 percent too high.
    wrong = residuals_of_simulated_recordings(step, truth, unit(0.2, 6.9, 0.2), **options)
    share = np.mean(p_values(wrong) < 0.05)
    print(f"wrong model rejected: {share:.3f}")
    assert share > 0.9
