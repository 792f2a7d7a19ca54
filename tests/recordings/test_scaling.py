"""Trend and scale: inverse, agreement with scipy, irregular and missing data, transformations."""

from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings, strategies as st

from oscillib.recordings import fit_scaling, recording, scale, unscale, unscale_spread


NAN = float("nan")


def noisy(seed=0, count=40, *, missing=0.2, regular=False, offset=0.0, dtype: Any = np.float64):
    rng = np.random.default_rng(seed)
    times = np.arange(count) * 0.5 if regular else np.cumsum(rng.uniform(0.1, 1.0, count))
    values = rng.normal(size=(count, 2)) * [1.0, 30.0] + times[:, None] * [2.0, -1.0] + offset
    values[rng.uniform(size=values.shape) < missing] = NAN
    return recording((times + offset).astype(dtype), values.astype(dtype), channels=["a", "b"])


@pytest.fixture(scope="module")
def compiled():
    return jax.jit(scale), jax.jit(unscale)


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 1000),
    degree=st.sampled_from([None, 0, 1, 3]),
    robust=st.booleans(),
    offset=st.sampled_from([0.0, -50.0, 1e4]),
)
def test_unscale_inverts_scale(compiled, seed, degree, robust, offset):
    r = noisy(seed, offset=offset)
    s = fit_scaling(r, degree=degree, robust=robust)
    scaled = compiled[0](r, s)
    back = compiled[1](scaled.values, scaled.times, s)
    size = float(jnp.max(jnp.abs(r.values)))
    np.testing.assert_allclose(
        np.where(r.mask, back, 0), r.values, rtol=0, atol=100 * np.finfo(float).eps * size
    )
    np.testing.assert_array_equal(scaled.mask, r.mask)
    np.testing.assert_array_equal(np.where(scaled.mask, 0, scaled.values), 0)


@pytest.mark.parametrize(("degree", "kind"), [(0, "constant"), (1, "linear")])
def test_equals_scipy_detrend_on_regular_data(degree, kind):
    from scipy.signal import detrend

    r = noisy(missing=0.0, regular=True)
    s = fit_scaling(r, degree=degree)
    left = detrend(np.asarray(r.values), axis=0, type=kind)
    np.testing.assert_allclose(unscale_spread(scale(r, s).values, s), left, atol=1e-11)
    np.testing.assert_allclose(s.spread, left.std(axis=0), rtol=1e-12)


@pytest.mark.parametrize("degree", [0, 1, 2, 4])
def test_irregular_times_with_gaps_against_numpy_polynomials(degree):
    # Source of the check value: numpy.polynomial's least squares, channel by channel.
    r = noisy(3, missing=0.4)
    s = fit_scaling(r, degree=degree)
    ahead = jnp.linspace(float(r.times[0]), float(r.times[-1]) + 5, 9)
    trend = unscale(jnp.zeros((9, 2)), ahead, s)
    for i in range(2):
        seen = np.asarray(r.mask[:, i])
        t, v = np.asarray(r.times)[seen], np.asarray(r.values)[seen, i]
        p = np.polynomial.Polynomial.fit(t, v, degree)
        np.testing.assert_allclose(trend[:, i], p(np.asarray(ahead)), rtol=1e-9)
        assert float(s.spread[i]) == pytest.approx(np.std(v - p(t)), rel=1e-10)


def test_no_trend_keeps_the_mean():
    r = recording([0.0, 1.0], [[2.0], [4.0]])
    s = fit_scaling(r, degree=None)
    assert s.trend.shape == (1, 0)
    np.testing.assert_array_equal(scale(r, s).values, [[2.0], [4.0]])


def test_robust_scale_passes_over_an_outlier():
    from scipy.stats import median_abs_deviation

    values = np.random.default_rng(1).normal(size=(200, 1))
    values[7] = 1e3
    s = fit_scaling(recording(np.arange(200.0), values), degree=None, robust=True)
    assert float(s.spread[0]) == pytest.approx(median_abs_deviation(values[:, 0], scale="normal"))  # pyright: ignore[reportArgumentType]
    assert float(s.spread[0]) < 1.3


def test_high_degree_stays_well_conditioned():
    times = 1e6 + np.linspace(0, 1, 200)
    truth = np.cos(6 * (times - times[0]))
    noise = 1e-6 * np.random.default_rng(0).normal(size=200)
    s = fit_scaling(recording(times, (truth + noise)[:, None]), degree=15)
    assert float(s.spread[0]) == pytest.approx(1e-6, rel=0.2)


