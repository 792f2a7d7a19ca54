import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from oscillib.fields import FitzHughNagumoParams, fitzhugh_nagumo, fitzhugh_nagumo_onset


@pytest.fixture(scope="module")
def compiled():
    return jax.jit(lambda y, p: fitzhugh_nagumo(0.0, y, p))


def test_onset(compiled):
    # FitzHugh 1961 parameter set; trace condition, common practice.
    params = FitzHughNagumoParams(0.0)
    drives, frequency = fitzhugh_nagumo_onset(params)
    np.testing.assert_allclose(drives, [0.331281337455, 1.41871866255], rtol=0, atol=1e-9)
    assert abs(frequency - 0.275506805724) < 1e-12
    jacobian = jax.jit(jax.jacfwd(lambda y, p: fitzhugh_nagumo(0.0, y, p)))
    for drive, sign in zip(drives, (-1, 1), strict=True):
        v = sign * np.sqrt(1 - 0.064)
        at = FitzHughNagumoParams(drive, rate=2.0)
        y = jnp.array([v, (v + 0.7) / 0.8])
        np.testing.assert_allclose(compiled(y, at), 0, atol=1e-12)
        eigenvalues = np.linalg.eigvals(jacobian(y, at))
        np.testing.assert_allclose(eigenvalues.real, 0, atol=1e-12)
        # Twice the rate, twice the frequency.
        np.testing.assert_allclose(np.abs(eigenvalues.imag), 2 * frequency, rtol=1e-12)


def test_period(compiled):
    # At I = 0.5; computed by an 8th-order Runge-Kutta and an implicit method (no printed value).
    params = FitzHughNagumoParams(0.5)
    rising = lambda t, y: y[0]
    rising.direction = 1
    out = solve_ivp(
        lambda t, y: np.asarray(compiled(y, params)), (0, 400), [-1.0, 1.0], method="DOP853",
        rtol=1e-11, atol=1e-11, events=rising,
    )  # fmt: skip
    assert abs(np.diff(out.t_events[0])[-1] - 39.4744149802) < 1e-7


def test_form_used_for_estimation(compiled):
    # V' = c (V - V^3/3 + R), R' = -(V - a + b R) / c, a = b = 0.2, c = 3, from (-1, 1), t = 20:
    # set-up of Ramsay, Hooker, Campbell & Cao 2007 (from memory), values computed independently.
    # Here w = -R, the offset is -a, the rate c and the slowness 1 / c^2.
    params = FitzHughNagumoParams(0.0, offset=-0.2, slope=0.2, slowness=1 / 9, rate=3.0)
    out = solve_ivp(
        lambda t, y: np.asarray(compiled(y, params)), (0, 20), [-1.0, -1.0], method="DOP853",
        rtol=1e-11, atol=1e-11,
    )  # fmt: skip
    expected = [1.896941801015, -0.3044810368948]
    np.testing.assert_allclose(out.y[:, -1], expected, rtol=0, atol=1e-8)
