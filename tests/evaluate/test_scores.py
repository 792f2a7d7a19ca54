import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.integrate
import scipy.stats

from oscillib.evaluate import (
    average_by_horizon,
    coverage,
    crps_gaussian,
    error_by_horizon,
    interval_score,
    persistence,
    rolling_origins,
    targets,
)


RNG = np.random.default_rng(0)
TARGET, FORECAST = jnp.asarray(RNG.normal(size=(2, 6, 3, 2)))
MASK = jnp.asarray(RNG.random((6, 3, 2)) < 0.7).at[:, 2, 1].set(False)


@pytest.mark.parametrize("per_channel", [False, True])
def test_errors_average_over_observed_targets(per_channel):
    error = np.ma.masked_array(FORECAST - TARGET, ~np.asarray(MASK))
    axes = 0 if per_channel else (0, 2)
    filled = lambda x: np.ma.filled(x, np.nan)
    rms = error_by_horizon(FORECAST, TARGET, MASK, per_channel=per_channel)
    np.testing.assert_allclose(rms, filled(np.sqrt((error**2).mean(axis=axes))), rtol=1e-14)
    mae = error_by_horizon(FORECAST, TARGET, MASK, measure="mae", per_channel=per_channel)
    np.testing.assert_allclose(mae, filled(abs(error).mean(axis=axes)), rtol=1e-14)


def test_perfect_forecast_has_no_error_and_no_slope():
    total = lambda f: jnp.sum(error_by_horizon(f, TARGET, MASK))
    value, slope = jax.value_and_grad(total)(TARGET)
    assert value == 0
    np.testing.assert_array_equal(slope, jnp.zeros_like(slope))


def test_nan_forecast_of_an_observed_target_shows():
    forecast = FORECAST.at[0, 0, 0].set(jnp.nan)
    error = error_by_horizon(forecast, TARGET, MASK.at[0, 0, 0].set(True))
    np.testing.assert_array_equal(jnp.isnan(error), [True, False, False])


@pytest.mark.parametrize("lag, change", [(1, 5605.5 / 308), (11, 6737.5 / 298)])
def test_sunspots_persistence_error(lag, change):
    # Mean absolute change of the yearly sunspot numbers 1700-2008 of statsmodels at two lags, which
    # scales errors after Hyndman & Koehler 2006 (from memory): 18.199675325 and 22.609060403, sums
    # counted by numpy.
    from statsmodels.datasets import sunspots

    table = sunspots.load_pandas().data
    values = jnp.asarray(np.asarray(table["SUNACTIVITY"]))[:, None]  # pyright: ignore
    mask = jnp.ones(values.shape, dtype=bool)
    origins = rolling_origins(values.shape[0], first=0, horizon=lag)
    forecast = persistence(values, mask, origins, lag)
    target, observed = targets(values, origins, lag), targets(mask, origins, lag)
    error = error_by_horizon(forecast, target, observed, measure="mae")
    assert abs(error[-1] - change) < 1e-10


def test_coverage_counts_targets_in_the_band():
    lower, upper = jnp.full_like(TARGET, -jnp.inf), jnp.full_like(TARGET, 0.3)
    inside = np.ma.masked_array(TARGET <= 0.3, ~np.asarray(MASK))
    out = coverage(lower, upper, TARGET, MASK)
    np.testing.assert_allclose(out, inside.mean(axis=(0, 2)), rtol=1e-15)
    out = coverage(lower, upper, TARGET, MASK, per_channel=True)
    np.testing.assert_allclose(out, np.ma.filled(inside.mean(axis=0), np.nan), rtol=1e-15)
    everything = jnp.ones_like(MASK)
    np.testing.assert_array_equal(coverage(TARGET, TARGET, TARGET, everything), jnp.ones(3))
    undefined = coverage(lower.at[0, 1].set(jnp.nan), upper, TARGET, everything)
    np.testing.assert_array_equal(jnp.isnan(undefined), [False, True, False])


@pytest.mark.parametrize(
    "mean, sd, target, expected",
    [
        # Formula of Gneiting and Raftery 2007, section 4.2; at the mean, (sqrt(2) - 1) / sqrt(pi).
        (0.2, 1.5, 1.0, 0.516835018443),
        (0.0, 1.0, 0.0, 0.233694977255),
    ],
)
def test_crps_of_known_cases(mean, sd, target, expected):
    out = crps_gaussian(jnp.asarray(mean), jnp.asarray(sd), jnp.asarray(target))
    assert abs(out - expected) < 1e-10


def test_crps_is_the_integral_that_defines_it():
    # Gneiting and Raftery 2007, equation 20.
    below = lambda x: scipy.stats.norm.cdf(x, 0.4, 0.7) ** 2
    above = lambda x: scipy.stats.norm.sf(x, 0.4, 0.7) ** 2
    integral = scipy.integrate.quad(below, -8, 1.3)[0] + scipy.integrate.quad(above, 1.3, 9)[0]
    out = crps_gaussian(jnp.array([0.4]), jnp.array([0.7]), jnp.array([1.3]))
    np.testing.assert_allclose(out, integral, rtol=1e-8)


