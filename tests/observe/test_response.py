import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

from oscillib.observe import auditory_response, convolve, double_gamma


@pytest.fixture(scope="module")
def gamma():
    compiled = jax.jit(lambda t: double_gamma(t[None])[0])
    return lambda t: float(compiled(jnp.asarray(t)))


def extreme(f, low, high, sign):
    found = minimize_scalar(lambda t: -sign * f(t), bounds=(low, high), options={"xatol": 1e-9})
    return found.x, f(found.x)  # pyright: ignore[reportAttributeAccessIssue]


def test_canonical_shape(gamma):
    # Parameter values: common practice; positions and values solved independently.
    peak, height = extreme(gamma, 3, 8, 1)
    dip, depth = extreme(gamma, 13, 20, -1)
    zero = float(brentq(gamma, 8, 14))  # pyright: ignore[reportArgumentType]
    np.testing.assert_allclose([peak, zero, dip], [4.99851063, 12.0655455, 15.7487866], atol=2e-4)
    np.testing.assert_allclose([height, depth], [0.1754412012, -0.0155985796], rtol=0, atol=1e-8)
    assert abs(depth / height + 0.08891058367) < 1e-8


FINE = 0.01 * np.arange(6001)


@pytest.fixture(scope="module")
def kernel():
    return np.asarray(jax.jit(double_gamma)(jnp.asarray(FINE)))


def test_area_and_transfer(kernel):
    # Area 5/6, and 0.833443317088 up to 32 s; gain |(1 + i 2 pi f)^-6 - (1 + i 2 pi f)^-16 / 6|.
    # Laplace transform of the gamma density.
    assert abs(0.01 * np.sum(kernel) - 5 / 6) < 1e-9
    assert abs(np.trapezoid(kernel[:3201], FINE[:3201]) - 0.833443317088) < 1e-6
    for frequency, gain in [(0.01, 0.86274484), (0.05, 0.8321468831), (0.1, 0.3595124705)]:
        transfer = 0.01 * np.sum(kernel * np.exp(-2j * np.pi * frequency * FINE))
        assert abs(abs(transfer) - gain) < 1e-8


def test_area_and_transfer_by_quadrature():
    # As above, to the digits of the closed forms; beyond 120 s nothing is left.
    nodes, weights = np.polynomial.legendre.leggauss(200)

    def integral(top, frequency=0.0):
        t = top * (nodes + 1) / 2
        wave = np.exp(-2j * np.pi * frequency * t)
        return abs(top / 2 * np.sum(weights * wave * np.asarray(double_gamma(jnp.asarray(t)))))

    assert abs(integral(120) - 5 / 6) < 1e-12
    assert abs(integral(32) - 0.833443317088) < 1e-12
    for frequency, gain in [(0.01, 0.86274484), (0.05, 0.8321468831), (0.1, 0.3595124705)]:
        assert abs(integral(120, frequency) - gain) < 1e-9
    z = 1 + 2j * np.pi * 0.01
    assert abs(integral(120, 0.01) - abs(z**-6 - z**-16 / 6)) < 1e-12


def test_auditory_shape():
    # Glover 1999, NeuroImage 9.
    compiled = jax.jit(lambda t: auditory_response(t[None])[0])
    f = lambda t: float(compiled(jnp.asarray(t)))
    peak, height = extreme(f, 3, 8, 1)
    dip, _ = extreme(f, 9, 16, -1)
    np.testing.assert_allclose([peak, dip], [5.23998246, 12.2553398], atol=2e-4)
    assert abs(height - 0.968613261) < 1e-8


def test_convolution_of_a_tone_has_the_gain_of_the_transfer_function():
    interval, frequency = 0.5, 0.05
    t = interval * np.arange(400)
    run = jax.jit(lambda x: convolve(x, double_gamma(interval * jnp.arange(120.0)), interval))
    x = np.stack([np.cos(2 * np.pi * frequency * t), np.sin(2 * np.pi * frequency * t)], axis=1)
    signal = run(jnp.asarray(x))
    # The first minute is incomplete; then cosine and sine make the amplitude at each sample.
    np.testing.assert_allclose(np.linalg.norm(signal[120:], axis=1), 0.8321468831, atol=1e-6)


def test_convolution_by_hand():
    # As numpy's.
    rng = np.random.default_rng(0)
    x, r = rng.normal(size=(30, 2)), rng.normal(size=7)
    out = convolve(jnp.asarray(x), jnp.asarray(r), 0.3)
    expected = np.stack([0.3 * np.convolve(x[:, k], r)[:30] for k in range(2)], axis=1)
    np.testing.assert_allclose(out, expected, rtol=1e-12, atol=1e-14)


@pytest.mark.parametrize("dtype", [jnp.float32, jnp.float64])
def test_derivatives_are_finite_from_before_the_start(dtype):
    t = jnp.array([-1.0, 0.0, 1e-30, 5.0, 100.0], dtype)
    given = {"delay": 6.0, "undershoot": 16.0, "width": 1.1, "undershoot_width": 0.9, "ratio": 6.0}
    arrays = {name: jnp.asarray(value, dtype) for name, value in given.items()}
    total = lambda t, p: jnp.sum(double_gamma(t, **p)) + jnp.sum(auditory_response(t))
    value, gradient = jax.jit(jax.value_and_grad(total, argnums=(0, 1)))(t, arrays)
    assert value.dtype == dtype
    assert all(bool(jnp.all(jnp.isfinite(x))) for x in jax.tree.leaves(gradient))
    assert double_gamma(t)[0] == 0 and double_gamma(t)[1] == 0


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`t` must have shape"):
        double_gamma(jnp.asarray(1.0))
    with pytest.raises(ValueError, match="`delay` must have shape"):
        double_gamma(jnp.ones(3), delay=jnp.ones(3))
    with pytest.raises(ValueError, match="`activity` must have shape"):
        convolve(jnp.ones(3), jnp.ones(2), 1.0)
    with pytest.raises(TypeError, match="`response` is float32"):
        convolve(jnp.ones((3, 1)), jnp.ones(2, jnp.float32), 1.0)
