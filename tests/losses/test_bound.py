from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats

from oscillib.encoders import FreeGaussian, Prior
from oscillib.losses import evidence_bound, free_bits, importance_bound
from oscillib.parameters import Free


# Two unknown numbers, normal a priori; three readings of their mixtures with unit noise.
MIX = np.array([[1.0, 0.0], [0.7, 0.7], [0.2, -1.0]])
SD = np.array([1.5, 0.8])
PRIOR = Prior({"x": jnp.zeros(2)}, {"x": Free()}, sd={"x": jnp.asarray(SD)})
VALUES = jnp.array([1.2, 0.3, -0.9])
OF_VALUES: Any = MIX @ np.diag(SD**2) @ MIX.T + np.eye(3)
EVIDENCE = scipy.stats.multivariate_normal.logpdf(np.asarray(VALUES), np.zeros(3), OF_VALUES)
COVARIANCE = np.linalg.inv(np.diag(SD**-2) + MIX.T @ MIX)
POSTERIOR = FreeGaussian(
    jnp.asarray(COVARIANCE @ MIX.T @ np.asarray(VALUES)),
    jnp.asarray(np.linalg.cholesky(COVARIANCE)),
)
OFF = FreeGaussian(POSTERIOR.mean + 0.4, 1.3 * POSTERIOR.factor)


def log_likelihood(params, values):
    return jnp.sum(jax.scipy.stats.norm.logpdf(values - jnp.asarray(MIX) @ params["x"]))


def expected(law):
    """The bound under a law without sampling: the log-likelihood is quadratic."""
    spread = np.trace(MIX @ np.asarray(law.covariance) @ MIX.T) / 2
    at_mean = log_likelihood({"x": law.mean}, VALUES)
    return float(at_mean - spread - jnp.sum(law.divergence(PRIOR.law)))


@pytest.fixture(scope="module")
def importance():
    """Bounds of many keys, for each number of samples a compiled function of its own."""

    def bounds(law, count, samples):
        one = lambda key: importance_bound(
            law, PRIOR, log_likelihood, (VALUES,), key=key, samples=samples
        )
        return jax.jit(jax.vmap(one))(jax.random.split(jax.random.key(samples), count))

    return bounds


@pytest.fixture(scope="module")
def graded():
    """An evidence bound and its gradient under a likelihood that fails where told."""

    def loss(law, values, beta, edge):
        def fragile(params, values):
            x = params["x"]
            return log_likelihood({"x": x}, values) + 0 * jnp.sum(jnp.sqrt(edge - x))

        key = jax.random.key(4)
        out = evidence_bound(law, PRIOR, fragile, (values,), key=key, samples=8, beta=beta)
        other = importance_bound(law, PRIOR, fragile, (values,), key=key, samples=8, beta=beta)
        return jnp.stack([out.loss, other.loss]), (out, other)

    def both(*at):
        out, pull, aux = jax.vjp(lambda law: loss(law, *at[1:]), at[0], has_aux=True)
        return out, [pull(jnp.eye(2)[i])[0] for i in (0, 1)], aux

    return jax.jit(both)


def test_bound_is_the_evidence_less_the_divergence_from_the_posterior():
    assert expected(POSTERIOR) == pytest.approx(EVIDENCE, abs=1e-12)
    assert EVIDENCE - expected(OFF) == pytest.approx(
        float(OFF.divergence(POSTERIOR).sum()), abs=1e-12
    )
    for law in (POSTERIOR, OFF):
        out = evidence_bound(
            law, PRIOR, log_likelihood, (VALUES,), key=jax.random.key(0), samples=20_000
        )
        # The spread of one draw is below 3 nats.
        assert abs(float(out.bound) - expected(law)) < 4 * 3 / 20_000**0.5
        assert int(out.bad) == 0 and float(out.loss) == -float(out.bound)


def test_exact_posterior_has_one_importance_weight(importance):
    out = importance(POSTERIOR, 10, 3)
    np.testing.assert_allclose(out.bound, EVIDENCE, rtol=1e-12)
    np.testing.assert_allclose(out.loss, -EVIDENCE, rtol=1e-12)


