import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.checks import check_calibration, check_recovery
from oscillib.parameters import Fixed, Free, Positive


KEY = jax.random.key(0)
TRUTH = {"mean": jnp.array([1.0, -2.0]), "scale": jnp.asarray(3.0), "known": jnp.asarray(7.0)}
RULES = {"mean": Free(), "scale": Positive(), "known": Fixed()}


def simulate(params, key):
    noise = params["scale"] * jax.random.normal(key, (100, 2))
    return params["mean"][None] + noise


def fit(data):
    """Maximum likelihood, with the errors of its Fisher information."""
    mean = jnp.mean(data, axis=0)
    scale = jnp.sqrt(jnp.mean((data - mean[None]) ** 2))
    errors = {
        "mean": scale / 10 * jnp.ones(2),
        "scale": scale / jnp.sqrt(400.0),
        "known": jnp.zeros(()),
    }
    return {"mean": mean, "scale": scale, "known": jnp.asarray(7.0)}, errors


@pytest.mark.parametrize("constraints", [None, RULES])
def test_maximum_likelihood_recovers_its_own_simulations(constraints):
    check_recovery(simulate, fit, TRUTH, constraints, key=KEY, count=200)


def test_fit_that_cannot_be_traced():
    def on_the_host(data):
        estimate, error = fit(jnp.asarray(np.asarray(data)))
        return jax.tree.map(np.asarray, (estimate, error))

    check_recovery(simulate, on_the_host, TRUTH, key=KEY, count=20, batched=False)


def test_lost_fits_are_counted_and_allowed():
    def losing(data):
        estimate, error = fit(data)
        bad = data[0, 0] > 6.0
        return jax.tree.map(lambda x: jnp.where(bad, jnp.nan, x), estimate), error

    with pytest.raises(AssertionError, match=r"every fit succeeds[\s\S]*at most 0 of 100"):
        check_recovery(simulate, losing, TRUTH, key=KEY, count=100)
    check_recovery(simulate, losing, TRUTH, key=KEY, count=100, lost=30)


def test_nothing_fitted():
    nothing = lambda data: (TRUTH, jax.tree.map(jnp.zeros_like, TRUTH))
    with pytest.raises(AssertionError, match="something is fitted"):
        check_recovery(simulate, nothing, TRUTH, key=KEY, count=10)


def test_standard_normal_errors_are_calibrated():
    z = np.random.default_rng(0).normal(size=(500, 2, 3))
    check_calibration(z=z, level=0.9)
    check_calibration(z=jnp.asarray(z), level=0.5)
    check_calibration(inside=np.abs(z) < 1, level=0.6826894921370859)


def test_uniform_ranks_are_calibrated():
    ranks = np.random.default_rng(0).integers(0, 100, size=(600, 3))
    check_calibration(ranks=ranks, draws=99)
    check_calibration(ranks=ranks[:, 0], draws=99, bins=4)


def test_ranks_of_an_exact_posterior():
    """A normal mean with a normal prior: the posterior is known (common practice, no source)."""
    rng = np.random.default_rng(1)
    mean = rng.normal(size=500)
    reading = mean + rng.normal(size=500)
    draws = reading[:, None] / 2 + rng.normal(size=(500, 19)) / np.sqrt(2)
    check_calibration(ranks=np.sum(draws < mean[:, None], axis=1), draws=19)


def test_moments_of_the_ranks_of_an_exact_posterior():
    # Uniform on 0..19: mean 19 / 2, variance 19 * 21 / 12; Talts et al. 2018 (arXiv 1804.06788;
    # from memory). Stated tolerance 0.25: nearly four standard errors of the variance.
    rng = np.random.default_rng(3)
    mean = rng.normal(size=200_000)
    reading = mean + rng.normal(size=200_000)
    draws = reading[:, None] / 2 + rng.normal(size=(200_000, 19)) / np.sqrt(2)
    ranks = np.sum(draws < mean[:, None], axis=1)
    assert abs(ranks.mean() - 9.5) < 0.25 and abs(ranks.var() - 33.25) < 0.25
    check_calibration(ranks=ranks, draws=19)


def test_alarms_are_as_rare_as_stated():
    # 600 checks of right models at an alarm of 0.01 each; binomial(600, 0.01) is above 17 in less
    # than 1e-4 of cases, and 0 in 0.002 of them. Coverage is discrete, so its rate is lower.
    rng = np.random.default_rng(2)
    refused = {"z": 0, "ranks": 0}
    for _ in range(600):
        try:
            check_calibration(z=rng.normal(size=(200, 1)), alarm=0.01)
        except AssertionError:
            refused["z"] += 1
        try:
            check_calibration(ranks=rng.integers(0, 20, size=(200, 1)), draws=19, alarm=0.01)
        except AssertionError:
            refused["ranks"] += 1
    assert 1 <= refused["z"] <= 17
    assert 1 <= refused["ranks"] <= 17


def test_misuse(user_errors):
    del user_errors
    with pytest.raises(ValueError, match="exactly one of `z`, `inside` and `ranks`; got none"):
        check_calibration()
    with pytest.raises(ValueError, match="got z and ranks"):
        check_calibration(z=np.ones(4), ranks=np.ones(4, int))
    with pytest.raises(ValueError, match="`level` must lie strictly between"):
        check_calibration(z=np.ones(4), level=1.0)
    with pytest.raises(ValueError, match="`z` must be finite"):
        check_calibration(z=np.full(400, np.nan))
    with pytest.raises(ValueError, match="4 simulations are too few"):
        check_calibration(z=np.ones(4))
    with pytest.raises(TypeError, match="`inside` must be boolean"):
        check_calibration(inside=np.ones(400))
    with pytest.raises(ValueError, match="`draws` must be given"):
        check_calibration(ranks=np.ones(400, int))
    with pytest.raises(ValueError, match=r"`ranks` must lie in 0 \.\.\. 9; got 0 to 10"):
        check_calibration(ranks=np.arange(400) % 11, draws=9)
    with pytest.raises(ValueError, match="`bins` must divide"):
        check_calibration(ranks=np.arange(400) % 11, draws=10, bins=4)
    with pytest.raises(TypeError, match="whole numbers"):
        check_calibration(ranks=np.ones(400), draws=9)
    with pytest.raises(ValueError, match="must return the estimate in the structure"):
        check_recovery(simulate, lambda data: (data, data), TRUTH, key=KEY, count=4)
    with pytest.raises(ValueError, match="`count` must be at least 2"):
        check_recovery(simulate, fit, TRUTH, key=KEY, count=1)