def test_expected_crps_of_the_true_law():
    # Half the mean distance of two draws, which of a normal law is 2 s / sqrt(pi), 1.1283791671 at
    # s = 1; closed form (Gneiting & Raftery 2007, section 4.2).
    nodes, weights = np.polynomial.legendre.leggauss(100)
    target = jnp.asarray(9 * nodes)
    score = crps_gaussian(jnp.zeros(100), jnp.ones(100), target)
    mean = 9 * np.sum(weights * scipy.stats.norm.pdf(target) * score)
    assert abs(2 * mean - 2 / np.sqrt(np.pi)) < 1e-12


def test_interval_score_penalises_misses():
    out = interval_score(
        jnp.zeros(4), 2 * jnp.ones(4), jnp.array([1.0, -0.5, 3.0, jnp.nan]), level=0.8
    )
    # Width 2, and 2 / 0.2 = 10 times the distance outside.
    np.testing.assert_allclose(out[:3], [2.0, 7.0, 12.0], rtol=1e-14)
    assert jnp.isnan(out[3])


def score_error(forecast, target):
    return error_by_horizon(forecast, target, MASK)[:2]


def score_crps(forecast, target):
    sd = jnp.where(MASK, 0.7, forecast)
    return average_by_horizon(crps_gaussian(forecast, sd, target, mask=MASK), MASK)


def score_interval(forecast, target):
    score = interval_score(forecast - 0.5, forecast + 0.5, target, level=0.9, mask=MASK)
    return average_by_horizon(score, MASK)


@pytest.mark.parametrize("garbage", [jnp.nan, jnp.inf])
@pytest.mark.parametrize("score", [score_error, score_crps, score_interval])
def test_masked_entries_change_no_bit(score, garbage):
    run = jax.jit(jax.value_and_grad(lambda f, t: jnp.sum(score(f, t)), argnums=(0, 1)))
    clean = run(FORECAST, TARGET)
    dirty = run(jnp.where(MASK, FORECAST, garbage), jnp.where(MASK, TARGET, garbage))
    assert jnp.isfinite(clean[0])
    jax.tree.map(np.testing.assert_array_equal, clean, dirty)
    for slope in clean[1]:
        assert not np.any(np.asarray(slope)[~np.asarray(MASK)])


def test_masked_coverage_changes_no_bit():
    dirty = lambda x: jnp.where(MASK, x, jnp.nan)
    clean = coverage(TARGET - 1, TARGET + 1, FORECAST, MASK)
    same = coverage(dirty(TARGET - 1), dirty(TARGET + 1), dirty(FORECAST), MASK)
    np.testing.assert_array_equal(clean, same)


def test_jit_vmap_and_float32():
    small = [jnp.stack([x, x]).astype(jnp.float32) for x in (FORECAST, TARGET)]
    masks = jnp.stack([MASK, MASK])
    for score in (
        error_by_horizon,
        lambda f, t, m: coverage(f - 1, f + 1, t, m),
        lambda f, t, m: crps_gaussian(f, jnp.ones_like(f), t, mask=m),
        lambda f, t, m: interval_score(f - 1, f + 1, t, level=0.9, mask=m),
    ):
        out = jax.jit(jax.vmap(score))(*small, masks)
        assert out.dtype == jnp.float32
        np.testing.assert_allclose(out[1], score(FORECAST, TARGET, MASK), rtol=1e-5)


def test_crps_without_spread_is_undefined_under_jit():
    out = jax.jit(crps_gaussian)(jnp.zeros(2), jnp.array([0.0, -1.0]), jnp.ones(2))
    assert jnp.all(jnp.isnan(out))


@pytest.mark.parametrize(
    "call, error, match",
    [
        (lambda: error_by_horizon(FORECAST[:1], TARGET, MASK), ValueError, "`forecast` must have"),
        (lambda: error_by_horizon(FORECAST[0], TARGET[0], MASK[0]), ValueError, "`target` must"),
        (lambda: error_by_horizon(FORECAST, TARGET, MASK[..., 0]), ValueError, "`mask` must have"),
        (lambda: error_by_horizon(FORECAST, TARGET, TARGET), TypeError, "`mask` must be boolean"),
        (
            lambda: error_by_horizon(FORECAST.astype(jnp.float32), TARGET, MASK),
            TypeError,
            "`forecast` is float32",
        ),
        (
            lambda: error_by_horizon(FORECAST, TARGET, MASK, measure="mse"),  # pyright: ignore
            ValueError,
            "`measure` must be",
        ),
        (lambda: average_by_horizon(TARGET[0], MASK[0]), ValueError, "`score` must have shape"),
        (lambda: coverage(TARGET[0], TARGET, TARGET, MASK), ValueError, "`lower` must have shape"),
        (
            lambda: crps_gaussian(jnp.zeros(2), jnp.array([1.0, 0.0]), jnp.ones(2)),
            ValueError,
            "`sd` must be above 0; got 0.0 at index 1",
        ),
        (
            lambda: interval_score(jnp.zeros(1), jnp.ones(1), jnp.ones(1), level=1.0),
            ValueError,
            "`level` must lie strictly",
        ),
    ],
)
def test_errors_name_what_is_wrong(user_errors, call, error, match):
    with pytest.raises(error, match=match):
        call()
