import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.analysis import kaplan_yorke, lyapunov_spectrum
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import rk4


NET = HopfNetwork()


def lorenz(t, y, rho):
    u, v, z = y
    return jnp.stack([10 * (v - u), u * (rho - z) - v, u * v - 8 / 3 * z])


def roessler(t, y, c):
    u, v, z = y
    return jnp.stack([-v - z, u + 0.2 * v, 0.2 + z * (u - c)])


def unit_step(params, h):
    flow = NET.unit_flow(params, h)
    return lambda t, y: flow(y)


def exponents_of(field, param, h, time, every):
    blocks = round(time / (every * h))

    @jax.jit
    def estimate(param):
        y0 = jnp.array([1.0, 1.2, 0.9])
        return lyapunov_spectrum(
            rk4(field), param, y0, h, blocks, every=every, transient=round(100 / (every * h))
        )

    return estimate(param)


def test_limit_cycle():
    # {0, -2a}: logarithms of the Floquet multipliers over the period; closed form.
    p = HopfParams([0.4], [3.0], shear=[0.9], saturation=[1.5])
    y0 = jnp.array([[np.sqrt(0.4 / 1.5)], [0.0]])
    find = jax.jit(lambda p: lyapunov_spectrum(unit_step, p, y0, 0.1, 60, every=10, transient=60))
    np.testing.assert_allclose(find(p).exponents, [0, -0.8], rtol=0, atol=1e-9)


@pytest.fixture(scope="module")
def lorenz_run():
    return exponents_of(lorenz, 28.0, 0.005, 10000, 20)


def test_lorenz(lorenz_run):
    # Sprott 2003; Viswanath 1998 (digits seen in public code).
    np.testing.assert_allclose(lorenz_run.exponents, [0.9056, 0, -14.5723], atol=0.005)
    # The sum is the trace of the Jacobian, -(10 + 1 + 8/3), whatever the trajectory: what is left
    # is the error of the step.
    np.testing.assert_allclose(jnp.sum(lorenz_run.exponents), -13.66666667, atol=1e-3)
    # 2 + l1 / |l3| of the same source.
    np.testing.assert_allclose(kaplan_yorke(lorenz_run.exponents), 2.062, atol=1e-3)


