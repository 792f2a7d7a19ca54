import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.optimize import root

from oscillib.fields import Edges, WilsonCowanParams, wilson_cowan


@pytest.fixture(scope="module")
def compiled():
    one = lambda y, p: wilson_cowan(0.0, y[:, None], p)[:, 0]
    return jax.jit(one), jax.jit(jax.jacfwd(one))


def test_period_and_peak(compiled):
    # Parameters: Wilson & Cowan 1972, figure 11 (from memory); period computed by an 8th-order
    # Runge-Kutta and an implicit method. Twice the time constants, twice the period.
    params = WilsonCowanParams([1.25], time_e=[2.0], time_i=[2.0])
    rising = lambda t, y: y[0] - 0.12
    rising.direction = 1
    out = solve_ivp(
        lambda t, y: np.asarray(compiled[0](y, params)), (0, 200), [0.2, 0.1], method="DOP853",
        rtol=1e-11, atol=1e-11, events=rising, dense_output=True,
    )  # fmt: skip
    times = out.t_events[0]
    assert abs(np.diff(times)[-1] / 2 - 4.9958943041) < 1e-6
    assert abs(np.max(out.sol(np.linspace(times[-2], times[-1], 4001))[0]) - 0.269659) < 1e-5


def test_onset(compiled):
    # Drive at which the steady state of the same set starts to oscillate as the drive falls, and
    # its angular frequency: no trace, positive determinant. Found by a root search on the equations
    # written out apart (no printed value).
    drive, frequency, state = 1.8793131981, 2.6643132260, jnp.array([0.2493382531, 0.1982203366])
    onset = WilsonCowanParams([drive])
    np.testing.assert_allclose(compiled[0](state, onset), 0, atol=1e-9)
    eigenvalues = np.linalg.eigvals(compiled[1](state, onset))
    np.testing.assert_allclose(eigenvalues.real, 0, atol=1e-8)
    np.testing.assert_allclose(np.abs(eigenvalues.imag), frequency, rtol=0, atol=1e-8)
    for change, grows in ((-0.02, True), (0.02, False)):
        params = WilsonCowanParams([drive + change])
        at = root(lambda y, p=params: np.asarray(compiled[0](y, p)), state, tol=1e-12).x
        assert (np.max(np.linalg.eigvals(compiled[1](at, params)).real) > 0) == grows


# Parameters: Wilson & Cowan 1972, figure 4 (from memory); a root search found these.
@pytest.mark.parametrize(
    "e, i, stable", [(0.0, 0.0, True), (0.18967, 0.06810, False), (0.43975, 0.22593, True)]
)
def test_three_fixed_points_with_hysteresis(compiled, e, i, stable):
    weights = {"ee": [12.0], "ei": [4.0], "ie": [13.0], "ii": [11.0]}
    responses = {"slope_e": [1.2], "threshold_e": [2.8], "slope_i": [1.0], "threshold_i": [4.0]}
    params = WilsonCowanParams([0.0], **weights, **responses)
    found = root(lambda y: np.asarray(compiled[0](y, params)), [e, i], tol=1e-12).x
    np.testing.assert_allclose(found, [e, i], atol=1e-5)
    growth = np.max(np.linalg.eigvals(compiled[1](found, params)).real)
    assert (growth < 0) == stable


def test_coupling_acts_within_the_response():
    # By hand: node 1 of the network sees g K_10 E_0 as if its drive were so much larger.
    y = jnp.array([[0.2, 0.1], [0.05, 0.1]])
    edges = Edges([0], [1], [1.5], nodes=2)
    out = wilson_cowan(0.0, y, WilsonCowanParams([1.0, 0.5], coupling=edges, gain=0.4))
    alone = wilson_cowan(0.0, y, WilsonCowanParams([1.0, 0.5 + 0.4 * 1.5 * 0.2]))
    np.testing.assert_allclose(out, alone, rtol=1e-14)
