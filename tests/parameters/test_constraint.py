import jax.numpy as jnp
import numpy as np
import pytest
from hypothesis import given, settings, strategies as st
from hypothesis.extra.numpy import arrays

from oscillib.parameters import Fixed, Free, Interval, OffDiagonal, Positive


# Fixed shapes: the arithmetic of each compiles once.
quick = settings(deadline=None, max_examples=40)


@quick
@given(arrays(float, 5, elements=st.floats(1e-12, 1e12)))
def test_positive_goes_there_and_back(value):
    value = jnp.asarray(value)
    back = Positive().to_value(Positive().to_free(value), value)
    # exp(log x) loses as many roundings as the logarithm is large.
    np.testing.assert_allclose(back, value, rtol=1e-14)


@quick
@given(
    arrays(float, 5, elements=st.floats(0.001, 0.999)),
    st.floats(-100, 100),
    st.floats(0.1, 100),
)
def test_interval_goes_there_and_back(position, lower, width):
    constraint = Interval(lower, lower + width)
    value = jnp.asarray(lower + width * position)
    back = constraint.to_value(constraint.to_free(value), value)
    np.testing.assert_allclose(back, value, rtol=0, atol=1e-13 * (abs(lower) + width))


@quick
@given(arrays(float, 5, elements=st.floats(-30, 30)))
def test_any_free_leaf_gives_an_allowed_value(free):
    free = jnp.asarray(free)
    assert jnp.all(Positive().to_value(free, free) > 0)
    inside = Interval(-1.0, 3.0).to_value(free, free)
    assert jnp.all((inside > -1) & (inside < 3))


@pytest.mark.parametrize("n", [1, 2, 4])
def test_off_diagonal_leaves_the_diagonal_as_it_was(n):
    value = jnp.asarray(np.random.default_rng(0).normal(size=(n, n)))
    free = OffDiagonal().to_free(value)
    assert free.shape == (n * (n - 1),)
    np.testing.assert_array_equal(OffDiagonal().to_value(free, value), value)
    moved = OffDiagonal().to_value(free + 1, value)
    np.testing.assert_array_equal(moved, jnp.where(jnp.eye(n) == 1, value, value + 1))


def test_off_diagonal_goes_row_by_row():
    value = jnp.arange(9.0).reshape(3, 3)
    np.testing.assert_array_equal(OffDiagonal().to_free(value), [1, 2, 3, 5, 6, 7])


def test_free_and_fixed():
    value, template = jnp.array([1.0]), jnp.array([2.0])
    assert Free().to_value(Free().to_free(value), template) is value
    assert Fixed().to_free(value) is None
    assert Fixed().to_value(None, template) is template


def test_interval_of_numpy_bounds_keeps_the_parameters_precision():
    constraint = Interval(np.float64(0), np.float64(2))  # pyright: ignore[reportArgumentType]
    free = constraint.to_free(jnp.ones(1, jnp.float32))
    assert constraint.to_value(free, free).dtype == free.dtype == jnp.float32


def test_empty_interval_is_refused():
    for upper in (1.0, 0.5, np.nan):
        with pytest.raises(ValueError, match=r"`upper` must be above `lower`; got lower=1.0"):
            Interval(1.0, upper)
