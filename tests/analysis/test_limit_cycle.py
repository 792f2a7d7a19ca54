import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.analysis import RootStatus, cycle_guess, floquet, limit_cycle
from oscillib.integrate import rk4


# The Hopf unit of the check values: growth, saturation, shear, angular frequency.
A, B, C, W = 0.4, 1.5, 0.9, 3.0
VALUES = jnp.array([A, B, C, W])
FIRST = jnp.array([0.5, 0.05])


def hopf(t, y, values):
    a, b, c, w = values
    r2 = jnp.sum(y**2)
    growth, turn = a - b * r2, w - c * r2
    return jnp.stack([growth * y[0] - turn * y[1], turn * y[0] + growth * y[1]])


UNIT = rk4(hopf)


def van_der_pol(t, y, mu):
    x, v = y
    return jnp.stack([v, mu * (1 - x**2) * v - x])


def fitzhugh_nagumo(t, y, drive):
    v, w = y
    return jnp.stack([v - v**3 / 3 - w + drive, 0.08 * (v + 0.7 - 0.8 * w)])


def brusselator(t, y, p):
    a, b = p
    x, z = y
    return jnp.stack([a + x**2 * z - (b + 1) * x, b * x - x**2 * z])


def wilson_cowan(t, y, drive):
    """Wilson & Cowan 1972, the set of figure 11 (from memory)."""
    e, i = y

    def sigmoid(x, a, threshold):
        shift = 1 / (1 + np.exp(a * threshold))
        return 1 / (1 + jnp.exp(-a * (x - threshold))) - shift, 1 - shift

    s_e, k_e = sigmoid(16 * e - 12 * i + drive, 1.3, 4.0)
    s_i, k_i = sigmoid(15 * e - 3 * i, 2.0, 3.7)
    return jnp.stack([-e + (k_e - e) * s_e, -i + (k_i - i) * s_i])


@pytest.fixture(scope="module")
def hopf_cycle():
    """Cycle and multipliers, and the derivatives of period, radius and margin."""

    def find(values):
        cycle = limit_cycle(UNIT, values, FIRST, 2.3, steps=1500)
        disturbed = floquet(UNIT, values, cycle)
        measured = jnp.stack([cycle.period, cycle.high[0], disturbed.margin])
        return measured, (cycle, disturbed)

    return jax.jit(jax.jacfwd(find, has_aux=True))


def test_hopf_cycle_in_closed_form(hopf_cycle):
    # Radius sqrt(a/b), frequency w - c a/b, multipliers {1, e^(-2aT)}: common practice.
    _, (cycle, disturbed) = hopf_cycle(VALUES)
    assert int(cycle.status) == RootStatus.CONVERGED
    np.testing.assert_allclose(cycle.high[0], 0.5163977794943, rtol=0, atol=1e-10)
    np.testing.assert_allclose(cycle.low, -0.5163977794943, rtol=0, atol=1e-10)
    np.testing.assert_allclose(2 * np.pi / cycle.period, 2.76, rtol=0, atol=1e-10)
    np.testing.assert_allclose(cycle.period, 2.276516416, rtol=0, atol=1e-9)
    np.testing.assert_allclose(disturbed.multipliers[:, 0], [1, 0.161829311405], rtol=0, atol=1e-10)
    np.testing.assert_allclose(disturbed.multipliers[:, 1], 0.0)
    np.testing.assert_allclose(disturbed.exponents, [0, -0.8], rtol=0, atol=1e-9)
    np.testing.assert_allclose(disturbed.margin, 0.8, rtol=0, atol=1e-9)
    assert float(cycle.gap) < 1e-14


def test_derivatives_by_the_implicit_function_theorem(hopf_cycle):
    slopes, _ = hopf_cycle(VALUES)
    omega = W - C * A / B
    period = 2 * np.pi / omega**2 * np.array([C / B, -C * A / B**2, A / B, -1.0])
    radius = np.array([0.5 / np.sqrt(A * B), -0.5 * np.sqrt(A / B**3), 0, 0])
    np.testing.assert_allclose(slopes[0], period, rtol=1e-9)
    np.testing.assert_allclose(slopes[1], radius, rtol=0, atol=1e-9)
    np.testing.assert_allclose(slopes[2], [2, 0, 0, 0], rtol=0, atol=1e-8)


