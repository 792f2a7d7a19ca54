import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.encoders import FreeGaussian, GaussianHead, Prior
from oscillib.parameters import Free


FEATURES = jnp.array([0.3, -0.7, 1.1, 0.4])
KEY = jax.random.key(0)
YES, NO = jnp.asarray(True), jnp.asarray(False)
PRIOR = Prior(
    {"a": jnp.array([1.0, 2.0, 3.0])}, {"a": Free()}, sd={"a": jnp.array([0.5, 2.0, 1.0])}
)
CORRELATED = eqx.tree_at(
    lambda p: p.law,
    PRIOR,
    FreeGaussian([1.0, 2.0, 3.0], [[0.5, 0.0, 0.0], [0.3, 2.0, 0.0], [-0.1, 0.7, 1.0]]),
)


@jax.jit
def run(head, informed, prior):
    return head(FEATURES, informed, prior)


def trained(kind, dtype=None):
    head = GaussianHead(4, 3, kind=kind, width=5, key=jax.random.key(0), dtype=dtype)
    last = lambda h: (h.network.layers[-1].weight, h.network.layers[-1].bias)
    rng = np.random.default_rng(0)
    return eqx.tree_at(
        last, head, [jnp.asarray(rng.normal(size=a.shape), a.dtype) for a in last(head)]
    )


@pytest.mark.parametrize("kind", ["diagonal", "full"])
@pytest.mark.parametrize("prior", [PRIOR, CORRELATED])
def test_untrained_or_uninformed_it_is_the_prior_bit_for_bit(kind, prior):
    head = GaussianHead(4, 3, kind=kind, width=5, key=KEY)
    for law in (run(head, YES, prior), run(trained(kind), NO, prior)):
        np.testing.assert_array_equal(law.mean, prior.law.mean)
        np.testing.assert_array_equal(law.factor, prior.law.factor)
        np.testing.assert_allclose(law.divergence(prior.law), 0, atol=1e-15)
    # Not even a network gone wild moves it where there is nothing to go by.
    wild = jax.tree.map(lambda w: w * jnp.inf, trained(kind))
    assert jnp.all(jnp.isfinite(run(wild, NO, prior).factor))


@pytest.mark.parametrize("kind", ["diagonal", "full"])
def test_uninformed_it_has_a_zero_gradient(kind):
    density = lambda head, informed: head(FEATURES, informed, CORRELATED).log_prob(jnp.zeros(3))
    slopes = jax.jit(jax.grad(density))
    for informed in (NO, YES):
        slope = jax.tree.leaves(slopes(trained(kind), informed))
        assert all(bool(jnp.any(s != 0)) == bool(informed) for s in slope)


def test_trained_it_is_the_formula():
    out = np.asarray(trained("full").network(FEATURES))
    lower = np.diag(np.exp(out[3:6]))
    lower[1, 0], lower[2, 0], lower[2, 1] = out[6:]
    law = run(trained("full"), YES, CORRELATED)
    factor = np.asarray(CORRELATED.law.factor)
    np.testing.assert_allclose(law.mean, CORRELATED.law.mean + factor @ out[:3], rtol=1e-13)
    np.testing.assert_allclose(law.factor, factor @ lower, rtol=1e-13)
    assert np.all(np.diagonal(law.factor) > 0)
    diagonal = run(trained("diagonal"), YES, PRIOR).covariance
    np.testing.assert_array_equal(diagonal, np.diag(np.diagonal(diagonal)))


def test_short_floats():
    prior = jax.tree.map(lambda x: x.astype(jnp.float32), CORRELATED)
    law = trained("full", jnp.float32)(FEATURES.astype(jnp.float32), YES, prior)
    assert law.mean.dtype == law.factor.dtype == jnp.float32


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`kind` must be 'diagonal' or 'full'; got 'low'"):
        GaussianHead(4, 3, kind="low", key=KEY)  # pyright: ignore[reportArgumentType]
    head = GaussianHead(4, 2, key=jax.random.key(0))
    with pytest.raises(ValueError, match=r"`prior.law.mean` must have shape \(free,\) = \(2\)"):
        head(FEATURES, YES, PRIOR)
    with pytest.raises(TypeError, match=r"`features` is float32 but `prior.law.mean` is float64"):
        trained("full")(FEATURES.astype(jnp.float32), YES, PRIOR)
