import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.analysis import fixed_point, jacobian, spectrum, stability_margin
from oscillib.fields import HopfNetwork, HopfParams


def fitzhugh_nagumo(t, y, drive):
    v, w = y
    return jnp.stack([v - v**3 / 3 - w + drive, 0.08 * (v + 0.7 - 0.8 * w)])


def pair_at_rest(coupling):
    k = coupling * jnp.ones((2, 2))
    params = HopfParams([1.0, 1.0], [-1.5, 1.5], coupling=k)
    return stability_margin(HopfNetwork(), params, jnp.zeros((2, 2)))


def test_amplitude_death_of_two_units():
    # Aronson, Ermentrout & Kopell 1990, Physica D 41 (from memory): frequency difference 3, the
    # origin is stable for 1 < K < (1 + 9/4) / 2 = 1.625.
    margin = jax.jit(jax.vmap(pair_at_rest))
    np.testing.assert_allclose(margin(jnp.array([1.0, 1.625])), 0.0, atol=1e-10)
    inside = np.linspace(1.01, 1.62, 20)
    outside = np.concatenate([np.linspace(0, 0.99, 10), np.linspace(1.63, 3, 10)])
    signs = np.sign(margin(jnp.asarray(np.concatenate([inside, outside]))))
    assert (signs[:20] == 1).all() and (signs[20:] == -1).all()


def test_derivative_of_the_margin():
    # Pair: margin K - 1 below K = 1.5, K - 1 - sqrt(K^2 - 9/4) above; closed form.
    slope = jax.jit(jax.vmap(jax.grad(pair_at_rest)))(jnp.array([1.2, 2.0]))
    np.testing.assert_allclose(slope, [1.0, 1 - 2 / np.sqrt(4 - 2.25)], rtol=1e-12)


def test_fitzhugh_nagumo_onsets():
    # FitzHugh 1961 parameter set; the trace condition is common practice. The margin of the moving
    # fixed point is brought to 0 by Newton's rule, with its derivative.
    def margin(drive, y0):
        y = fixed_point(fitzhugh_nagumo, drive, y0).state
        found = spectrum(fitzhugh_nagumo, drive, y)
        return -found.rate[0], found.frequency[0]

    @jax.jit
    @jax.vmap
    def onset(drive, y0):
        def newton(_, drive):
            (value, _), slope = jax.value_and_grad(margin, has_aux=True)(drive, y0)
            return drive - value / slope

        drive = jax.lax.fori_loop(0, 8, newton, drive)
        return drive, margin(drive, y0)[1]

    drive, frequency = onset(jnp.array([0.3, 1.45]), jnp.array([[-1.0, -0.5], [1.0, 1.5]]))
    np.testing.assert_allclose(drive, [0.331281337455, 1.41871866255], rtol=0, atol=1e-9)
    # sqrt(e - (b e)^2), the same source.
    np.testing.assert_allclose(frequency, 0.275506805724, rtol=0, atol=1e-12)


def test_brusselator_onset():
    # Textbook: Hopf at B = 1 + A^2 with frequency A; here A = 1.3.
    def field(t, y, p):
        a, b = p
        x, z = y
        return jnp.stack([a + x**2 * z - (b + 1) * x, b * x - x**2 * z])

    a, b = 1.3, 1 + 1.3**2
    found = spectrum(field, (a, b), jnp.array([a, b / a]))
    np.testing.assert_allclose(found.rate, 0.0, atol=1e-14)
    np.testing.assert_allclose(found.frequency, [a, -a], rtol=1e-13)


def test_lorenz_onset():
    # Subcritical Hopf at rho = sigma (sigma + beta + 3) / (sigma - beta - 1): closed form.
    sigma, beta = 10.0, 8 / 3

    def field(t, y, rho):
        x, v, z = y
        return jnp.stack([sigma * (v - x), x * (rho - z) - v, x * v - beta * z])

    rho = 24.7368421052632
    r = np.sqrt(beta * (rho - 1))
    assert abs(float(stability_margin(field, rho, jnp.array([r, r, rho - 1])))) < 1e-13