def test_unstable_cycle_is_found_and_a_fixed_point_is_told_apart(hopf_cycle):
    # Both signs turned: a repelling cycle of the same radius around a stable origin.
    _, (cycle, disturbed) = hopf_cycle(jnp.array([-A, -B, C, W]))
    assert int(cycle.status) == RootStatus.CONVERGED
    np.testing.assert_allclose(cycle.high[0], np.sqrt(A / B), rtol=0, atol=1e-9)
    np.testing.assert_allclose(disturbed.margin, -2 * A, rtol=0, atol=1e-9)
    # A damped unit has no cycle; a missing guess comes as NaN.
    _, (damped, _) = hopf_cycle(jnp.array([-A, B, C, W]))
    assert int(damped.status) != RootStatus.CONVERGED
    _, (bad, _) = hopf_cycle(jnp.array([jnp.nan, B, C, W]))
    assert int(bad.status) == RootStatus.NON_FINITE


def test_reverse_mode_and_second_derivative_of_the_period():
    # T = 2 pi / (w - c a / b).
    def period(a):
        values = jnp.stack([a, *VALUES[1:]])
        return limit_cycle(UNIT, values, FIRST, 2.3, steps=200).period

    omega = W - C * A / B
    slope = jax.grad(period)
    first, second = jax.jit(lambda a: jax.jvp(slope, (a,), (jnp.ones_like(a),)))(jnp.asarray(A))
    np.testing.assert_allclose(first, 2 * np.pi * C / B / omega**2, rtol=1e-6)
    np.testing.assert_allclose(second, 4 * np.pi * (C / B) ** 2 / omega**3, rtol=1e-6)


@pytest.fixture(scope="module")
def van_der_pols():
    """All van der Pol cycles of this file, compiled once."""

    @jax.jit
    @jax.vmap
    def find(mu, period):
        y0 = jnp.array([2.0, 0.0])
        cycle = limit_cycle(rk4(van_der_pol), mu, y0, period, steps=16000)
        return cycle, floquet(rk4(van_der_pol), mu, cycle)

    return find(jnp.array([0.1, 1.0, 5.0]), jnp.array([6.28, 6.6, 11.6]))


def test_van_der_pol_periods(van_der_pols):
    cycle, _ = van_der_pols
    assert (cycle.status == RootStatus.CONVERGED).all()
    # Andersen & Geer 1982, SIAM J Appl Math 42 (from memory): small mu.
    np.testing.assert_allclose(2 * np.pi / cycle.period[0], 0.999375553425, rtol=0, atol=2e-10)
    # Hairer, Norsett & Wanner, Solving ODEs I, exercise 1 of section I.16.
    np.testing.assert_allclose(cycle.period[1], 6.6632868593231301896996820305, rtol=0, atol=1e-10)
    # Computed independently by Taylor series.
    np.testing.assert_allclose(cycle.period[2], 11.612230667719570035, rtol=0, atol=1e-9)


def test_van_der_pol_amplitudes(van_der_pols):
    high = van_der_pols[0].high[:, 0]
    # Hairer, Norsett & Wanner as above; the print drops a digit 6 after ...136509.
    np.testing.assert_allclose(high[1], 2.00861986087484313650964, rtol=0, atol=1e-10)
    # Computed independently by Taylor series.
    np.testing.assert_allclose(high[2], 2.02150806156232132, rtol=0, atol=1e-9)


def test_van_der_pol_multipliers(van_der_pols):
    # Liouville: the exponent is the mean of mu (1 - x^2) over the cycle; value computed
    # independently.
    cycle, one = jax.tree.map(lambda x: x[1], van_der_pols)
    np.testing.assert_allclose(one.multipliers[:, 0], [1, 0.0008596950636], rtol=0, atol=1e-9)
    np.testing.assert_allclose(one.exponents, [0, -1.0593769948], rtol=0, atol=1e-9)
    mean = np.mean(1 - np.asarray(cycle.states[:-1, 0]) ** 2)
    np.testing.assert_allclose(one.exponents[1], mean, rtol=0, atol=1e-9)


def test_error_falls_with_the_order_of_the_step():
    # The same 50 steps, each made of a counted number of smaller ones: one program for all.
    def step(params, h):
        mu, parts = params
        advance = rk4(van_der_pol)(mu, h / parts)
        return lambda t, y: jax.lax.fori_loop(0, parts.astype(int), lambda _, y: advance(t, y), y)

    y0 = jnp.array([2.0, 0.0])
    find = jax.vmap(lambda parts: limit_cycle(step, (1.0, parts), y0, 6.6, steps=50).period)
    parts = np.array([1.0, 2.0, 4.0])
    errors = np.abs(jax.jit(find)(jnp.asarray(parts)) - 6.6632868593231302)
    order = -np.polyfit(np.log(parts), np.log(errors), 1)[0]
    assert 3.7 < order < 4.3


