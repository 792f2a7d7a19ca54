import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import rayleigh_test


PHASES = jnp.asarray(np.random.default_rng(0).uniform(-1.5, 2.0, 20))
MASK = jnp.ones(20, dtype=bool).at[3].set(False).at[11:14].set(False)


@pytest.fixture(scope="module")
def run():
    def p_value(phases, mask):
        out = rayleigh_test(phases, mask)
        return out.p_value, out

    return jax.jit(jax.value_and_grad(p_value, has_aux=True))


def gathered(n, statistic):
    """`n` phases with the given `n R^2`: at plus and minus one angle."""
    angle = np.arccos(np.sqrt(statistic / n))
    return jnp.asarray(np.tile([angle, -angle], n // 2))


def test_p_value_is_that_of_the_series():
    # n = 30, n R^2 = 3: e^-z (1 + (2z - z^2) / 4n - (24z - 132z^2 + 76z^3 - 9z^4) / 288n^2),
    # Mardia & Jupp 2000 (from memory); 200,000 uniform samples gave 0.048315. Stated tolerance
    # 0.002; the two approximations differ by less than their own error, 4e-4.
    out = rayleigh_test(gathered(30, 3.0))
    np.testing.assert_allclose(out.statistic, 3.0, rtol=1e-12)
    assert abs(out.p_value - 0.048502631) < 2e-5


def test_p_value_is_uniform_of_uniform_phases():
    phases = jnp.asarray(np.random.default_rng(1).uniform(0, 2 * np.pi, (20_000, 12)))
    p = np.asarray(jax.jit(jax.vmap(rayleigh_test))(phases).p_value)
    for level in (0.01, 0.05, 0.2, 0.5):
        error = np.sqrt(level * (1 - level) / 20_000)
        # 0.003 is what the approximation is allowed.
        assert abs(np.mean(p < level) - level) < 0.003 + 4 * error


def test_ends_of_the_scale():
    equal = rayleigh_test(jnp.full(10, 0.7))
    np.testing.assert_allclose([equal.resultant, equal.statistic], [1.0, 10.0], rtol=1e-12)
    assert 0 < equal.p_value < 1e-5
    spread = rayleigh_test(2 * jnp.pi * jnp.arange(12.0) / 12)
    np.testing.assert_allclose(spread.resultant, 0, atol=1e-15)
    np.testing.assert_allclose(spread.p_value, 1, rtol=1e-12)
    # Two opposite gatherings go unseen, as the documentation says.
    assert rayleigh_test(gathered(20, 0.0)).p_value > 0.999


@pytest.mark.parametrize("garbage", [jnp.nan, jnp.inf, -1e300])
def test_masked_entries_change_no_bit(run, garbage):
    clean, dirty = run(PHASES, MASK), run(jnp.where(MASK, PHASES, garbage), MASK)
    jax.tree.map(np.testing.assert_array_equal, clean, dirty)
    assert np.all(np.isfinite(clean[1])) and not np.any(np.asarray(clean[1])[~np.asarray(MASK)])
    alone = rayleigh_test(PHASES[np.asarray(MASK)])
    np.testing.assert_allclose(clean[0][1].p_value, alone.p_value, rtol=1e-12)


def test_gradient_against_central_differences_and_where_phases_cancel(run):
    slope = run(PHASES, MASK)[1]
    change = jnp.zeros(20).at[5].set(1e-6)
    up, down = (run(PHASES + s * change, MASK)[0][0] for s in (1, -1))
    np.testing.assert_allclose(slope[5], (up - down) / 2e-6, rtol=1e-5)
    one = jax.grad(lambda x: rayleigh_test(x).resultant)
    assert np.all(np.isfinite(one(jnp.array([0.0, jnp.pi]))))


def test_no_verdict_where_there_is_none(run):
    for given in ((PHASES, MASK & False), (PHASES.at[0].set(jnp.inf), MASK)):
        out = run(*given)[0][1]
        assert not out.defined
        assert np.all(np.isnan([out.resultant, out.statistic, out.p_value]))


def test_float32(run):
    small, large = run(PHASES.astype(jnp.float32), MASK)[0][1], run(PHASES, MASK)[0][1]
    assert small.p_value.dtype == small.resultant.dtype == jnp.float32
    np.testing.assert_allclose(small.p_value, large.p_value, rtol=1e-4)


def test_errors_name_what_is_wrong(user_errors):
    with pytest.raises(ValueError, match=r"`phases` must have shape \(sample,\)"):
        rayleigh_test(PHASES[:, None])
    with pytest.raises(TypeError, match="`phases` must hold real floating"):
        rayleigh_test(jnp.arange(3))
    with pytest.raises(ValueError, match="`mask` must have shape that of `phases`"):
        rayleigh_test(PHASES, MASK[:4])
