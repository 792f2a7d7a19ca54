import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import (
    Autoregression,
    fit_autoregression,
    forecast_autoregression,
    forecast_covariance,
)


RNG = np.random.default_rng(0)
COUPLING = np.array([[[0.5, 0.2], [-0.3, 0.6]], [[-0.2, 0.0], [0.1, -0.3]]])


def simulate(num, seed):
    rng = np.random.default_rng(seed)
    y = np.zeros((num + 50, 2))
    for t in range(2, num + 50):
        noise = rng.normal(size=2) * [1.0, 3.0]
        y[t] = [1.0, -2.0] + COUPLING[0] @ y[t - 1] + COUPLING[1] @ y[t - 2] + noise
    return jnp.asarray(y[50:])


VALUES = simulate(60, 1)
FULL = jnp.ones(VALUES.shape, dtype=bool)
GAPS = FULL.at[10:13, 0].set(False).at[30, 1].set(False).at[57, 0].set(False)


def test_german_economy(germany, german_model):
    # Luetkepohl 2005, New Introduction to Multiple Time Series Analysis, section 3.2.3 (from
    # memory), rounded there to three decimals; covariance with divisor T - 7, T = 73.
    np.testing.assert_allclose(german_model.intercept, [-0.017, 0.016, 0.013], rtol=0, atol=6e-4)
    first = [[-0.32, 0.146, 0.961], [0.044, -0.153, 0.289], [-0.002, 0.225, -0.264]]
    second = [[-0.161, 0.115, 0.934], [0.05, 0.019, -0.01], [0.034, 0.355, -0.022]]
    np.testing.assert_allclose(german_model.coefficients, [first, second], rtol=0, atol=6e-4)
    upper = 1e4 * german_model.covariance[np.triu_indices(3)]
    np.testing.assert_allclose(upper, [21.3, 0.72, 1.23, 1.37, 0.61, 0.89], rtol=0, atol=6e-3)
    values, mask = germany
    forecast = forecast_autoregression(german_model, values, mask, np.array([74]), 1)
    np.testing.assert_allclose(forecast[0, 0], [-0.011, 0.02, 0.022], rtol=0, atol=6e-4)


def test_german_economy_as_statsmodels_has_it(germany, german_model):
    from statsmodels.tsa.api import VAR

    values, mask = germany
    known = VAR(np.asarray(values)).fit(2, trend="c")
    np.testing.assert_allclose(german_model.intercept, known.intercept, rtol=0, atol=1e-10)
    np.testing.assert_allclose(german_model.coefficients, known.coefs, rtol=0, atol=1e-10)
    np.testing.assert_allclose(german_model.covariance, known.sigma_u, rtol=1e-8)
    forecast = forecast_autoregression(german_model, values, mask, np.array([40, 74]), 6)
    for known_until, out in zip((41, 75), forecast, strict=True):
        np.testing.assert_allclose(
            out, known.forecast(np.asarray(values)[:known_until], 6), atol=1e-10
        )
    np.testing.assert_allclose(
        forecast_covariance(german_model, 6), known.mse(6), rtol=1e-8, atol=1e-14
    )