def test_importance_bound_rises_to_the_evidence(importance):
    means, errors = [], []
    for samples in (1, 3, 30):
        bounds = np.asarray(importance(OFF, 4000, samples).bound)
        means.append(bounds.mean())
        errors.append(bounds.std() / 4000**0.5)
    assert abs(means[0] - expected(OFF)) < 4 * errors[0]  # one sample: the evidence bound
    for k in (0, 1):
        assert means[k + 1] - means[k] > 4 * (errors[k] + errors[k + 1])
    assert means[2] < EVIDENCE + 3 * errors[2]
    assert EVIDENCE - means[2] < 0.05 * (EVIDENCE - means[0])


def test_gradient_is_that_of_the_expected_bound():
    """Reparameterised samples: averaged over many, the slope of the closed form."""
    law_of = lambda at: FreeGaussian(at[0], at[1])

    def loss(at):
        return evidence_bound(
            law_of(at), PRIOR, log_likelihood, (VALUES,), key=jax.random.key(1), samples=20_000
        ).loss

    mean, factor = jax.grad(loss)((OFF.mean, OFF.factor))
    inverse = np.linalg.inv(COVARIANCE)
    np.testing.assert_allclose(mean, inverse @ np.asarray(OFF.mean - POSTERIOR.mean), atol=0.05)
    exact = np.tril(inverse @ np.asarray(OFF.factor)) - np.diag(1 / np.diagonal(OFF.factor))
    np.testing.assert_allclose(factor, exact, atol=0.05)


def test_warm_up_and_free_bits_act_on_the_divergence_in_the_loss_alone():
    at = lambda **change: evidence_bound(
        OFF, PRIOR, log_likelihood, (VALUES,), key=jax.random.key(0), samples=4, **change
    )
    plain, none, half = at(), at(beta=0.0), at(beta=jnp.asarray(0.5))
    cost = float(jnp.sum(plain.divergence))
    np.testing.assert_allclose(plain.loss - none.loss, cost, rtol=1e-12)
    np.testing.assert_allclose(half.loss - none.loss, cost / 2, rtol=1e-12)
    low, high = sorted(np.asarray(plain.divergence))
    floor = (low + high) / 2
    np.testing.assert_allclose(at(least=floor).loss - none.loss, floor + high, rtol=1e-12)
    for out in (none, half, at(least=floor)):
        assert float(out.bound) == float(plain.bound)


def test_free_bits_stop_the_pull_to_the_prior():
    divergence = jnp.array([[0.1, 2.0], [0.3, 4.0]])
    np.testing.assert_allclose(free_bits(divergence, 0.5), 0.5 + 3.0, rtol=1e-15)
    np.testing.assert_allclose(free_bits(divergence[0], 0.0), 2.1, rtol=1e-15)
    slope = jax.grad(lambda d: free_bits(d, 0.5))(divergence)
    np.testing.assert_array_equal(slope, [[0, 0.5], [0, 0.5]])


def test_bad_samples_are_counted_left_out_and_never_a_success(graded):
    far = jnp.asarray(1e3)
    _, slopes, (plain, weighted) = graded(OFF, VALUES, 1.0, far)
    assert int(plain.bad) == int(weighted.bad) == 0
    draws = jax.vmap(lambda k: OFF.sample(key=k))(jax.random.split(jax.random.key(4), 8))
    largest = np.sort(np.asarray(jnp.max(draws, axis=1)))
    edge = jnp.asarray((largest[-3] + largest[-4]) / 2)  # three of the eight draws are beyond it
    kept = draws[jnp.max(draws, axis=1) < edge]
    _, cut_slopes, (cut, cut_weighted) = graded(OFF, VALUES, 1.0, edge)
    for out in (cut, cut_weighted):
        assert int(out.bad) == 3 and jnp.isnan(out.bound)
    logs = np.array([log_likelihood({"x": x}, VALUES) for x in kept])
    np.testing.assert_allclose(cut.loss, -logs.mean() + jnp.sum(cut.divergence), rtol=1e-12)
    ratio = np.array([PRIOR.law.log_prob(x) - OFF.log_prob(x) for x in kept])
    exact = -np.log(np.exp(logs + ratio).sum() / 8)
    np.testing.assert_allclose(cut_weighted.loss, exact, rtol=1e-12)
    for slope in (*slopes, *cut_slopes):
        assert all(
            jnp.all(jnp.isfinite(leaf)) and jnp.any(leaf != 0) for leaf in jax.tree.leaves(slope)
        )


