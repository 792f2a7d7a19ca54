import jax
import jax.numpy as jnp
import pytest

from oscillib.fitting import Status, describe


def test_every_code_has_words_of_its_own():
    words = [describe(status) for status in Status]
    assert all(isinstance(w, str) for w in words)
    assert len(set(words)) == len(Status)


def test_words_keep_the_shape():
    assert describe(jnp.array(0)).startswith("converged")
    words = describe(jnp.array([[0, 1], [2, 3]]))
    assert [w.split(":")[0] for row in words for w in row] == [
        "converged", "step limit", "non-finite", "at a bound",
    ]  # fmt: skip
    assert describe(jnp.zeros(0, int)) == []


def test_codes_work_inside_jit():
    good = jax.jit(lambda code: code == Status.CONVERGED)
    assert good(jnp.array(0)) and not good(jnp.array(2))


def test_unknown_code(user_errors):
    with pytest.raises(ValueError, match="`status` must hold codes"):
        describe(17)
