import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats

from oscillib.evaluate import diebold_mariano, skill


A = jnp.array([0.3, -0.5, 0.8, -0.2, 0.6, -0.9, 0.4, 0.1, -0.7, 0.5])
B = jnp.array([0.6, -0.4, 1.1, -0.7, 0.2, -1.2, 0.9, 0.3, -0.6, 1.0])


def test_one_step_ahead():
    # Formulas of Diebold and Mariano 1995 and Harvey et al. 1997, worked out apart from this code.
    statistic, p_value = diebold_mariano(A, B, horizon=1)
    assert abs(statistic / np.sqrt(0.9) + 2.51027901321123) < 1e-12
    assert abs(statistic + 2.38145977328022) < 1e-12
    assert abs(p_value - 0.041129163052) < 1e-12


def test_one_step_ahead_is_the_t_test():
    # At horizon 1 the factor turns the variance with divisor n into that with divisor n - 1.
    statistic, p_value = np.asarray(scipy.stats.ttest_1samp(np.asarray(A**2 - B**2), 0.0))
    result = diebold_mariano(A, B, horizon=1)
    assert abs(result.statistic - statistic) < 1e-12
    assert abs(result.p_value - p_value) < 1e-12


def test_two_steps_ahead():
    # Formulas of Diebold and Mariano 1995 and Harvey et al. 1997, worked out apart from this code.
    statistic, p_value = diebold_mariano(A, B, horizon=2)
    assert abs(statistic + 3.57900999200025) < 1e-10
    assert abs(p_value - 2 * scipy.stats.t.sf(3.57900999200025, 9)) < 1e-12


def test_no_verdict_without_variance():
    for result in (diebold_mariano(A, A, horizon=1), diebold_mariano(A, -A, horizon=3)):
        assert jnp.isnan(result.statistic) and jnp.isnan(result.p_value)
    alternating = jnp.sqrt(jnp.array([1.0, 3.0, 1.0, 3.0, 1.0, 3.0]))
    assert jnp.isnan(diebold_mariano(alternating, jnp.ones(6), horizon=2).p_value)


def test_jit_vmap_grad_and_float32():
    test = lambda a, b: diebold_mariano(a, b, horizon=2)
    out = jax.jit(jax.vmap(test))(
        jnp.stack([A, B]).astype(jnp.float32), jnp.stack([B, A]).astype(jnp.float32)
    )
    assert out.statistic.dtype == out.p_value.dtype == jnp.float32
    np.testing.assert_allclose(out.statistic, [-3.579009992, 3.579009992], rtol=1e-5)
    slope = jax.grad(lambda a: test(a, B).p_value)(A)
    step = 1e-6 * jnp.eye(10)[0]
    central = (test(A + step, B).p_value - test(A - step, B).p_value) / 2e-6
    np.testing.assert_allclose(slope[0], central, rtol=1e-6)


def test_skill_is_one_less_the_ratio():
    error = jnp.array([0.0, 1.0, 2.0, 4.0])
    reference = jnp.array([2.0, 2.0, 2.0, 2.0])
    np.testing.assert_array_equal(skill(error, reference), [1.0, 0.5, 0.0, -1.0])
    np.testing.assert_array_equal(skill(error**2, reference**2), [1.0, 0.75, 0.0, -3.0])
    assert not jnp.isfinite(skill(error[1], jnp.zeros(())))


@pytest.mark.parametrize(
    "call, error, match",
    [
        (lambda: diebold_mariano(A, B[:-1], horizon=1), ValueError, "`errors_b` must have shape"),
        (lambda: diebold_mariano(A[None], B[None], horizon=1), ValueError, "`errors_a` must have"),
        (lambda: diebold_mariano(A[:3], B[:3], horizon=3), ValueError, "more origins than"),
        (lambda: diebold_mariano(A, B, horizon=0), ValueError, "`horizon` must be at least 1"),
        (
            lambda: diebold_mariano(A, B.astype(jnp.float32), horizon=1),
            TypeError,
            "`errors_b` is float32",
        ),
        (lambda: skill(A, B[:1]), ValueError, "`reference` must have shape"),
    ],
)
def test_errors_name_what_is_wrong(user_errors, call, error, match):
    with pytest.raises(error, match=match):
        call()
