from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import portmanteau


RNG = np.random.default_rng(0)
VALUES = jnp.asarray(RNG.normal(size=(60, 2)))
GAPS = jnp.ones((60, 2), dtype=bool).at[7:11, 0].set(False).at[40, 1].set(False)


@pytest.fixture(scope="module")
def run():
    def total(residuals, mask):
        out = portmanteau(residuals, mask, lags=4)
        return jnp.sum(out.p_value), out

    return jax.jit(jax.value_and_grad(total, has_aux=True))


def test_sunspots():
    # Ljung-Box Q(5) of the yearly sunspot numbers 1700-2008 by statsmodels, and by the formula.
    from statsmodels.datasets import sunspots
    from statsmodels.stats.diagnostic import acorr_ljungbox

    table: Any = sunspots.load_pandas().data
    values = np.array(table["SUNACTIVITY"], dtype=float)
    x = jnp.asarray(values)[:, None]
    out = portmanteau(x, jnp.ones(x.shape, dtype=bool), lags=5, fitted=2)
    assert abs(out.statistic[0] - 355.26381739) < 1e-8
    # The p-values of noise are of an ordinary size; `fitted` lessens the degrees of freedom.
    noise = np.random.default_rng(1).normal(size=values.shape)
    out = portmanteau(jnp.asarray(noise)[:, None], x == x, lags=5, fitted=2)
    known = acorr_ljungbox(noise, lags=[5], model_df=2)
    np.testing.assert_allclose(out.statistic[0], known["lb_stat"].iloc[0], rtol=1e-12)
    np.testing.assert_allclose(out.p_value[0], known["lb_pvalue"].iloc[0], rtol=1e-10)


def test_missing_samples_leave_the_documented_sum(run):
    (_, out), _ = run(VALUES, GAPS)
    for j in range(2):
        seen = np.asarray(GAPS[:, j])
        x = np.asarray(VALUES[:, j]) - np.asarray(VALUES[:, j])[seen].mean()
        n, q = seen.sum(), 0.0
        for k in range(1, 5):
            rows = [t for t in range(k, 60) if seen[t] and seen[t - k]]
            r = sum(x[t] * x[t - k] for t in rows) / (x[seen] ** 2).sum()
            q += n * (n + 2) * r**2 / len(rows)
        np.testing.assert_allclose(out.statistic[j], q, rtol=1e-12)


@pytest.mark.parametrize("garbage", [jnp.nan, jnp.inf, -1e300])
def test_masked_entries_change_no_bit(run, garbage):
    clean, dirty = run(VALUES, GAPS), run(jnp.where(GAPS, VALUES, garbage), GAPS)
    jax.tree.map(np.testing.assert_array_equal, clean, dirty)
    assert np.all(np.isfinite(clean[1])) and not np.any(np.asarray(clean[1])[~np.asarray(GAPS)])


def test_gradient_against_central_differences(run):
    slope = run(VALUES, GAPS)[1]
    for index in [(0, 0), (12, 0), (59, 1)]:
        change = jnp.zeros_like(VALUES).at[index].set(1e-5)
        up, down = (run(VALUES + s * change, GAPS)[0][0] for s in (1, -1))
        np.testing.assert_allclose(slope[index], (up - down) / 2e-5, rtol=1e-5, atol=1e-9)


@pytest.mark.long
def test_rejects_white_noise_at_the_nominal_rate_with_and_without_gaps():
    noise = jnp.asarray(RNG.normal(size=(300, 2000)))
    for mask in (noise == noise, jnp.asarray(RNG.random(noise.shape) < 0.7)):
        share = float(jnp.mean(portmanteau(noise, mask, lags=10).p_value < 0.05))
        # 2000 channels: the standard error of the share is 0.005. Few lags beside many samples
        # leave the law of Q near chi-squared.
        assert abs(share - 0.05) < 0.02


def test_no_verdict_where_there_is_none(run):
    constant = VALUES.at[:, 0].set(0.1)
    undefined = {
        "constant": (constant, GAPS),
        "never observed": (VALUES, GAPS.at[:, 0].set(False)),
        "no pair two apart": (VALUES, GAPS.at[:, 0].set(jnp.arange(60) < 2)),
        "not finite": (VALUES.at[20, 0].set(jnp.inf), GAPS),
    }
    for why, given in undefined.items():
        out = run(*given)[0][1]
        assert not out.defined[0] and np.isnan(out.statistic[0]) and np.isnan(out.p_value[0]), why
        assert out.defined[1] and np.isfinite(out.p_value[1]), why


def test_float32_and_vmap(run):
    (_, small), _ = run(VALUES.astype(jnp.float32), GAPS)
    (_, large), _ = run(VALUES, GAPS)
    assert small.statistic.dtype == small.p_value.dtype == jnp.float32
    np.testing.assert_allclose(small.p_value, large.p_value, rtol=1e-4)
    both = jnp.stack([VALUES, VALUES[::-1]])
    many = jax.jit(jax.vmap(lambda v: portmanteau(v, GAPS, lags=4)))(both)
    np.testing.assert_allclose(many.p_value[0], large.p_value, rtol=1e-12)


def test_errors_name_what_is_wrong(user_errors):
    with pytest.raises(ValueError, match=r"`lags` must be above `fitted` = 3 and below the 60"):
        portmanteau(VALUES, GAPS, lags=3, fitted=3)
    with pytest.raises(ValueError, match="`lags` must be above"):
        portmanteau(VALUES, GAPS, lags=60)
    with pytest.raises(TypeError, match="`mask` must be boolean"):
        portmanteau(VALUES, VALUES, lags=3)
    with pytest.raises(ValueError, match="`residuals` must have shape"):
        portmanteau(VALUES[:, 0], GAPS[:, 0], lags=3)
