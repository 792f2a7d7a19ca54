import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import order_criteria


@pytest.fixture(scope="module")
def run(germany):
    values, mask = germany
    mask = mask.at[20, 1].set(False).at[50].set(False)

    def total(values):
        out = order_criteria(values, mask, max_order=4)
        return out.aic[2] + out.bic[4] + out.hq[0], out

    return values, mask, jax.jit(jax.value_and_grad(total, has_aux=True))


def test_orders_of_the_german_economy(germany):
    # Luetkepohl 2005, table 4.5 (from memory): AIC 2, BIC 0, HQ 0, up to 4 lags on T = 71.
    from statsmodels.tsa.api import VAR

    out = order_criteria(*germany, max_order=4)
    np.testing.assert_array_equal(out.best, [2, 0, 0])
    known = VAR(np.asarray(germany[0])).select_order(4, trend="c")
    assert (known.aic, known.bic, known.hqic) == (2, 0, 0)
    for name, theirs in (("aic", "aic"), ("bic", "bic"), ("hq", "hqic")):
        np.testing.assert_allclose(getattr(out, name), known.ics[theirs], rtol=1e-10)


@pytest.mark.long
def test_known_order_is_found():
    # An AR(2) of 2000 samples: BIC and HQ are consistent (Hannan & Quinn 1979, from memory).
    rng = np.random.default_rng(0)
    y = np.zeros((2000, 1))
    for t in range(2, 2000):
        y[t] = 1.318 * y[t - 1] - 0.634 * y[t - 2] + rng.normal()
    out = order_criteria(jnp.asarray(y), jnp.ones((2000, 1), dtype=bool), max_order=6)
    np.testing.assert_array_equal(out.best[1:], [2, 2])


def plain(values, mask, order, most):
    """The documented criteria of one order, by numpy on the rows named."""
    values, mask = np.asarray(values), np.asarray(mask)
    rows = [t for t in range(most, len(values)) if mask[t - most : t + 1].all()]
    x = np.array([[1.0, *values[t - order : t][::-1].ravel()] for t in rows])
    y = values[rows]
    rest = y - x @ np.linalg.lstsq(x, y, rcond=None)[0]
    n, c = y.shape
    fit, size = np.linalg.slogdet(rest.T @ rest / n)[1], c * (1 + c * order) / n
    return fit + size * np.array([2, np.log(n), 2 * np.log(np.log(n))])


def test_missing_samples_leave_the_documented_rows(run):
    values, mask, compiled = run
    out = compiled(values)[0][1]
    for p in range(5):
        found = [out.aic[p], out.bic[p], out.hq[p]]
        np.testing.assert_allclose(found, plain(values, mask, p, 4), rtol=1e-10)


@pytest.mark.parametrize("garbage", [jnp.nan, jnp.inf, -1e300])
def test_masked_entries_change_no_bit(run, garbage):
    values, mask, compiled = run
    clean, dirty = compiled(values), compiled(jnp.where(mask, values, garbage))
    jax.tree.map(np.testing.assert_array_equal, clean, dirty)
    assert np.all(np.isfinite(clean[1])) and not np.any(np.asarray(clean[1])[~np.asarray(mask)])


def test_gradient_against_central_differences(run):
    values, _, compiled = run
    slope = compiled(values)[1]
    for index in [(10, 0), (33, 2), (74, 1)]:
        change = jnp.zeros_like(values).at[index].set(1e-6)
        up, down = (compiled(values + s * change)[0][0] for s in (1, -1))
        np.testing.assert_allclose(slope[index], (up - down) / 2e-6, rtol=1e-5)


def test_undetermined_order_is_no_success(run):
    values, _, compiled = run
    twice = compiled(values.at[:, 1].set(values[:, 0]))[0][1]
    np.testing.assert_array_equal(twice.best, -1)
    assert np.all(np.isnan(twice.aic))


def test_float32(run):
    values, _, compiled = run
    small, large = compiled(values.astype(jnp.float32))[0][1], compiled(values)[0][1]
    assert small.aic.dtype == jnp.float32
    np.testing.assert_allclose(small.aic, large.aic, rtol=1e-4)
    np.testing.assert_array_equal(small.best, large.best)


def test_errors_name_what_is_wrong(run, user_errors):
    values, mask, _ = run
    with pytest.raises(ValueError, match="`values` must have more than `max_order` = 75"):
        order_criteria(values, mask, max_order=75)
    with pytest.raises(ValueError, match="`mask` must leave at least 14 rows"):
        order_criteria(values[:12], mask[:12], max_order=4)