def test_running_estimate_settles(lorenz_run):
    last = np.asarray(lorenz_run.running[:, 0])
    n = len(last)
    assert np.ptp(last[n // 2 :]) < 0.5 * np.ptp(last[n // 20 : n // 2])
    np.testing.assert_allclose(lorenz_run.times[-1], 10000.0)
    assert np.isfinite(lorenz_run.state).all()


def test_roessler():
    # Sprott 2003 (digits seen in public code).
    found = exponents_of(roessler, 5.7, 0.02, 30000, 20)
    np.testing.assert_allclose(found.exponents, [0.0714, 0, -5.3943], atol=0.003)


def test_lorenz_96():
    # Lorenz & Emanuel 1998 give 1.65, later work 1.67 to 1.68 (from memory); long runs of our own
    # gave 1.686 and 1.696.
    def field(t, y, force):
        ahead, behind = jnp.roll(y, -1), jnp.roll(y, 1)
        return (ahead - jnp.roll(y, 2)) * behind - y + force

    y0 = 8 + jnp.sin(jnp.arange(40.0))
    find = jax.jit(
        lambda p: lyapunov_spectrum(
            rk4(field), p, y0, 0.01, 20000, every=20, transient=500, exponents=1
        )
    )
    np.testing.assert_allclose(find(8.0).exponents[0], 1.68, atol=0.04)


def test_logistic_map():
    # ln 2: closed form (arcsine density). A map is a step like any other.
    step = lambda r, h: lambda t, y: r * y * (1 - y)
    # At 4 rounding could run into the fixed point 0; from here it does not.
    find = jax.jit(lambda r: lyapunov_spectrum(step, r, jnp.array([0.3123]), 1.0, 20000, every=1))
    np.testing.assert_allclose(find(4.0).exponents[0], np.log(2), atol=0.005)


def test_linear_field_and_fewer_exponents():
    # A linear field's exponents are the real parts of its eigenvalues, here by construction.
    rng = np.random.default_rng(5)
    change = rng.normal(size=(4, 4))
    matrix = jnp.asarray(change @ np.diag([0.5, -0.2, -1.0, -2.0]) @ np.linalg.inv(change))
    step = rk4(lambda t, y, p: p @ y)
    run = lambda count: lyapunov_spectrum(
        step, matrix, jnp.zeros(4), 0.05, 40, every=20, transient=60, exponents=count
    )
    all_of, two = jax.jit(lambda: (run(None), run(2)))()
    np.testing.assert_allclose(all_of.exponents, [0.5, -0.2, -1.0, -2.0], atol=5e-6)
    np.testing.assert_allclose(two.exponents, all_of.exponents[:2], rtol=1e-10)


def test_directions_favour_no_unit():
    # Two units that know nothing of each other: the largest exponent is that of the second.
    p = HopfParams([-1.0, -0.1], [3.0, 5.0])
    find = jax.jit(
        lambda p: lyapunov_spectrum(
            unit_step, p, jnp.zeros((2, 2)), 0.1, 50, transient=50, exponents=1
        )
    )
    np.testing.assert_allclose(find(p).exponents, [-0.1], atol=1e-6)


def test_time_reaches_the_step():
    # dy/dt = -t y from the start: mean rate -T/2.
    step = rk4(lambda t, y, p: -p * t * y)
    find = jax.jit(lambda p: lyapunov_spectrum(step, p, jnp.ones(1), 0.1, 4, every=5))
    out = find(1.0)
    np.testing.assert_allclose(out.running[:, 0], -out.times / 2, rtol=1e-5)


def test_precisions_trace_once_batch_and_gradient():
    traces = []

    # Turning and shrinking: the sum of the exponents is exactly the trace.
    def step(p, h):
        turn = jnp.array([[0.8, -0.6], [0.6, 0.8]], p.dtype)
        return lambda t, y: turn @ (jnp.exp(p * h) * y)

    @jax.jit
    def find(p, ys):
        traces.append(p)
        both = lambda p, y: jnp.sum(lyapunov_spectrum(step, p, y, 0.1, 5, every=4).exponents)
        return jax.vmap(both, in_axes=(None, 0))(p, ys), jax.grad(both)(p, ys[0])

    for dtype, tolerance in ((jnp.float64, 1e-12), (jnp.float32, 1e-5)):
        for rate in (-0.5, -0.7):
            value, slope = find(jnp.asarray([rate, -0.2], dtype), jnp.ones((3, 2), dtype))
            assert value.dtype == slope.dtype == dtype
            np.testing.assert_allclose(value, rate - 0.2, rtol=tolerance)
            np.testing.assert_allclose(slope, 1.0, rtol=tolerance)
    assert len(traces) == 2


@pytest.mark.parametrize(
    ("exponents", "expected"),
    [([-1.0, -2.0], 0.0), ([1.0, 1.0], 2.0), ([0.5, 0.0, -2.0], 2.25), ([0.0, -1.0], 1.0)],
)
def test_kaplan_yorke_cases(exponents, expected):
    np.testing.assert_allclose(kaplan_yorke(jnp.array(exponents)), expected)


@pytest.mark.usefixtures("user_errors")
def test_messages():
    run = lambda **options: lyapunov_spectrum(
        rk4(lorenz), 28.0, jnp.ones(3), 0.01, **{"blocks": 2, **options}
    )
    with pytest.raises(ValueError, match="`exponents` must be at most the 3 entries"):
        run(exponents=4)
    with pytest.raises(ValueError, match="`transient` must be at least 0"):
        run(transient=-1)
    with pytest.raises(ValueError, match="`blocks` must be at least 1"):
        run(blocks=0)
