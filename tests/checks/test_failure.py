import jax.numpy as jnp
import pytest

from oscillib.checks._failure import assert_close, fail


def test_message_names_property_leaf_index_expected_and_got():
    with pytest.raises(AssertionError) as caught:
        fail("order", leaf="states", index=(2, 1), expected="2", got="1", hint="Fix it.")
    assert str(caught.value) == "order: states[2,1]: expected 2, got 1.\n  Fix it."


def test_worst_entry_beyond_its_tolerance_is_named():
    expected = {"a": jnp.array([1.0, 100.0]), "b": jnp.zeros((2, 2))}
    close = {"a": jnp.array([1.01, 100.5]), "b": jnp.zeros((2, 2)).at[1, 0].set(1e-4)}
    assert_close("p", close, expected, rtol=0.011, atol=1e-3)
    with pytest.raises(AssertionError, match=r"p: \['a'\]\[1\]: expected 100 within 0\.[12], got"):
        assert_close("p", close, expected, rtol=1e-3, atol=1e-3)
    with pytest.raises(AssertionError, match=r"\['b'\]\[1,0\]: expected 0 within 1e-05"):
        assert_close("p", close, expected, rtol=0.1, atol=1e-5)


@pytest.mark.parametrize(
    ("actual", "words"),
    [
        (jnp.array([1.0, jnp.nan]), r"\[1\]: expected 2.*got nan"),
        (jnp.array([jnp.inf, 2.0]), r"\[0\]: expected 1.*got inf"),
        (jnp.ones((1, 2)), r"expected shape \(2,\), float64, got shape \(1, 2\)"),
        (jnp.ones(2, jnp.float32), "expected .*float64, got .*float32"),
        ([jnp.ones(2)], "expected structure"),
    ],
)
def test_what_is_never_close(actual, words):
    with pytest.raises(AssertionError, match=words):
        assert_close("p", actual, jnp.array([1.0, 2.0]), rtol=10.0, atol=10.0)


def test_nan_is_a_failure_even_where_expected_and_equal_infinities_are_not():
    with pytest.raises(AssertionError, match="got nan"):
        assert_close("p", jnp.array(jnp.nan), jnp.array(jnp.nan), rtol=1.0, atol=1.0)
    assert_close("p", jnp.array(jnp.inf), jnp.array(jnp.inf), rtol=0.0, atol=0.0)