def test_twisted_state_on_a_ring():
    # Wiley, Strogatz & Girvan 2006, Chaos 16: 0.68 (from memory); 0.68092283 recomputed for the
    # continuum. Here 120 units: the width of the coupling is (2 k + 1) / n for k neighbours a side,
    # and the zero of the rate is placed by a straight line between two k.
    n = 120
    distance = np.abs((np.arange(n)[:, None] - np.arange(n)[None] + n // 2) % n - n // 2)
    twisted = jnp.asarray(2 * np.pi * np.arange(n) / n)
    field = lambda t, phase, k: jnp.sum(k * jnp.sin(phase[None] - phase[:, None]), axis=1)

    @jax.jit
    def rates(weights):
        return spectrum(field, weights, twisted).rate[:2]

    ks = np.arange(39, 43)
    leading = np.array([rates(jnp.asarray((distance <= k) / n)) for k in ks])
    # The first rate, of a shift of all phases, is 0 while the state is stable.
    assert abs(leading[0, 0]) < 1e-12
    rate = np.where(np.abs(leading[:, 0]) < 1e-12, leading[:, 1], leading[:, 0])
    width = np.interp(0.0, rate, (2 * ks + 1) / n)
    np.testing.assert_allclose(width, 0.68092283, atol=1e-3)


# Decay rates computed independently in two ways, no printed source; the small-noise law 0.045 (Lax
# 1967, from memory) is 12 percent below the first.
@pytest.mark.parametrize(
    "a, s, top, expected",
    [
        (1.0, 0.3, 1.8, 0.05086517733),
        (0.0, 1.0, 3.3, 1.179302111),
        (0.5, 0.5, 2.8, 0.3302459487),
    ],
)
def test_slowest_mode_of_a_noisy_oscillator(a, s, top, expected):
    # Fokker-Planck operator of the noisy Hopf unit (b = 1), angular index 1, as a linear field.
    n, s2 = 100, s**2
    k = np.arange(n + 1)
    x = np.cos(np.pi * k / n)
    c = np.where((k == 0) | (k == n), 2.0, 1.0) * (-1.0) ** k
    d = np.outer(c, 1 / c) / (x[:, None] - x[None] + np.eye(n + 1))
    d -= np.diag(d.sum(axis=1))
    # On (-top, top) a function of angular index 1 is odd: keep r > 0 and fold the rest back. At
    # top, where the density is below e^-20 of its greatest, no condition is needed.
    r = top * x
    first, second = d / top, d @ d / top**2
    half = n // 2
    inside = slice(0, half)
    fold = lambda m: m[inside, :half] - m[inside, n:half:-1]
    grid = r[inside]
    operator = (
        (a * grid - grid**3)[:, None] * fold(first)
        + s2 / 2 * (fold(second) + fold(first) / grid[:, None])
        - s2 / 2 * np.diag(1 / grid**2)
    )
    field = lambda t, y, p: p @ y
    margin = stability_margin(field, jnp.asarray(operator), jnp.zeros(half))
    np.testing.assert_allclose(margin, expected, rtol=0, atol=2e-7)


def test_eigenvalues_order_and_derivative_against_central_differences():
    rng = np.random.default_rng(3)
    base, way = jnp.asarray(rng.normal(size=(2, 5, 5)))
    field = lambda t, y, e: (base + e * way) @ jnp.tanh(y)
    parts = jax.jit(lambda e: jnp.stack(spectrum(field, e, jnp.zeros(5))))
    slopes = jax.jit(lambda e: (jax.jacrev(parts)(e), jax.jacfwd(parts)(e)))
    zero = jnp.zeros(())
    rate, frequency = np.asarray(parts(zero))
    assert (np.diff(rate) <= 0).all()
    found, expected = rate + 1j * frequency, np.linalg.eigvals(np.asarray(base))
    np.testing.assert_allclose(np.sort_complex(found), np.sort_complex(expected), rtol=1e-12)
    h = 1e-5
    central = (parts(zero + h) - parts(zero - h)) / (2 * h)
    reverse, forward = slopes(zero)
    np.testing.assert_allclose(forward, central, rtol=1e-7, atol=1e-8)
    np.testing.assert_allclose(reverse, forward, rtol=1e-10, atol=1e-12)


def test_second_derivative_raises():
    with pytest.raises(NotImplementedError):
        jax.make_jaxpr(jax.hessian(pair_at_rest))(1.2)


def test_precisions_trace_once_and_batch():
    traces = []

    @jax.jit
    def margin(p, ys):
        traces.append(p)
        return jax.vmap(lambda y: stability_margin(HopfNetwork(), p, y))(ys)

    for dtype, tolerance in ((jnp.float64, 1e-12), (jnp.float32, 1e-5)):
        for growth in (-0.5, -0.7):
            p = HopfParams(jnp.asarray([growth], dtype), jnp.asarray([6.0], dtype))
            out = margin(p, jnp.zeros((3, 2, 1), dtype))
            assert out.dtype == dtype
            np.testing.assert_allclose(out, -growth, rtol=tolerance)
    assert len(traces) == 2


@pytest.mark.usefixtures("user_errors")
def test_messages():
    with pytest.raises(TypeError, match="`y` must hold real floating-point"):
        jacobian(lambda t, y, p: y, None, jnp.arange(3))
    with pytest.raises(ValueError, match="must return one array of the shape of `y`"):
        spectrum(lambda t, y, p: y[:1], None, jnp.ones(3))
