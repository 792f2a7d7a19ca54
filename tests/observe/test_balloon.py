import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from oscillib.observe import BalloonParams, BalloonReadout, balloon, balloon_steady
from oscillib.parameters import Fixed, Free


CLASSIC, REVISED = BalloonReadout(signal="classic"), BalloonReadout(signal="revised")
PARAMS = BalloonParams([1.0])
STEADY = [1.243902439, 1.0723378173, 0.89564230602]


@pytest.fixture(scope="module")
def compiled():
    one = lambda z, u, p: balloon(0.0, z[:, None], u[None], p)[:, 0]
    return jax.jit(one), jax.jit(jax.jacfwd(one))


# Friston, Harrison & Penny 2003 (parameter values from memory); steady state in closed form.
def test_steady_state_and_signal():
    state = balloon_steady(jnp.array([0.1]), PARAMS)
    np.testing.assert_allclose(jnp.exp(state[1:, 0]), STEADY, rtol=0, atol=1e-9)
    assert abs(CLASSIC(state, PARAMS)[0] - 0.010864022259) < 1e-9
    np.testing.assert_allclose(balloon(0.0, state, jnp.array([0.1]), PARAMS), 0, atol=1e-14)


def test_constant_drive_leads_to_the_steady_state(compiled):
    drive = jnp.asarray(0.1)
    out = solve_ivp(
        lambda t, z: np.asarray(compiled[0](z, drive, PARAMS)), (0, 80), np.zeros(4),
        method="DOP853", rtol=1e-11, atol=1e-12,
    )  # fmt: skip
    np.testing.assert_allclose(np.exp(out.y[1:, -1]), STEADY, rtol=0, atol=1e-9)


def test_flow_is_a_damped_oscillator(compiled):
    # Natural angular frequency sqrt(gamma), damped frequency sqrt(gamma - kappa^2/4) / 2 pi, decay
    # kappa / 2; closed form.
    at_rest = compiled[1](jnp.zeros(4), jnp.asarray(0.0), PARAMS)
    root = np.linalg.eigvals(np.asarray(at_rest)[:2, :2])[0]
    assert abs(abs(root) - 0.64031242374328485) < 1e-12
    assert abs(abs(root.imag) / (2 * np.pi) - 0.08780608645067915) < 1e-12
    assert abs(root.real + 0.325) < 1e-12
    # Volume and deoxyhaemoglobin relax, at 1 / (alpha tau) and 1 / tau; by hand.
    others = np.sort(np.linalg.eigvals(np.asarray(at_rest)[2:, 2:]).real)
    np.testing.assert_allclose(others, [-1 / (0.32 * 0.98), -1 / 0.98], rtol=1e-12)


def test_gain_at_rest():
    # dv = alpha / gamma, dq = (alpha + (1 - E0) ln(1 - E0) / E0) / gamma; closed form.
    signal = lambda u: CLASSIC(balloon_steady(u, PARAMS), PARAMS)[0]
    assert abs(jax.jit(jax.grad(signal))(jnp.zeros(1))[0] - 0.12769068083) < 1e-9


def test_weights_of_the_signals():
    # Revised: Stephan et al. 2007 (constants from memory). Classic: 7 E0, 2, 2 E0 - 0.2.
    weights = REVISED.weights(BalloonParams([1.0], extraction=[0.4]))
    np.testing.assert_allclose(weights[:, 0], [2.77264, 0.572, -0.43], rtol=0, atol=1e-12)
    np.testing.assert_allclose(CLASSIC.weights(PARAMS)[:, 0], [2.38, 2, 0.48], rtol=1e-14)


def test_rates_of_the_first_paper_are_near_the_defaults():
    # Friston et al. 2000 (from memory): 1.54 s and 2.46 s^2.
    np.testing.assert_allclose(
        [1 / 1.54, 1 / 2.46], [PARAMS.decay[0], PARAMS.autoregulation[0]], atol=5e-3
    )


