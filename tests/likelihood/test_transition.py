"""Transition density: integrates to one, exact without saturation, right gradient."""

import functools

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg
import scipy.stats

from oscillib.fields import (
    HopfNetwork,
    HopfParams,
    KuramotoParams,
    LinearNetwork,
    LinearParams,
    kuramoto,
)
from oscillib.fitting import Status, observed_information, refine
from oscillib.integrate import (
    NoisyParams,
    euler_maruyama,
    noisy_rollout,
    noisy_strang,
    rk4,
    split_noise,
)
from oscillib.likelihood import transition_log_density
from oscillib.parameters import Free


FIELD = HopfNetwork()


def unit(a, w, s, b=1.0, c=0.0):
    return NoisyParams(HopfParams([a], [w], saturation=[b], shear=[c]), [s])


@functools.partial(jax.jit, static_argnums=0)
def series(step, params, states, h):
    return transition_log_density(step, params, states, h=h)


def density(step, params, y0, ends, h):
    both = lambda y: jnp.stack([y0, y.reshape(2, 1)])
    one = lambda y: transition_log_density(step, params, both(y), h=h)[0]
    return np.asarray(jax.jit(jax.vmap(one))(ends))


@pytest.mark.parametrize("h", [0.3, 1.2])
def test_integrates_to_one_and_has_the_moments_of_the_simulated_step(step, h):
    params, y0 = unit(0.5, 4.0, 0.5, c=0.7), jnp.array([[0.6], [-0.3]])
    edge = np.linspace(-2.5, 2.5, 401)
    grid = np.stack(np.meshgrid(edge, edge, indexing="ij"), -1).reshape(-1, 2)
    log_density = density(step, params, y0, jnp.asarray(grid), h)
    # Beyond r^2 = 1 / (b h) no state can end.
    np.testing.assert_array_equal(np.isneginf(log_density), (grid**2).sum(1) >= 1 / h)
    weight = np.exp(log_density) * (edge[1] - edge[0]) ** 2
    np.testing.assert_allclose(weight.sum(), 1, atol=1e-3 if h > 1 else 1e-9)
    keys = jax.random.split(jax.random.key(0), 40_000)
    one = lambda key: noisy_rollout(step, params, y0, h, 1, key=key)[-1, :, 0]
    drawn = np.asarray(jax.jit(jax.vmap(one))(keys))
    for power in (1, 2):
        error = 4 * np.std(drawn**power, axis=0) / 200
        assert np.all(np.abs((drawn**power).mean(0) - weight @ grid**power) < error + 2e-3)


def test_exact_without_saturation(step):
    params, h = unit(-0.3, 4.0, 0.5, b=0.0), 0.9
    y0 = jnp.array([[0.6], [-0.3]])
    matrix = np.asarray(FIELD.linear_matrix(params.field))
    mean = scipy.linalg.expm(h * matrix) @ np.asarray(y0).ravel()
    # Closed form: s^2 (1 - e^(2ah)) / 2|a| on each component.
    law = scipy.stats.multivariate_normal(mean, 0.25 * (1 - np.exp(-0.6 * h)) / 0.6 * np.eye(2))
    ends = np.random.default_rng(0).normal(size=(20, 2))
    np.testing.assert_allclose(
        density(step, params, y0, jnp.asarray(ends), h), law.logpdf(ends), rtol=1e-12
    )


@pytest.mark.long
def test_blocks_equal_the_dense_determinant_and_intervals_may_differ(step):
    from oscillib.integrate import noisy_strang

    field = HopfParams([0.2, 0.1], [6.0, 5.0], coupling=[[0.0, 0.5], [0.2, 0.0]])
    params = NoisyParams(field, [0.3, 0.2])
    states = noisy_rollout(step, params, jnp.full((2, 2), 0.3), 0.1, 6, key=jax.random.key(0))
    whole = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix, local=False)
    by_blocks = series(step, params, states, 0.1)
    np.testing.assert_allclose(series(whole, params, states, 0.1), by_blocks, rtol=1e-12)
    np.testing.assert_allclose(
        series(step, params, states, jnp.full(6, 0.1)), by_blocks, rtol=1e-12
    )


def test_gradient_also_where_a_state_is_out_of_reach(step):
    states = jnp.array([[0.2, 0.1], [0.1, 0.3], [5.0, 5.0]])[:, :, None]

    def first(x):
        params = NoisyParams(HopfParams(x[:1], x[1:2]), x[2:])
        return series(step, params, states, 0.5)[0]

    x = jnp.array([0.3, 6.0, 0.4])
    numeric = [(first(x + 1e-6 * e) - first(x - 1e-6 * e)) / 2e-6 for e in jnp.eye(3)]
    np.testing.assert_allclose(jax.grad(first)(x), numeric, rtol=1e-6)
    out = series(step, unit(0.3, 6.0, 0.4), states, 0.5)
    assert np.isneginf(out[1])
    assert np.isnan(series(step, unit(0.3, 6.0, 0.4), states * jnp.nan, 0.5)[0])