def test_variance_and_correlations_of_an_oscillation():
    # AR(2) with 1.318 and -0.634: rho_1 = f1 / (1 - f2), rho_2 = f1 rho_1 + f2 and the variance
    # (1 - f2) / ((1 + f2) ((1 - f2)^2 - f1^2)); closed form, Box & Jenkins's fit to the sunspots
    # (coefficients from memory). Three channels hold the last three samples of one.
    step = jnp.array([[1.318, -0.634, 0.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])
    shock = jnp.zeros((3, 3)).at[0, 0].set(1.0)
    model = Autoregression(jnp.zeros(3), step[None], shock, jnp.zeros(3))
    far = forecast_covariance(model, 120)[-1]
    np.testing.assert_allclose(far[0, 0], 4.7859431005, rtol=0, atol=1e-9)
    np.testing.assert_allclose(
        far[0, 1:] / far[0, 0], [0.80660954712, 0.42911138311], rtol=0, atol=1e-9
    )


def test_sunspots():
    # Conditional least squares by statsmodels: AutoReg(y, lags=9, trend="c").fit().params.
    from statsmodels.datasets import sunspots

    table = sunspots.load_pandas().data
    values = jnp.asarray(np.asarray(table["SUNACTIVITY"]))[:, None]  # pyright: ignore
    model = fit_autoregression(values, jnp.ones(values.shape, dtype=bool), order=9, ridge=0.0)
    assert abs(model.intercept[0] - 6.7430535917) < 1e-8
    np.testing.assert_allclose(
        model.coefficients[:2, 0, 0], [1.1649421971, -0.40535742259], rtol=0, atol=1e-8
    )


def plain_ridge(values, mask, order, ridge):
    """The documented objective, solved row by row with numpy."""
    values, mask = np.asarray(values), np.asarray(mask)
    rows = [t for t in range(order, len(values)) if mask[t - order : t + 1].all()]
    x = np.array([values[t - order : t][::-1].ravel() for t in rows])
    y = values[rows]
    sd, n = x.std(axis=0), len(rows)
    z = (x - x.mean(axis=0)) / sd
    gram = z.T @ z + n * ridge * np.eye(z.shape[1])
    b = np.linalg.solve(gram, z.T @ (y - y.mean(axis=0)))
    residual = y - y.mean(axis=0) - z @ b
    freedom = 1 + np.trace(z @ np.linalg.solve(gram, z.T))
    coefficients = (b / sd[:, None]).reshape(order, values.shape[1], -1).transpose(0, 2, 1)
    intercept = y.mean(axis=0) - x.mean(axis=0) @ (b / sd[:, None])
    return intercept, coefficients, residual.T @ residual / (n - freedom), y.mean(axis=0)


@pytest.mark.parametrize("ridge", [0.0, 0.3])
def test_ridge_minimises_the_documented_objective(ridge):
    model = fit_autoregression(VALUES, GAPS, order=2, ridge=ridge)
    expected = plain_ridge(VALUES, GAPS, 2, ridge)
    for got, want in zip(jax.tree.leaves(model), expected, strict=True):
        np.testing.assert_allclose(got, want, rtol=1e-10, atol=1e-12)


def test_ridge_has_no_unit():
    unit = jnp.array([[1e3, 1e-2]])
    model = fit_autoregression(VALUES, GAPS, order=2, ridge=0.3)
    scaled = fit_autoregression(VALUES * unit + 5.0, GAPS, order=2, ridge=0.3)
    ratio = unit[0][:, None] / unit
    np.testing.assert_allclose(scaled.coefficients, model.coefficients * ratio[None], rtol=1e-9)


def test_strong_ridge_leaves_the_mean():
    model = fit_autoregression(VALUES, FULL, order=2, ridge=1e12)
    np.testing.assert_allclose(model.coefficients, 0, atol=1e-10)
    np.testing.assert_allclose(model.intercept, VALUES[2:].mean(axis=0), rtol=1e-9)


def test_several_recordings_share_one_model():
    # Joined by a gap of `order` missing samples, two recordings give the same rows.
    other = simulate(60, 2)
    gap = jnp.full((2, 2), jnp.nan)
    joined = jnp.concatenate([VALUES, gap, other])
    model = fit_autoregression(joined, ~jnp.isnan(joined), order=2, ridge=0.1)
    both = jnp.stack([VALUES, other])
    stacked = fit_autoregression(both, jnp.ones(both.shape, dtype=bool), order=2, ridge=0.1)
    for got, want in zip(jax.tree.leaves(stacked), jax.tree.leaves(model), strict=True):
        np.testing.assert_allclose(got, want, rtol=1e-10)


def test_known_system_is_recovered():
    long = simulate(20_000, 3)
    model = fit_autoregression(long, jnp.ones(long.shape, dtype=bool), order=2, ridge=0.0)
    # Standard errors are near 1 / sqrt(20000) = 0.007, times the ratio of scales (at most 3).
    np.testing.assert_allclose(model.coefficients, COUPLING, atol=0.07)
    np.testing.assert_allclose(model.covariance, [[1.0, 0.0], [0.0, 9.0]], atol=0.3)


def fit_and_forecast(values, mask, ridge):
    model = fit_autoregression(values, mask, order=2, ridge=ridge)
    forecast = forecast_autoregression(model, values, mask, np.array([31, 59]), 4)
    return jnp.sum(forecast**2) + jnp.sum(model.covariance), (model, forecast)


@pytest.fixture(scope="module")
def run():
    return jax.jit(jax.value_and_grad(fit_and_forecast, argnums=(0, 2), has_aux=True))


@pytest.mark.parametrize("garbage", [jnp.nan, jnp.inf, -1e300])
def test_masked_entries_change_no_bit(run, garbage):
    ridge = jnp.asarray(0.1)
    clean = run(VALUES, GAPS, ridge)
    dirty = run(jnp.where(GAPS, VALUES, garbage), GAPS, ridge)
    jax.tree.map(np.testing.assert_array_equal, clean, dirty)
    slope = np.asarray(clean[1][0])
    assert np.all(np.isfinite(slope))
    assert not np.any(slope[~np.asarray(GAPS)])


@pytest.mark.parametrize("ridge", [0.0, 0.1])
def test_gradients_against_central_differences(run, ridge):
    ridge, step = jnp.asarray(ridge), 1e-5
    by_value, by_ridge = run(VALUES, GAPS, ridge)[1]
    for index in [(5, 1), (29, 0), (59, 1)]:
        change = jnp.zeros_like(VALUES).at[index].set(step)
        up, down = (run(VALUES + s * change, GAPS, ridge)[0][0] for s in (1, -1))
        np.testing.assert_allclose(by_value[index], (up - down) / (2 * step), rtol=1e-6)
    # One-sided to second order: at 0 the penalty cannot go down.
    at = [run(VALUES, GAPS, ridge + k * step)[0][0] for k in range(3)]
    slope = (-3 * at[0] + 4 * at[1] - at[2]) / (2 * step)
    np.testing.assert_allclose(by_ridge, slope, rtol=1e-5)


def test_second_derivative_by_the_penalty():
    slope = jax.jit(jax.grad(lambda r: fit_and_forecast(VALUES, GAPS, r)[0]))
    curve = jax.grad(lambda r: slope(r))(jnp.asarray(0.1))
    step = 1e-5
    central = (slope(jnp.asarray(0.1 + step)) - slope(jnp.asarray(0.1 - step))) / (2 * step)
    np.testing.assert_allclose(curve, central, rtol=1e-6)


def test_vmap_over_recordings():
    fit = lambda v: fit_autoregression(v, FULL, order=2, ridge=0.1)
    both = jnp.stack([VALUES, simulate(60, 2)])
    models = jax.jit(jax.vmap(fit))(both)
    alone = fit(both[1])
    for got, want in zip(jax.tree.leaves(models), jax.tree.leaves(alone), strict=True):
        np.testing.assert_allclose(got[1], want, rtol=1e-10)
    forecast = jax.vmap(lambda m, v: forecast_autoregression(m, v, FULL, np.array([59]), 3))
    np.testing.assert_allclose(
        forecast(models, both)[1],
        forecast_autoregression(alone, both[1], FULL, np.array([59]), 3),
        rtol=1e-10,
    )


def test_float32_keeps_digits_where_lags_are_nearly_collinear():
    # A finely sampled oscillation: the normal equations would lose every digit in float32.
    t = jnp.arange(400.0)[:, None]
    noise = jnp.asarray(RNG.normal(size=(400, 1)))
    values = jnp.sin(0.05 * t) + 1e-3 * noise
    fit = lambda v: fit_autoregression(v, jnp.ones(v.shape, dtype=bool), order=4, ridge=0.0)
    small, large = fit(values.astype(jnp.float32)), fit(values)
    assert all(leaf.dtype == jnp.float32 for leaf in jax.tree.leaves(small))
    np.testing.assert_allclose(small.coefficients, large.coefficients, atol=2e-3)
    forecast = forecast_autoregression(
        small, values.astype(jnp.float32), values > -9, np.array([399]), 3
    )
    assert forecast.dtype == forecast_covariance(small, 3).dtype == jnp.float32


def test_forecast_uses_nothing_later_than_the_origin(german_model, germany):
    values, mask = germany
    clean = forecast_autoregression(german_model, values, mask, np.array([40]), 3)
    later = values.at[41:].set(jnp.nan)
    dirty = forecast_autoregression(german_model, later, mask, np.array([40]), 3)
    np.testing.assert_array_equal(clean, dirty)


def test_missing_lags_are_forecast_from_those_before():
    model = fit_autoregression(VALUES, FULL, order=2, ridge=0.0)
    whole = forecast_autoregression(model, VALUES, FULL, np.array([30]), 6)
    gone = FULL.at[31:34].set(False)
    bridged = forecast_autoregression(model, VALUES, gone, np.array([33]), 3)
    np.testing.assert_allclose(bridged[0], whole[0, 3:], rtol=1e-12)
    # One channel observed, the other forecast.
    half = FULL.at[31, 1].set(False)
    filled = VALUES.at[31, 1].set(whole[0, 0, 1])
    np.testing.assert_allclose(
        forecast_autoregression(model, VALUES, half, np.array([31]), 3),
        forecast_autoregression(model, filled, FULL, np.array([31]), 3),
        rtol=1e-12,
    )


def test_before_the_recording_stands_the_mean():
    model = fit_autoregression(VALUES, FULL, order=2, ridge=0.0)
    padded = jnp.concatenate([model.mean[None], VALUES[:1]])
    np.testing.assert_allclose(
        forecast_autoregression(model, VALUES, FULL, np.array([0]), 2),
        forecast_autoregression(model, padded, FULL[:2], np.array([1]), 2),
        rtol=1e-12,
    )


def test_forecast_outside_the_recording_is_nan_under_jit():
    model = fit_autoregression(VALUES, FULL, order=2, ridge=0.0)
    forecast = jax.jit(lambda o: forecast_autoregression(model, VALUES, FULL, o, 2))
    assert jnp.all(jnp.isnan(forecast(jnp.array([-1, 60]))))


def test_undetermined_fit_is_not_finite():
    twice = jnp.concatenate([VALUES, VALUES], axis=1)
    constant = VALUES.at[:, 1].set(0.1)
    for values in (twice, constant):
        mask = jnp.ones(values.shape, dtype=bool)
        assert jnp.all(jnp.isnan(fit_autoregression(values, mask, order=2, ridge=0.0).coefficients))
        model = fit_autoregression(values, mask, order=2, ridge=0.1)
        assert all(bool(jnp.all(jnp.isfinite(leaf))) for leaf in jax.tree.leaves(model))
    # The flat channel has no influence, and the rest is as if it were not there.
    alone = fit_autoregression(VALUES[:, :1], FULL[:, :1], order=2, ridge=0.1)
    np.testing.assert_allclose(model.coefficients[:, 0, 0], alone.coefficients[:, 0, 0], rtol=1e-9)
    np.testing.assert_array_equal(model.coefficients[:, 0, 1], jnp.zeros(2))


@pytest.mark.parametrize("kept", [0, 3, 7])
def test_too_few_rows_are_not_finite_under_jit(kept):
    mask = FULL.at[kept:].set(False)
    model = jax.jit(lambda m: fit_autoregression(VALUES, m, order=2, ridge=0.0))(mask)
    assert not jnp.any(jnp.isfinite(model.coefficients))
    assert not jnp.any(jnp.isfinite(model.covariance))


MODEL = Autoregression(jnp.zeros(2), COUPLING, jnp.eye(2), jnp.zeros(2))


@pytest.mark.parametrize(
    "call, error, match",
    [
        (
            lambda: fit_autoregression(VALUES, FULL.at[7:].set(False), order=2, ridge=0.0),
            ValueError,
            "`mask` must leave at least 6 rows .* got 5",
        ),
        (
            lambda: fit_autoregression(VALUES, FULL.at[3:].set(False), order=2, ridge=1.0),
            ValueError,
            "`mask` must leave at least 2 rows .* got 1",
        ),
        (
            lambda: fit_autoregression(VALUES, FULL, order=60, ridge=0.0),
            ValueError,
            "`values` must have more than `order` = 60 samples",
        ),
        (
            lambda: fit_autoregression(VALUES, FULL, order=2, ridge=-0.1),
            ValueError,
            "`ridge` must be 0 or more",
        ),
        (
            lambda: fit_autoregression(VALUES, FULL, order=2, ridge=jnp.ones(2)),
            ValueError,
            "`ridge` must have shape",
        ),
        (
            lambda: fit_autoregression(VALUES[:, 0], FULL[:, 0], order=2, ridge=0.0),
            ValueError,
            "`values` must have shape",
        ),
        (
            lambda: fit_autoregression(VALUES, FULL[:5], order=2, ridge=0.0),
            ValueError,
            "`mask` must have shape",
        ),
        (
            lambda: forecast_autoregression(MODEL, VALUES[:, :1], FULL[:, :1], np.array([5]), 1),
            ValueError,
            "`values` must have shape",
        ),
        (
            lambda: forecast_autoregression(
                MODEL, VALUES.astype(jnp.float32), FULL, np.array([5]), 1
            ),
            TypeError,
            "`values` is float32 but `model.coefficients` is float64",
        ),
        (
            lambda: forecast_autoregression(MODEL, VALUES, FULL, np.array([60]), 1),
            ValueError,
            "`origins` must be within 0 to 59",
        ),
        (lambda: forecast_covariance(MODEL, 0), ValueError, "`horizon` must be at least 1"),
        (
            lambda: Autoregression(jnp.zeros(2), COUPLING[0], jnp.eye(2), jnp.zeros(2)),
            ValueError,
            "`coefficients` must have shape",
        ),
    ],
)
def test_errors_name_what_is_wrong(user_errors, call, error, match):
    with pytest.raises(error, match=match):
        call()
