import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.losses._finite import finite_or_zero


def tricky(x, w):
    """Fine above 0; at 0 the slope alone is infinite; below 0 both are NaN."""
    return jnp.sum(w * jnp.sqrt(x))


@pytest.fixture(scope="module")
def both():
    def total(x, w):
        values, good = jax.vmap(lambda x: finite_or_zero(lambda x: tricky(x, w), x))(x)
        return jnp.sum(values * jnp.array([1.0, 2.0, 3.0])), (values, good)

    return jax.jit(jax.value_and_grad(total, argnums=(0, 1), has_aux=True))


W = jnp.array([0.5, 2.0])
X = jnp.array([[1.0, 4.0], [4.0, 9.0], [1.0, 16.0]])


def test_a_good_function_is_left_alone(both):
    (_, (values, good)), (x, w) = both(X, W)
    np.testing.assert_allclose(values, [4.5, 7.0, 8.5], rtol=1e-15)
    assert good.all()
    scale = np.array([[1.0], [2.0], [3.0]])
    np.testing.assert_allclose(x, scale * np.asarray(W) / (2 * np.sqrt(X)), rtol=1e-15)
    # What is closed over has its gradient, summed over the batch.
    np.testing.assert_allclose(w, np.sum(scale * np.sqrt(X), axis=0), rtol=1e-15)


@pytest.mark.parametrize("bad", [-1.0, 0.0, np.inf, np.nan])
def test_a_bad_lane_is_zero_and_flagged_and_the_others_do_not_notice(both, bad):
    (_, (values, good)), (x, w) = both(X.at[1, 0].set(bad), W)
    np.testing.assert_allclose(values[jnp.array([0, 2])], [4.5, 8.5], rtol=1e-15)
    assert good.tolist() == [True, False, True]
    np.testing.assert_array_equal(x[1], 0)
    clean = (both(X, W)[1][0])[np.array([0, 2])]
    np.testing.assert_array_equal(x[np.array([0, 2])], clean)
    scale = np.array([[1.0], [3.0]])
    np.testing.assert_allclose(w, np.sum(scale * np.sqrt(X[np.array([0, 2])]), axis=0), rtol=1e-15)


def test_without_a_gradient_an_infinite_slope_is_no_fault():
    value, good = finite_or_zero(lambda x: tricky(x, W), jnp.array([0.0, 4.0]))
    assert bool(good) and float(value) == 4.0
    value, good = finite_or_zero(lambda x: tricky(x, W), jnp.array([-1.0, 4.0]))
    assert not bool(good) and float(value) == 0.0


def test_using_the_flag_alone_has_no_gradient():
    slope = jax.grad(lambda x: jnp.where(finite_or_zero(jnp.sum, x)[1], 1.0, 2.0))(jnp.ones(2))
    np.testing.assert_array_equal(slope, 0)
