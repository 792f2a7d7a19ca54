"""The collapse check: what counts as a rhythm, and what never may."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import collapse


@pytest.fixture(scope="module")
def rhythm():
    rng = np.random.default_rng(0)
    t = np.arange(200) * 0.1
    observed = np.stack([3 + np.sin(2 * t), 5 * np.cos(t), np.sin(t) + 1], 1)
    return observed, rng.random(observed.shape) > 0.3


@pytest.fixture(scope="module")
def compiled():
    return jax.jit(collapse)


def test_ratio_and_correlation_against_numpy(compiled, rhythm):
    observed, mask = rhythm
    predicted = observed * np.array([1.0, -0.5, 0.2]) + np.random.default_rng(1).normal(
        0, 0.1, observed.shape
    )
    got = compiled(predicted, observed, mask)
    for c in range(3):
        p, o = predicted[mask[:, c], c], observed[mask[:, c], c]
        np.testing.assert_allclose(got.variance_ratio[c], p.var() / o.var(), rtol=1e-12)
        np.testing.assert_allclose(got.correlation[c], np.corrcoef(p, o)[0, 1], rtol=1e-12)
    # Ratios near 1, 0.25 and 0.04 + noise.
    np.testing.assert_array_equal(got.collapsed, [False, False, True])
    assert bool(jnp.all(got.finite))


def test_time_average_has_collapsed(compiled, rhythm):
    # common practice, no source: a free fit of an oscillation tends to settle on its time average.
    observed, mask = rhythm
    got = compiled(np.broadcast_to(observed.mean(0), observed.shape), observed, mask)
    np.testing.assert_allclose(got.variance_ratio, 0, atol=1e-12)
    assert bool(jnp.all(got.collapsed)) and bool(jnp.all(got.finite))
    # Rounding may leave a constant a variance; its correlation is then noise, never a flag.
    exact = compiled(np.full_like(observed, 2.0), observed, mask)
    assert bool(jnp.all(jnp.isnan(exact.correlation)))


def test_least_squares_ratio_is_the_explained_fraction(compiled, rhythm):
    # Closed form behind the threshold: at a least-squares optimum the ratio is R^2.
    observed, mask = rhythm
    mask = np.ones_like(mask)
    noisy = observed + np.random.default_rng(2).normal(size=observed.shape)
    x = np.sin(2 * np.arange(200) * 0.1)
    slope = ((x - x.mean()) @ noisy) / ((x - x.mean()) ** 2).sum()
    predicted = noisy.mean(0) + np.outer(x - x.mean(), slope)
    got = compiled(predicted, noisy, mask)
    explained = 1 - ((noisy - predicted) ** 2).mean(0) / noisy.var(0)
    np.testing.assert_allclose(got.variance_ratio, explained, rtol=1e-9)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_not_finite_is_never_fine(compiled, rhythm, bad):
    observed, mask = rhythm
    predicted = observed.copy()
    predicted[np.flatnonzero(mask[:, 1])[4], 1] = bad
    got = compiled(predicted, observed, mask)
    np.testing.assert_array_equal(got.finite, [True, False, True])
    np.testing.assert_array_equal(got.collapsed, [False, True, False])
    assert np.isnan(got.variance_ratio[1]) and np.isnan(got.correlation[1])


def test_overflow_and_nothing_to_compare_count_as_collapsed(compiled, rhythm):
    observed, mask = rhythm
    mask, observed = mask.copy(), observed.copy()
    mask[:, 0], observed[:, 1] = False, 2.0
    predicted = observed.copy()
    predicted[:, 2] *= 1e200
    got = compiled(predicted, observed, mask)
    np.testing.assert_array_equal(got.collapsed, True)
    np.testing.assert_array_equal(got.finite, True)
    assert bool(jnp.all(jnp.isnan(got.variance_ratio)))


def test_masked_entries_change_no_bit(compiled, rhythm):
    observed, mask = rhythm
    predicted = 0.7 * observed + 0.1 * np.cos(observed)
    clean = compiled(predicted, observed, mask)
    dirty = compiled(np.where(mask, predicted, np.inf), np.where(mask, observed, np.nan), mask)
    for a, b in zip(clean, dirty, strict=True):
        np.testing.assert_array_equal(a, b)

    def total(p, o):
        return (lambda c: c.variance_ratio.sum() + c.correlation.sum())(collapse(p, o, mask))

    a = jax.grad(total)(jnp.asarray(predicted), jnp.asarray(observed))
    b = jax.grad(total)(jnp.where(mask, predicted, jnp.nan), jnp.where(mask, observed, jnp.nan))
    np.testing.assert_array_equal(a, b)
    assert np.all(np.asarray(a)[~mask] == 0)


def test_threshold_float32_vmap_and_retrace(rhythm):
    observed, mask = rhythm
    traces = []

    @jax.jit
    def batched(p, o, m):
        traces.append(1)
        return jax.vmap(lambda p: collapse(p, o, m, threshold=0.3))(p)

    o = jnp.asarray(observed, jnp.float32)
    for scale in (0.5, 0.6):
        got = batched(jnp.stack([jnp.float32(scale) * o, o]), o, mask)
        assert got.variance_ratio.dtype == jnp.float32
        np.testing.assert_allclose(got.variance_ratio[0], scale**2, rtol=1e-5)
        np.testing.assert_array_equal(got.collapsed[0], scale**2 < 0.3)
    assert len(traces) == 1


def test_errors(user_errors):
    x, m = np.ones((4, 2)), np.ones((4, 2), bool)
    with pytest.raises(ValueError, match=r"`predicted` must have shape \(time, channel\)"):
        collapse(x[:, 0], x, m)
    with pytest.raises(ValueError, match="`observed` must have shape"):
        collapse(x, x[:3], m)
    with pytest.raises(TypeError, match="`mask` must be boolean"):
        collapse(x, x, x)
    with pytest.raises(TypeError, match="`observed` is float32"):
        collapse(x, x.astype(np.float32), m)
    with pytest.raises(ValueError, match="`threshold` must be positive"):
        collapse(x, x, m, threshold=0.0)
