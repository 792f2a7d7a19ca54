import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.checks import check_derivatives


KEY = jax.random.key(5)


def scaled_cube(slope):
    """A cube whose derivative is off by a factor."""

    @jax.custom_jvp
    def cube(x):
        return x**3

    cube.defjvp(lambda primals, tangents: (cube(*primals), slope * primals[0] ** 2 * tangents[0]))
    return cube


def test_one_wrong_entry_among_many_is_seen_whatever_the_size():
    # One derivative off by a thousandth: a tolerance that grows with the size would let it pass.
    right, wrong = scaled_cube(3.0), scaled_cube(3.003)
    x = jnp.linspace(0.5, 1.5, 2000)
    check_derivatives(right, x, key=KEY)
    with pytest.raises(AssertionError, match="derivative along argument 0: result"):
        check_derivatives(lambda x: jnp.append(x[:-1] ** 3, wrong(x[-1])), x[-30:], key=KEY)
    with pytest.raises(AssertionError, match="derivative along argument 0"):
        check_derivatives(wrong, x, key=KEY)


def test_reverse_mode_alone_is_seen():
    @jax.custom_vjp
    def cube(x):
        return x**3

    cube.defvjp(lambda x: (x**3, x), lambda x, g: (-3 * x**2 * g,))
    with pytest.raises(TypeError):  # JAX has no forward mode for it
        check_derivatives(cube, jnp.array([0.7]), key=KEY)

    def solve(x):  # a transpose of the user's own
        return jax.lax.custom_linear_solve(
            lambda y: 2 * y, x, solve=lambda _, b: b / 2, transpose_solve=lambda _, b: b / 3
        )

    with pytest.raises(AssertionError, match="of reverse mode"):
        check_derivatives(solve, jnp.array([0.7]), key=KEY)


def test_leaf_is_named_and_whole_numbers_are_held():
    tree = {"count": jnp.array(2), "rate": jnp.array([1.0, 2.0]), "still": jnp.array(3.0)}

    def f(tree):
        return {"out": tree["rate"] ** 2 * tree["count"]}

    check_derivatives(f, tree, key=KEY)
    with pytest.raises(AssertionError, match=r"derivative along p\['rate'\]"):
        check_derivatives(lambda p: jax.lax.stop_gradient(p["rate"]), tree, key=KEY, names=("p",))


@pytest.mark.parametrize("scale", [1e-6, 1.0, 1e6])
def test_size_of_the_result_does_not_matter(scale):
    check_derivatives(lambda x: scale * jnp.sin(x), jnp.array([0.3, 1.0]), key=KEY)


def test_large_arguments():
    check_derivatives(lambda x: jnp.sin(x / 1e6), 1e6 * jnp.array([0.3, 1.0]), key=KEY)


@pytest.mark.usefixtures("user_errors")
def test_messages():
    with pytest.raises(TypeError, match="`argument 0` is float32; derivatives are checked in"):
        check_derivatives(jnp.sin, jnp.ones(2, jnp.float32), key=KEY)
    with pytest.raises(ValueError, match="`directions` must be at least 1; got 0"):
        check_derivatives(jnp.sin, np.ones(2), key=KEY, directions=0)