def test_line_goes_on_beyond_the_fitted_times():
    wiggle = np.tile([1.0, -1.0, -1.0, 1.0], 5)
    r = recording(np.arange(20.0), (3 * np.arange(20.0) + wiggle)[:, None])
    trend = unscale(jnp.zeros((1, 1)), jnp.array([100.0]), fit_scaling(r))
    np.testing.assert_allclose(trend, [[300.0]], rtol=1e-10)


def test_single_precision():
    r = noisy(dtype=np.float32)
    s = fit_scaling(r, degree=2)
    assert {x.dtype for x in jax.tree.leaves(s)} == {np.dtype(np.float32)}
    scaled = scale(r, s)
    back = unscale(scaled.values, scaled.times, s)
    assert scaled.values.dtype == back.dtype == jnp.float32
    np.testing.assert_allclose(np.where(r.mask, back, 0), r.values, atol=1e-4)
    assert unscale_spread(jnp.ones((3, 2), jnp.float32), s).dtype == jnp.float32


def test_vmap_and_gradient():
    r = noisy()
    s = fit_scaling(r, degree=2)
    batch = jnp.stack([r.values, 2 * r.values])
    out = jax.jit(jax.vmap(unscale, in_axes=(0, None, None)))(batch, r.times, s)
    np.testing.assert_allclose(out[1], unscale(batch[1], r.times, s), rtol=1e-14)

    def total(values, times):
        return jnp.sum(unscale(values, times, s) ** 2)

    direction = jax.random.normal(jax.random.key(0), r.values.shape)
    along = jax.grad(total, argnums=(0, 1))(r.values, r.times)
    h = 1e-5
    central = (
        total(r.values + h * direction, r.times + h) - total(r.values - h * direction, r.times - h)
    ) / (2 * h)
    assert float(jnp.sum(along[0] * direction) + jnp.sum(along[1])) == pytest.approx(
        float(central), rel=1e-7
    )
    # Scaling under grad: nothing flows from missing entries.
    from_values = jax.grad(
        lambda v: jnp.sum(scale(recording(r.times, v, channels=["a", "b"]), s).values)
    )(r.nan_values)
    expected = np.where(r.mask, 1 / np.asarray(s.spread), 0)
    np.testing.assert_allclose(from_values, expected, rtol=1e-14)


@pytest.mark.parametrize(
    ("values", "options", "message"),
    [
        ([0.1] * 6, {"degree": 0}, "channel 'lfp' has scale .* is constant.*lower `degree`"),
        ([0.1] * 6, {"degree": None}, "channel 'lfp' has scale .* is constant"),
        (np.arange(6) / 3, {"degree": 1}, "a trend and nothing else"),
        ([1, 1, 1, 1, 2, 1], {"degree": 0, "robust": True}, "`robust=False`, if fewer than half"),
        ([1, 2, NAN, NAN, NAN, NAN], {}, "degree 1 needs at least 3, but channel 'lfp' has 2"),
        ([1, 2, 1, 2, 1, 2], {"degree": -1}, "`degree` must be at least 0"),
    ],
)
def test_errors_of_the_fit(values, options, message):
    r = recording(np.arange(6.0), np.array(values, float)[:, None], channels=["lfp"])
    with pytest.raises(ValueError, match=message):
        fit_scaling(r, **options)


def test_samples_too_close_for_the_degree():
    times = np.concatenate([[0.0], 1e9 + np.arange(5.0)])
    r = recording(times, np.arange(6.0)[:, None] ** 2)
    with pytest.raises(ValueError, match="too high for where the samples"):
        fit_scaling(r, degree=3)


def test_errors_of_use(user_errors):
    r = noisy()
    s = fit_scaling(r)
    other = recording(r.times, r.nan_values, channels=["b", "a"])
    with pytest.raises(ValueError, match=r"must be those of `scaling`, \('a', 'b'\); got \('b'"):
        scale(other, s)
    with pytest.raises(TypeError, match=r"`recording\.values` is float32"):
        scale(noisy(dtype=np.float32), s)
    with pytest.raises(ValueError, match=r"`values` must have shape \(time, channel\) = \(40, 2\)"):
        unscale(r.values[:, :1], r.times, s)
    with pytest.raises(TypeError, match="`times` is float32"):
        unscale(r.values, r.times.astype(jnp.float32), s)
    with pytest.raises(ValueError, match=r"`sd` must have the 2 channels.*got shape \(2, 3\)"):
        unscale_spread(jnp.ones((2, 3)), s)
    with pytest.raises(TypeError, match="`sd` must hold real floating"):
        unscale_spread(jnp.ones((3, 2), int), s)
    with pytest.raises(TypeError, match="`degree` must be a Python int"):
        fit_scaling(r, degree=1.0)  # pyright: ignore[reportArgumentType]
    with pytest.raises(TypeError, match="runs on the host"):
        jax.jit(fit_scaling)(r)