def period_from(field, params, y0, period, steps):
    find = jax.jit(lambda p: limit_cycle(rk4(field), p, jnp.array(y0), period, steps=steps))
    cycle = find(params)
    assert int(cycle.status) == RootStatus.CONVERGED
    return cycle.period


def test_fitzhugh_nagumo_period():
    # At drive 0.5; computed independently by two integrators.
    found = period_from(fitzhugh_nagumo, 0.5, [1.8, 0.7], 39.0, 16000)
    np.testing.assert_allclose(found, 39.4744149802, rtol=0, atol=1e-7)


def test_brusselator_period():
    # A = 1, B = 3: Hairer, Norsett & Wanner I.16; the period computed independently.
    found = period_from(brusselator, (1.0, 3.0), [0.4, 3.0], 7.0, 4000)
    np.testing.assert_allclose(found, 7.1569199212, rtol=0, atol=1e-7)


def test_wilson_cowan_period():
    # Wilson & Cowan 1972 (from memory); period and greatest E computed independently.
    step = rk4(wilson_cowan)

    @jax.jit
    def find(drive):
        guess = cycle_guess(step, drive, jnp.array([0.1, 0.05]), 0.02, 8000)
        return guess, limit_cycle(step, drive, guess.state, guess.period, steps=2000)

    guess, cycle = find(1.25)
    assert bool(guess.found)
    assert int(cycle.status) == RootStatus.CONVERGED
    np.testing.assert_allclose(guess.period, cycle.period, rtol=1e-3)
    np.testing.assert_allclose(cycle.period, 4.9958943041, rtol=0, atol=1e-6)
    np.testing.assert_allclose(cycle.high[0], 0.269659, rtol=0, atol=1e-6)


@pytest.fixture(scope="module")
def single():
    traces = []

    @jax.jit
    def find(p, y0):
        traces.append(p)
        guess = cycle_guess(UNIT, p, y0, 0.05, 1200)
        return guess, limit_cycle(UNIT, p, guess.state, guess.period, steps=100)

    return find, traces


def test_both_precisions_trace_once(single):
    find, traces = single
    for dtype, tolerance in ((jnp.float64, 1e-6), (jnp.float32, 2e-5)):
        for growth in (0.5, 0.7):
            guess, cycle = find(jnp.asarray([growth, 1, 0, 3], dtype), jnp.ones(2, dtype))
            assert bool(guess.found)
            assert int(cycle.status) == RootStatus.CONVERGED
            assert all(x.dtype == dtype for x in cycle if x.dtype != jnp.int32)
            np.testing.assert_allclose(cycle.period, 2 * np.pi / 3, rtol=tolerance)
            np.testing.assert_allclose(cycle.high, np.sqrt(growth), rtol=tolerance)
    assert len(traces) == 2


def test_nothing_found_is_no_success(single):
    find, _ = single
    # At rest there are no crossings.
    guess, cycle = find(jnp.array([0.5, 1, 0, 3]), jnp.zeros(2))
    assert not bool(guess.found) and np.isnan(guess.period)
    assert int(cycle.status) == RootStatus.NON_FINITE
    # Damped units cross on their way to rest; the search ends there or comes no closer.
    guess, cycle = find(jnp.array([-0.05, 1, 0, 3]), jnp.ones(2))
    assert bool(guess.found)
    assert int(cycle.status) in (RootStatus.AT_REST, RootStatus.STALLED)


@pytest.mark.usefixtures("user_errors")
def test_messages():
    p = VALUES
    with pytest.raises(ValueError, match="`y0` must have at least two entries"):
        limit_cycle(rk4(lambda t, y, p: y), p, jnp.ones(1), 1.0, steps=10)
    with pytest.raises(ValueError, match="`steps` must be at least 1"):
        limit_cycle(UNIT, p, FIRST, 1.0, steps=0)
    with pytest.raises(TypeError, match="`y0` must hold real floating-point"):
        limit_cycle(UNIT, p, jnp.ones(2, int), 1.0, steps=10)
    with pytest.raises(ValueError, match="`entry` must be one of the 2 entries"):
        cycle_guess(UNIT, p, FIRST, 0.1, 10, entry=2)