@pytest.mark.parametrize("readout", [CLASSIC, REVISED])
def test_response_to_a_brief_drive(compiled, readout):
    # Peaks some 3 to 6 s after a second of activity and undershoots later; common knowledge.
    field = lambda t, z: np.asarray(compiled[0](z, jnp.asarray(1.0 if t < 1 else 0.0), PARAMS))
    times = np.arange(0, 30, 0.05)
    out = solve_ivp(field, (0, 30), np.zeros(4), t_eval=times, max_step=0.1, rtol=1e-6)
    signal = jax.jit(jax.vmap(lambda z: readout(z[:, None], PARAMS)[0]))(jnp.asarray(out.y.T))
    peak, dip = np.argmax(signal), np.argmin(signal)
    assert 3 < times[peak] < 6 and times[dip] > times[peak]
    assert signal[dip] < -0.02 * signal[peak]


def test_peak_and_undershoot_of_the_response(compiled):
    # The classic signal after a second of activity, parameters as above: an 8th-order run of the
    # equations in flow, volume and content, not their logarithms, written apart (no printed value).
    run = lambda end, z, u, **options: solve_ivp(
        lambda t, z: np.asarray(compiled[0](z, jnp.asarray(u), PARAMS)), end, z,
        method="DOP853", rtol=1e-9, atol=1e-11, **options,
    )  # fmt: skip
    later = run((1, 14), run((0, 1), np.zeros(4), 1.0).y[:, -1], 0.0, dense_output=True).sol
    times = np.array([3.3760619991, 9.5801836727])
    around = times[:, None] + np.array([-0.01, 0.0, 0.01])
    states = jnp.asarray(later(around.ravel()).T.reshape(2, 3, 4))
    signal = np.asarray(jax.vmap(jax.vmap(lambda z: CLASSIC(z[:, None], PARAMS)[0]))(states))
    np.testing.assert_allclose(signal[:, 1], [0.0252346188135, -0.0056196797653], rtol=0, atol=1e-9)
    # The top of the parabola through three points: time of the extreme.
    below, at, above = signal.T
    shift = 0.01 * (below - above) / (2 * (below - 2 * at + above))
    np.testing.assert_allclose(shift, 0, atol=1e-4)


@pytest.mark.parametrize("dtype", [jnp.float32, jnp.float64])
def test_rest_is_rest_with_finite_derivatives(dtype):
    params = jax.tree.map(lambda x: x.astype(dtype), PARAMS)
    origin, silence = jnp.zeros((4, 1), dtype), jnp.zeros(1, dtype)

    @jax.jit
    def at_rest(z, u, p):
        total = lambda z, u, p: jnp.sum(balloon(0.0, z, u, p)) + jnp.sum(REVISED(z, p))
        return balloon(0.0, z, u, p), REVISED(z, p), jax.grad(total, argnums=(0, 1, 2))(z, u, p)

    dz, signal, gradient = at_rest(origin, silence, params)
    assert dz.dtype == dtype and dz.shape == (4, 1) and signal.dtype == dtype
    np.testing.assert_allclose(dz, 0, atol=4 * float(jnp.finfo(dtype).eps))
    np.testing.assert_array_equal(signal, 0)
    assert all(bool(jnp.all(jnp.isfinite(x))) for x in jax.tree.leaves(gradient))


def test_constraints():
    constraints = PARAMS.constraints()
    assert constraints.efficacy == Free() and constraints.volume == Fixed()


def test_a_drive_that_stops_the_flow_has_no_steady_state():
    assert np.isnan(balloon_steady(jnp.array([-0.5]), PARAMS)[1, 0])


@pytest.mark.parametrize(
    "make, error, match",
    [
        (lambda: BalloonParams([1.0], transit=1.0), ValueError, "`transit` must have shape"),
        (lambda: BalloonReadout(signal="new"), ValueError, "`signal` must be 'classic'"),  # pyright: ignore[reportArgumentType]
        (
            lambda: balloon(0.0, jnp.zeros((3, 1)), jnp.zeros(1), PARAMS),
            ValueError,
            "`z` must have shape",
        ),
        (lambda: CLASSIC(jnp.zeros((3, 1)), PARAMS), ValueError, "at least 4 rows"),
    ],
)  # fmt: skip
def test_errors(user_errors, make, error, match):
    with pytest.raises(error, match=match):
        make()
