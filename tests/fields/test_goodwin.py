import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import GoodwinParams, goodwin, goodwin_loop_gain, goodwin_rest


def unit(synthesis, hill, degradation=(1.0, 1.0, 1.0)):
    return GoodwinParams([synthesis, 1.0, 1.0], degradation, hill)


@pytest.fixture(scope="module")
def at_rest():
    def eigenvalues(p):
        rest = goodwin_rest(p)
        jacobian = jax.jacfwd(lambda y: goodwin(0.0, y, p))(rest)
        return goodwin(0.0, rest, p), jacobian, goodwin_loop_gain(p)

    compiled = jax.jit(eigenvalues)

    def run(p):
        residual, jacobian, gain = compiled(p)
        return residual, np.linalg.eigvals(np.asarray(jacobian)), float(gain)

    return run


@pytest.mark.parametrize("synthesis", [1e-6, 0.5, 2.0, 1e9])
@pytest.mark.parametrize("hill", [0.5, 10.0, 40.0])
def test_fixed_point(at_rest, synthesis, hill):
    residual, _, gain = at_rest(unit(synthesis, hill, (0.3, 1.0, 2.0)))
    np.testing.assert_allclose(residual, 0, atol=1e-12 * max(1, synthesis**0.5))
    assert 0 <= gain < hill


def test_onset_needs_an_exponent_above_8(at_rest):
    # Griffith 1968; Tyson & Othmer 1978 (from memory): at very strong synthesis the loop gain
    # tends to the exponent, and the eigenvalues cross at 8.
    growth = lambda hill: np.max(at_rest(unit(1e9, hill))[1].real)
    low, high = 7.0, 9.0
    for _ in range(30):
        middle = (low + high) / 2
        low, high = (low, middle) if growth(middle) > 0 else (middle, high)
    assert abs(low - 8) < 0.01


def test_loop_gain_of_8_is_the_onset(at_rest):
    # Secant condition, Tyson & Othmer 1978 (from memory): gain sec(pi/3)^3 = 8, frequency
    # sqrt(3) d.
    # z^n = 4 gives the gain 10 * 4 / 5 = 8.
    z = 4**0.1
    _, eigenvalues, gain = at_rest(unit(0.5**3 * z * 5, 10.0, (0.5, 0.5, 0.5)))
    assert abs(gain - 8) < 1e-12
    pair = eigenvalues[np.argsort(eigenvalues.real)[-2:]]
    np.testing.assert_allclose(pair.real, 0, atol=1e-12)
    np.testing.assert_allclose(np.abs(pair.imag), np.sqrt(3) * 0.5, rtol=1e-12)


@pytest.mark.parametrize("dtype", [jnp.float32, jnp.float64])
@pytest.mark.parametrize("z", [-1.0, 0.0, 1e-30, 1.0, 1e30])
def test_derivatives_of_the_feedback_are_finite(dtype, z):
    p = jax.tree.map(lambda x: x.astype(dtype), unit(2.0, 10.0))
    y = jnp.array([1.0, 1.0, z], dtype)
    wrt = jax.grad(lambda y, p: jnp.sum(goodwin(0.0, y, p)), argnums=(0, 1))(y, p)
    assert all(bool(jnp.all(jnp.isfinite(x))) for x in jax.tree.leaves(wrt))
