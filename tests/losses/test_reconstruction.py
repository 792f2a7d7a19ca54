import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats

from oscillib.losses import reconstruction


RNG = np.random.default_rng(0)
PREDICTED, VALUES = jnp.asarray(RNG.normal(size=(2, 3, 5, 2)))
MASK = jnp.asarray(RNG.random((3, 5, 2)) < 0.6)
SCALE = jnp.array([0.5, 3.0])


@pytest.fixture(scope="module")
def value_and_grad():
    def loss(predicted, values, scale, mask):
        return reconstruction(predicted, values, mask, scale=scale)

    return jax.jit(jax.value_and_grad(loss, argnums=(0, 1, 2)))


def test_value_is_the_gaussian_log_density_of_what_was_observed(value_and_grad):
    value, _ = value_and_grad(PREDICTED, VALUES, SCALE, MASK)
    density = scipy.stats.norm.logpdf(VALUES, PREDICTED, SCALE)
    np.testing.assert_allclose(value, -density[MASK].sum(), rtol=1e-14)


def test_gradient_is_that_of_the_formula(value_and_grad):
    _, (predicted, values, scale) = value_and_grad(PREDICTED, VALUES, SCALE, MASK)
    residual = np.where(MASK, VALUES - PREDICTED, 0)
    np.testing.assert_allclose(values, residual / SCALE[None, None] ** 2, rtol=1e-14)
    np.testing.assert_allclose(predicted, -values, rtol=0)
    sizes, seen = np.asarray(SCALE), np.asarray(MASK).sum(axis=(0, 1))
    expected = (seen - np.sum(residual**2, axis=(0, 1)) / sizes**2) / sizes
    np.testing.assert_allclose(scale, expected, rtol=1e-13)


@pytest.mark.parametrize("junk", [np.nan, np.inf, -np.inf, 1e300, -0.0])
def test_masked_entries_change_no_bit(value_and_grad, junk):
    bits = lambda tree: [np.asarray(leaf).tobytes() for leaf in jax.tree.leaves(tree)]
    clean = bits(value_and_grad(PREDICTED, VALUES, SCALE, MASK))
    dirty = jnp.where(MASK, VALUES, junk)
    astray = jnp.where(MASK, PREDICTED, junk)
    assert bits(value_and_grad(PREDICTED, dirty, SCALE, MASK)) == clean
    assert bits(value_and_grad(astray, dirty, SCALE, MASK)) == clean


def test_observed_nan_shows():
    values = jnp.where(MASK, jnp.nan, VALUES)
    assert jnp.isnan(reconstruction(PREDICTED, values, MASK, scale=SCALE))


def test_nothing_observed_costs_nothing(value_and_grad):
    value, slopes = value_and_grad(PREDICTED, VALUES, SCALE, jnp.zeros_like(MASK))
    assert value == 0
    assert all(jnp.all(slope == 0) for slope in slopes)


@pytest.mark.parametrize(
    "error, match, change",
    [
        (
            ValueError,
            r"`values` must have shape that of `predicted` = \(3, 5, 2\); got shape \(5, 2\)",
            {"values": VALUES[0]},
        ),
        (ValueError, r"`mask` .* got shape \(3, 5, 1\)", {"mask": MASK[..., :1]}),
        (ValueError, r"`scale` must have shape \(channel,\) = \(2\)", {"scale": SCALE[0]}),
        (
            TypeError,
            "`values` is float32 but `predicted` is float64",
            {"values": VALUES.astype(jnp.float32)},
        ),
        (TypeError, "`scale` is float32", {"scale": SCALE.astype(jnp.float32)}),
        (TypeError, "`mask` must be boolean.*got dtype float64", {"mask": MASK.astype(float)}),
    ],
)
def test_errors(user_errors, error, match, change):
    arguments = {"predicted": PREDICTED, "values": VALUES, "mask": MASK, "scale": SCALE}
    with pytest.raises(error, match=match):
        reconstruction(**(arguments | change))