def test_all_samples_bad_draws_to_the_prior_or_nowhere(graded):
    losses, (plain, weighted), (out, other) = graded(OFF, VALUES, 1.0, jnp.asarray(-1e3))
    assert int(out.bad) == int(other.bad) == 8
    assert jnp.isnan(out.bound) and jnp.isnan(other.bound)
    np.testing.assert_allclose(losses[0], jnp.sum(OFF.divergence(PRIOR.law)), rtol=1e-14)
    pull = jax.grad(lambda law: jnp.sum(law.divergence(PRIOR.law)))(OFF)
    jax.tree.map(lambda a, b: np.testing.assert_allclose(a, b, rtol=1e-12), plain, pull)
    assert losses[1] == 0 and not any(jnp.any(leaf) for leaf in jax.tree.leaves(weighted))


def test_one_bad_recording_does_not_reach_the_others(graded):
    values = jnp.stack([VALUES, jnp.full(3, jnp.nan), VALUES + 1])
    losses, _, (out, _) = jax.vmap(graded, in_axes=(None, 0, None, None))(
        OFF, values, 1.0, jnp.asarray(1e3)
    )
    assert out.bad.tolist() == [0, 8, 0]
    assert jnp.all(jnp.isfinite(losses))
    alone = graded(OFF, VALUES, 1.0, jnp.asarray(1e3))[0]
    np.testing.assert_allclose(losses[0], alone, rtol=1e-13)


def test_short_floats_and_one_trace():
    traces = []

    @jax.jit
    def loss(law, prior, values, beta):
        traces.append(values)

        def likelihood(params, values):
            return -jnp.sum((values - params["x"][0]) ** 2)

        key = jax.random.key(0)
        out = evidence_bound(law, prior, likelihood, (values,), key=key, samples=2, beta=beta)
        other = importance_bound(law, prior, likelihood, (values,), key=key, samples=2, beta=beta)
        return out.loss, other.loss, out.bound

    short = jax.tree.map(lambda x: x.astype(jnp.float32), (OFF, PRIOR, VALUES))
    for beta in (0.25, 0.5):
        out = loss(*short, beta)
        assert all(leaf.dtype == jnp.float32 and jnp.isfinite(leaf) for leaf in out)
    assert len(traces) == 1


@pytest.mark.parametrize(
    "error, match, change",
    [
        (ValueError, "`samples` must be at least 1; got 0", {"samples": 0}),
        (TypeError, "`samples` must be a Python int", {"samples": 2.0}),
        (TypeError, r"`data` must be a tuple.*Fix: `\(values, mask\)`", {"data": VALUES}),
        (
            ValueError,
            r"`log_likelihood` must return a scalar, shape \(\); got shape \(2,\)",
            {"log_likelihood": lambda params, values: params["x"]},
        ),
    ],
)
@pytest.mark.parametrize("bound", [evidence_bound, importance_bound])
def test_errors(user_errors, bound, error, match, change):
    arguments = {"log_likelihood": log_likelihood, "data": (VALUES,), "samples": 1} | change
    with pytest.raises(error, match=match):
        bound(OFF, PRIOR, **arguments, key=jax.random.key(0))


def test_free_bits_error(user_errors):
    with pytest.raises(ValueError, match=r"`divergence` must have shape \(free,\) or"):
        free_bits(jnp.asarray(1.0), 0.5)