def test_euler_maruyama_and_the_splitting_agree_at_short_intervals(step):
    params = unit(0.3, 2.0, 0.4)
    states = noisy_rollout(step, params, jnp.array([[0.5], [0.0]]), 1e-3, 50, key=jax.random.key(0))
    ours = jnp.sum(series(step, params, states, 1e-3))
    theirs = jnp.sum(series(euler_maruyama(FIELD), params, states, 1e-3))
    assert abs(ours - theirs) < 0.5


OU = LinearNetwork()
EULER = euler_maruyama(OU, rate=OU.noise_rate)
EXACT = noisy_strang(OU.saturation_flow, OU.linear_matrix, rate=OU.noise_rate)


def relaxing(rate, noise):
    return NoisyParams(LinearParams.relaxing(rate[None]), noise[None, None])


@pytest.mark.parametrize("step, limit", [(EULER, 0.9559084465), (EXACT, 1.3)])
def test_rate_that_the_density_of_a_step_leads_to(step, limit):
    # Exactly sampled relaxation at the rate 1.3 every 0.5: Euler's density is best at
    # (1 - e^(-rate h)) / h; closed form. The mean over all pairs of samples is by quadrature.
    rate, noise, h = jnp.asarray(1.3), jnp.asarray(0.7), 0.5
    nodes, weights = np.polynomial.hermite_e.hermegauss(6)
    advance = EXACT(relaxing(rate, noise), jnp.asarray(h))
    first = jnp.asarray(nodes * np.sqrt(0.7**2 / 2.6))
    carried = jax.vmap(lambda x: advance.into_noise(0.0, x[None, None])[0, 0])(first)
    second = carried[:, None] + jnp.sqrt(advance.covariance[0, 0]) * jnp.asarray(nodes)[None]
    pairs = jnp.stack(jnp.broadcast_arrays(first[:, None], second), axis=-1).reshape(36, 2, 1, 1)

    @jax.jit
    def loss(x):
        params = relaxing(*jnp.exp(x))
        one = lambda states: transition_log_density(step, params, states, h=h)[0]
        return -jnp.asarray(np.outer(weights, weights).ravel()) @ jax.vmap(one)(pairs)

    found = refine(loss, jnp.log(jnp.array([1.0, 1.0])), Free(), tolerance=1e-16).params
    assert abs(jnp.exp(found[0]) - limit) < 1e-7


@pytest.mark.parametrize("count", [5, 40])
def test_information_on_the_frequency_of_a_diffusing_phase(count):
    # phi' = w + sqrt(2 D) xi over T: the end points say all, var(w) = 2 D / T at any sampling;
    # closed form. D = 0.02, T = 50.
    step = euler_maruyama(kuramoto, rate=lambda noise: jnp.diag(noise**2))
    phases = jnp.asarray(np.random.default_rng(0).normal(size=(count + 1, 1, 1)))

    def loss(w):
        params = NoisyParams(KuramotoParams(w[None]), jnp.sqrt(jnp.array([0.04])))
        return -jnp.sum(transition_log_density(step, params, phases, h=50 / count))

    information = jax.jit(lambda w: observed_information(loss, w, Free()))(jnp.asarray(1.0))
    assert abs(1 / information[0, 0] - 0.0008) < 1e-12


@pytest.mark.long
def test_bias_of_the_rate_of_a_short_record():
    # With a known mean of 0, the estimated rate is too high by about 2/T, here 0.1 at T = 20 and a
    # rate of 1; Tang & Chen 2009, J. Econometrics (leading term; from memory).
    truth = jnp.zeros(2)

    @jax.jit
    @jax.vmap
    def fit(key):
        start, noise = jax.random.split(key)
        y0 = jnp.sqrt(0.5) * jax.random.normal(start, (1, 1))
        states = noisy_rollout(EXACT, relaxing(*jnp.exp(truth)), y0, 0.05, 400, key=noise)
        loss = lambda x: (
            -jnp.sum(transition_log_density(EXACT, relaxing(x[0], jnp.exp(x[1])), states, h=0.05))
        )
        out = refine(loss, jnp.array([1.0, 0.0]), Free())
        return out.params[0], out.status

    rate, status = fit(jax.random.split(jax.random.key(0), 4000))
    assert np.mean(status == Status.CONVERGED) > 0.999
    assert np.std(rate) / np.sqrt(4000) < 0.006
    assert abs(np.mean(rate) - 1.1) < 0.025


@pytest.mark.usefixtures("user_errors")
def test_message():
    with pytest.raises(ValueError, match="`step` must know the inverse of its last map"):
        transition_log_density(
            split_noise(rk4(FIELD)), unit(0.3, 2.0, 0.4), jnp.zeros((2, 2, 1)), h=0.1
        )
