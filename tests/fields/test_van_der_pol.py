from typing import Any

import jax
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from oscillib.fields import VanDerPolParams, van_der_pol, weak_van_der_pol_frequency


@pytest.fixture(scope="module")
def compiled():
    one = lambda y, p: van_der_pol(0.0, y, p)
    return jax.jit(one), jax.jit(jax.jacfwd(one))


def cycle(compiled, params, *, settle, end, method="DOP853", tolerance=1e-12):
    """Integrate, by another library, and return the times at which x rises through 0."""
    field, jacobian = (
        (lambda f: lambda t, y: np.asarray(f(y[:2], params)))(compiled[0]),
        compiled[1],
    )
    rising = lambda t, y: y[0]
    rising.direction = 1
    peak = lambda t, y: y[1]
    peak.direction = -1
    more: dict[str, Any] = {}
    if method == "Radau":
        more["jac"] = lambda t, y: np.asarray(jacobian(y, params))
    out = solve_ivp(
        field, (0, end), [2.0, 0.0], method=method, rtol=tolerance, atol=tolerance,
        events=(rising, peak), **more,
    )  # fmt: skip
    late = out.t_events[0][out.t_events[0] > settle]
    return late, out.y_events[1][-1][0]


# mu = 1: Hairer, Norsett & Wanner, Solving ODEs I, exercise 1 of section I.16; the amplitude as
# printed there drops a digit and stands corrected by a 55-digit Taylor series. mu = 5: computed
# with a Taylor series (no printed table seen).
@pytest.mark.parametrize(
    "mu, period, amplitude, tolerance",
    [
        (1.0, 6.6632868593231301897, 2.0086198608748431365, 1e-10),
        (5.0, 11.612230667719570035, 2.02150806156232132, 1e-9),
    ],
)
def test_period_and_amplitude(compiled, mu, period, amplitude, tolerance):
    times, top = cycle(compiled, VanDerPolParams(mu), settle=20, end=60)
    assert abs(np.mean(np.diff(times)) - period) < tolerance
    assert abs(top - amplitude) < tolerance


def test_weak_frequency(compiled):
    # Andersen & Geer 1982 (from memory): series at mu = 0.1, and its value.
    params = VanDerPolParams(0.1, 1.0)
    assert abs(weak_van_der_pol_frequency(params) - 0.999375553425) < 2e-10
    times, _ = cycle(compiled, params, settle=200, end=300)
    assert abs(2 * np.pi / np.mean(np.diff(times)) - 0.999375553425) < 2e-10


# Dorodnitsyn 1947, T = (3 - 2 ln 2) mu + 3 * 2.338107 mu^(-1/3) - (2/3) ln(mu) / mu - 1.3246 / mu,
# the last two coefficients as corrected by Urabe (from memory).
@pytest.mark.parametrize("mu, period, tolerance", [(100, 162.83780667, 0.0015)])
def test_period_of_the_relaxation_oscillation(compiled, mu, period, tolerance):
    times, _ = cycle(
        compiled, VanDerPolParams(float(mu)), settle=50, end=450, method="Radau", tolerance=1e-9
    )
    assert abs(np.diff(times)[-1] - period) < tolerance


@pytest.mark.long
def test_period_of_the_strong_relaxation_oscillation(compiled):
    # As above, mu = 1000.
    params = VanDerPolParams(1000.0)
    times, _ = cycle(compiled, params, settle=500, end=4500, method="Radau", tolerance=1e-10)
    assert abs(np.diff(times)[-1] - 1614.4011413) < 1e-4


def test_floquet_exponent(compiled):
    # The mean of the trace of the Jacobian over a cycle (Liouville); value computed from a
    # monodromy matrix.
    params = VanDerPolParams(1.0)

    def with_trace(t, y):
        trace = np.trace(np.asarray(compiled[1](y[:2], params)))
        return [*np.asarray(compiled[0](y[:2], params)), trace]

    rising = lambda t, y: y[0]
    rising.direction = 1
    out = solve_ivp(
        with_trace, (0, 50), [2.0, 0, 0], method="DOP853", rtol=1e-12, atol=1e-12, events=rising
    )
    (t0, t1), (y0, y1) = out.t_events[0][-2:], out.y_events[0][-2:]
    exponent = (y1[2] - y0[2]) / (t1 - t0)
    assert abs(exponent + 1.0593769948) < 1e-9
    assert abs(np.exp(y1[2] - y0[2]) - 0.0008596950636) < 1e-9


def test_pacemaker_in_darkness(compiled):
    # Forger, Jewett & Kronauer 1999 (equations from memory): x' = (pi/12) u,
    # u' = (pi/12) (mu (u - 4 u^3 / 3) - x k), k = (24 / (0.99669 tau))^2, whose velocity 2u is a
    # van der Pol oscillator of frequency (pi/12) sqrt(k) and damping mu / sqrt(k).
    root = 24 / (0.99669 * 24.2)
    params = VanDerPolParams(0.23 / root, np.pi / 12 * root)
    times, _ = cycle(compiled, params, settle=1500, end=2200)
    assert abs(np.mean(np.diff(times)) - 24.2) < 0.02


def test_stiff_end_value(compiled):
    # Test Set for IVP Solvers (Bari; formerly CWI), van der Pol with eps = 1e-6 at t = 2; here in
    # the time of mu = 1000.
    params = VanDerPolParams(1000.0)
    out = solve_ivp(
        lambda t, y: np.asarray(compiled[0](y, params)), (0, 2000), [2.0, 0.0], method="Radau",
        jac=lambda t, y: np.asarray(compiled[1](y, params)), rtol=1e-10, atol=1e-12,
    )  # fmt: skip
    # The tolerance is that of the integrator used here.
    assert abs(out.y[0, -1] - 1.706167732170483) < 1e-7
    assert abs(1000 * out.y[1, -1] + 0.8928097010247975) < 1e-7
