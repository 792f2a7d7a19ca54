from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats

from oscillib.encoders import FreeGaussian


RNG = np.random.default_rng(0)


def some(seed, size=3, dtype=None):
    rng = np.random.default_rng(seed)
    factor = np.tril(rng.normal(size=(size, size)))
    factor[np.diag_indices(size)] = rng.uniform(0.5, 1.5, size)
    return FreeGaussian(jnp.asarray(rng.normal(size=size), dtype), jnp.asarray(factor, dtype))


LAW, PRIOR = some(1), some(2)


@pytest.fixture(scope="module")
def measures():
    """Everything a law can be asked, in one compiled function."""

    def ask(law, other, x):
        return {
            "log_prob": law.log_prob(x),
            "entropy": law.entropy(),
            "divergence": law.divergence(other),
            "sample": law.sample(key=jax.random.key(0)),
            "whiten": law.whiten(x),
            "covariance": law.covariance,
        }

    return jax.jit(ask)


def test_density_and_entropy(measures):
    x = jnp.array([0.2, -1.0, 0.5])
    out = measures(LAW, PRIOR, x)
    normal = scipy.stats.multivariate_normal
    covariance: Any = np.asarray(LAW.covariance)
    density = normal.logpdf(np.asarray(x), np.asarray(LAW.mean), covariance)
    np.testing.assert_allclose(out["log_prob"], density, rtol=1e-12)
    np.testing.assert_allclose(out["entropy"], normal.entropy(cov=covariance), rtol=1e-12)
    np.testing.assert_allclose(LAW.mean + LAW.factor @ out["whiten"], x, atol=1e-14)


def test_divergence_is_the_published_formula(measures):
    """(tr(S0^-1 S) + d' S0^-1 d - n + log det S0 / det S) / 2 (from memory)."""
    terms = np.asarray(measures(LAW, PRIOR, LAW.mean)["divergence"])
    s, s0 = np.asarray(LAW.covariance), np.asarray(PRIOR.covariance)
    d = np.asarray(LAW.mean - PRIOR.mean)
    inverse = np.linalg.inv(s0)
    exact = np.trace(inverse @ s) + d @ inverse @ d - 3
    exact = (exact + np.log(np.linalg.det(s0) / np.linalg.det(s))) / 2
    np.testing.assert_allclose(terms.sum(), exact, rtol=1e-12)


def test_divergence_of_a_published_pair():
    # Means (0, 0), (0.5, -0.2), covariances [[1, .3], [.3, 2]], [[1.5, -.2], [-.2, 1]]; closed
    # form, and a Gauss-Hermite expectation.
    law, prior = (
        FreeGaussian(jnp.array(mean), jnp.linalg.cholesky(jnp.array(covariance)))
        for mean, covariance in (
            ([0.0, 0.0], [[1.0, 0.3], [0.3, 2.0]]),
            ([0.5, -0.2], [[1.5, -0.2], [-0.2, 1.0]]),
        )
    )
    assert abs(jnp.sum(law.divergence(prior)) - 0.369091254365) < 1e-12


def test_divergence_is_the_mean_log_ratio(measures):
    @jax.jit
    @jax.vmap
    def ratios(key):
        free = LAW.sample(key=key)
        return LAW.log_prob(free) - PRIOR.log_prob(free)

    ratio = ratios(jax.random.split(jax.random.key(3), 20_000))
    error = float(jnp.std(ratio)) / 20_000**0.5
    exact = float(measures(LAW, PRIOR, LAW.mean)["divergence"].sum())
    assert abs(float(jnp.mean(ratio)) - exact) < 4 * error < 0.1 * exact


def test_terms_of_the_divergence_are_conditional_ones(measures):
    """Term i is the divergence of the first i entries less that of the first i - 1."""
    terms = np.asarray(measures(LAW, PRIOR, LAW.mean)["divergence"])
    assert np.all(terms > 0)
    for i in (1, 2):
        first = [FreeGaussian(law.mean[:i], law.factor[:i, :i]) for law in (LAW, PRIOR)]
        np.testing.assert_allclose(terms[:i].sum(), first[0].divergence(first[1]).sum(), rtol=1e-12)
    same = np.asarray(measures(LAW, LAW, LAW.mean)["divergence"])
    np.testing.assert_allclose(same, 0, atol=1e-14)


def test_samples_have_the_mean_and_covariance():
    count = 20_000
    draw = jax.jit(jax.vmap(lambda k: LAW.whiten(LAW.sample(key=k))))
    whitened = np.asarray(draw(jax.random.split(jax.random.key(1), count)))
    assert np.max(np.abs(whitened.mean(axis=0))) < 4 / count**0.5
    assert np.max(np.abs(np.cov(whitened.T) - np.eye(3))) < 4 * (2 / count) ** 0.5
    # Reparameterised: the derivative of a draw by its mean is one.
    slope = jax.jit(jax.jacrev(lambda law: law.sample(key=jax.random.key(0))))(LAW)
    np.testing.assert_array_equal(slope.mean, np.eye(3))
    e = LAW.whiten(LAW.sample(key=jax.random.key(0)))
    np.testing.assert_allclose(slope.factor[0, 0], [float(e[0]), 0, 0], atol=1e-14)


def test_short_floats(measures):
    short = measures(
        some(1, dtype=jnp.float32), some(2, dtype=jnp.float32), jnp.zeros(3, jnp.float32)
    )
    full = measures(LAW, PRIOR, jnp.zeros(3))
    for name, value in short.items():
        assert value.dtype == jnp.float32
        if name != "sample":  # 32 bits draw other numbers
            np.testing.assert_allclose(value, full[name], rtol=2e-4, atol=1e-5)


def test_what_is_above_the_diagonal_is_ignored(measures):
    x = jnp.array([0.2, -1.0, 0.5])
    astray = jax.tree.map(lambda a: a + jnp.triu(jnp.ones((3, 3)), 1) if a.ndim == 2 else a, LAW)
    assert astray.factor[0, 2] == 1
    jax.tree.map(np.testing.assert_array_equal, measures(astray, PRIOR, x), measures(LAW, PRIOR, x))
    jax.tree.map(np.testing.assert_array_equal, measures(PRIOR, astray, x), measures(PRIOR, LAW, x))


def test_errors(user_errors):
    with pytest.raises(ValueError, match=r"`mean` must have shape \(free,\)"):
        FreeGaussian(jnp.zeros((2, 2)), jnp.eye(2))
    with pytest.raises(ValueError, match=r"`factor` must have shape \(free, free\) = \(2, 2\)"):
        FreeGaussian(jnp.zeros(2), jnp.ones(2))
    with pytest.raises(TypeError, match="`factor` is float32 but `mean` is float64"):
        FreeGaussian(jnp.zeros(2), jnp.eye(2, dtype=jnp.float32))
    with pytest.raises(ValueError, match=r"`free` must have shape \(free,\) = \(3\)"):
        LAW.log_prob(jnp.zeros(2))
    with pytest.raises(ValueError, match=r"`other.mean` must have shape \(free,\) = \(3\)"):
        LAW.divergence(some(1, size=2))
