import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import (
    choose_autoregression,
    error_by_horizon,
    fit_autoregression,
    forecast_autoregression,
    rolling_origins,
    targets,
)


def oscillation(num, seed):
    """A noisy oscillator of order 2, next to white noise in another unit."""
    rng = np.random.default_rng(seed)
    y = np.zeros(num)
    for t in range(2, num):
        y[t] = 1.6 * y[t - 1] - 0.9 * y[t - 2] + 0.1 * rng.normal()
    return jnp.asarray(np.stack([y, 100.0 * rng.normal(size=num)], axis=1))


VALUES = oscillation(120, 0)
MASK = jnp.ones(VALUES.shape, dtype=bool).at[50, 0].set(False).at[100, 1].set(False)


@pytest.fixture(scope="module")
def choice():
    return choose_autoregression(
        VALUES, MASK, orders=[1, 2], ridges=[0.0, 0.01, 10.0], horizon=3, holdout=0.2
    )


def test_table_holds_the_documented_errors(choice):
    split = 96  # 120 less ceil(0.2 * 120)
    origins = rolling_origins(120, first=split - 1, horizon=3)
    target, observed = targets(VALUES, origins, 3), targets(MASK, origins, 3)
    early = np.ma.masked_array(VALUES[:split], ~np.asarray(MASK[:split]))
    scale = jnp.asarray(np.asarray(early.std(axis=0)))[None, None]
    for i, order in enumerate([1, 2]):
        for j, ridge in enumerate([0.0, 0.01, 10.0]):
            model = fit_autoregression(VALUES[:split], MASK[:split], order=order, ridge=ridge)
            forecast = forecast_autoregression(model, VALUES, MASK, origins, 3)
            square = (
                error_by_horizon(forecast / scale, target / scale, observed, per_channel=True) ** 2
            )
            weights = observed.sum(axis=0)
            expected = np.sqrt(np.average(square, weights=weights))
            np.testing.assert_allclose(choice.errors[i, j], expected, rtol=1e-9)


def test_best_candidate_is_fitted_to_all_samples(choice):
    assert choice.order == 2
    assert choice.errors.min() == choice.errors[1, [0.0, 0.01, 10.0].index(choice.ridge)]
    model = fit_autoregression(VALUES, MASK, order=2, ridge=choice.ridge)
    np.testing.assert_array_equal(choice.model.coefficients, model.coefficients)


def test_unit_of_a_channel_does_not_matter(choice):
    scaled = choose_autoregression(
        VALUES * jnp.array([[1e4, 1e-3]]),
        MASK,
        orders=[1, 2],
        ridges=[0.0, 0.01, 10.0],
        horizon=3,
        holdout=0.2,
    )
    np.testing.assert_allclose(scaled.errors, choice.errors, rtol=1e-8)


def test_several_recordings_and_undetermined_candidates():
    # 12 + 12 samples before the split leave 2 rows of order 11, fewer than its 23 coefficients.
    both = jnp.stack([VALUES[:16], oscillation(16, 1)])
    mask = jnp.ones(both.shape, dtype=bool)
    choice = choose_autoregression(both, mask, orders=[11, 1], ridges=[0.0], horizon=2)
    assert np.isinf(choice.errors[0, 0]) and choice.order == 1
    with pytest.raises(ValueError, match="must hold a candidate"):
        choose_autoregression(both, mask, orders=[11], ridges=[0.0], horizon=2)


@pytest.mark.parametrize(
    "change, match",
    [
        ({"orders": []}, "`orders` and `ridges` must list at least one"),
        ({"holdout": 1.0}, "`holdout` must lie strictly between 0 and 1"),
        ({"holdout": 0.01}, "`holdout` must set apart at least `horizon` = 3"),
        ({"holdout": 0.999}, "`holdout` must set apart .* fewer than all 120"),
        ({"orders": [0]}, "`orders` must be at least 1"),
        ({"mask": MASK.at[96:].set(False)}, "`mask` must leave an observed sample"),
    ],
)
def test_errors_name_what_is_wrong(user_errors, change, match):
    arguments = {"mask": MASK, "orders": [1], "ridges": [0.0], "horizon": 3, "holdout": 0.2}
    with pytest.raises(ValueError, match=match):
        choose_autoregression(VALUES, **(arguments | change))
