import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax import lax

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import heun, rk4, rollout


COUNTS = np.array([64, 128, 256, 512])


def runner(step, end):
    """Compile a run of any number of steps once; independent of `rollout`."""

    @jax.jit
    def final(params, y, count):
        h = end / count.astype(y.dtype)
        advance = step(params, h)
        return lax.fori_loop(0, count, lambda k, y: advance(k.astype(y.dtype) * h, y), y)

    return lambda params, y, count: np.asarray(final(params, y, jnp.asarray(count)))


def order(errors):
    return -np.polyfit(np.log(COUNTS), np.log(errors), 1)[0]


# Order and the tolerance on it: textbook (Hairer, Lubich & Wanner 2006; from memory), with slopes
# over the same step counts of 1.979 and 3.966 computed independently.
@pytest.mark.parametrize("make, expected, tolerance", [(heun, 2, 0.1), (rk4, 4, 0.1)])
def test_order(make, expected, tolerance):
    run = runner(make(HopfNetwork()), 4.0)
    params, start = HopfParams([0.4], [3.0]), jnp.array([[0.2], [0.1]])
    # Closed form to 40 digits; common practice.
    exact = np.array([[0.55491488485800019834], [-0.057203871761378918795]])
    slope = order([np.linalg.norm(run(params, start, n) - exact) for n in COUNTS])
    assert abs(slope - expected) < tolerance


@pytest.mark.parametrize("make, expected, tolerance", [(heun, 2, 0.1), (rk4, 4, 0.1)])
def test_order_with_a_forced_field(make, expected, tolerance):
    # y' = y cos t, y = e^(sin t): problem A3 of DETEST (Hull, Enright, Fellen & Sedgwick 1972).
    # Stages at the wrong times would lower the order.
    run = runner(make(lambda t, y, params: y * jnp.cos(t)), 4.0)
    slope = order([abs(run(None, jnp.ones(1), n)[0] - np.exp(np.sin(4.0))) for n in COUNTS])
    assert abs(slope - expected) < tolerance


@pytest.mark.parametrize(
    "make, size, factor",
    [(rk4, 0.7, 0.99846606946181), (heun, 0.1, 1.000025)],
    # RK4: 1 - y^6/72 + y^8/576; Heun: 1 + y^4/4. Closed form.
)
def test_amplitude_factor_of_a_rotation(make, size, factor):
    rotation = lambda t, y, params: jnp.stack([-y[1], y[0]])
    advance = make(rotation)(None, jnp.asarray(size))
    out = advance(jnp.asarray(0.0), jnp.array([1.0, 0.0]))
    assert abs(jnp.sum(out**2) - factor) < 1e-14


def detest(t, y, params):
    """Problems A1-A5, B1, B5, D1, D3, E1, E2 of DETEST side by side."""
    a, b1, b5, d1, d3, e1, e2 = jnp.split(y, [5, 7, 10, 14, 18, 20])

    def kepler(d):
        return [d[2], d[3], *(-d[:2] / jnp.sum(d[:2] ** 2) ** 1.5)]

    return jnp.stack(
        [
            -a[0], -(a[1] ** 3) / 2, a[2] * jnp.cos(t), a[3] / 4 * (1 - a[3] / 20),
            (a[4] - t) / (a[4] + t),
            2 * (b1[0] - b1[0] * b1[1]), -(b1[1] - b1[0] * b1[1]),
            b5[1] * b5[2], -b5[0] * b5[2], -0.51 * b5[0] * b5[1],
            *kepler(d1), *kepler(d3),
            e1[1], -(e1[1] / (t + 1) + (1 - 0.25 / (t + 1) ** 2) * e1[0]),
            e2[1], (1 - e2[0] ** 2) * e2[1] - e2[0],
        ]
    )  # fmt: skip


# Starts: Kepler orbits of eccentricity 0.1 and 0.5 from perihelion; Bessel J_1/2 at 1.
DETEST_START = np.array(
    [
        1, 1, 1, 1, 4, 1, 3, 0, 1, 1, 0.9, 0, 0, np.sqrt(1.1 / 0.9), 0.5, 0, 0, np.sqrt(3),
        0.6713967071418031, 0.09540051444747447, 2, 0,
    ]
)  # fmt: skip
# At t = 20. Hull, Enright, Fellen & Sedgwick 1972 / Enright & Pryce 1987; end values seen in the
# public-domain test driver, and recomputed from closed forms.
DETEST_END = np.array(
    [
        2.061153353012535e-09, 0.2182178902359887, 2.491650271850414, 17.73016648131483,
        -0.7887826688964196, 0.6761876008576667, 0.1860816099640036, -0.9396570798729192,
        -0.3421177754000779, 0.7414126596199957, 0.2198835352008397, 0.9427076846341813,
        -0.9787659841058176, 0.3287977990962036, -0.5780432953035362, 0.8633840009194192,
        -0.9595083730380727, -0.06504915126712089, 0.1456723600728308, -0.09883500195574063,
        2.008149762174948, -0.04250887527320057,
    ]
)  # fmt: skip


def test_detest_end_values():
    out = jax.jit(lambda y: rollout(rk4(detest), None, y, 20 / 16000, 16000)[-1])(DETEST_START)
    # 16,000 steps of the fourth order: the orbits, the fastest of them, are good to 1e-9.
    error = np.abs(out - DETEST_END)
    assert np.max(error) < 1e-9
    assert np.max(error[[0, 1, 2, 3, 4, 18, 19]]) < 1e-10
    # The printed end of A1 is right absolutely; it is e^-20 to seven digits alone.
    assert abs(out[0] * np.exp(20.0) - 1) < 1e-9


def conservative(t, y, params):
    """Pendulum, Duffing's spring, Henon & Heiles's orbit, predator and prey side by side."""
    a, v, x, u, q, r, p, s, prey, predator = y
    return jnp.stack(
        [
            v, -jnp.sin(a), u, -x - x**3, p, s, -q - 2 * q * r, -r - q**2 + r**2,
            prey * (1 - predator), predator * (prey - 1),
        ]
    )  # fmt: skip


@pytest.fixture(scope="module")
def conserved():
    """End of so many steps of all four, from pi/2 at rest, (1, 0), (0, 0.1, 0.49057, 0), (1, 2)."""
    start = jnp.array([np.pi / 2, 0, 1, 0, 0, 0.1, 0.49057, 0, 1, 2])

    @jax.jit
    def run(end, count):
        advance = rk4(conservative)(None, end / count.astype(end.dtype))
        return lax.fori_loop(0, count, lambda _, y: advance(0.0, y), start)

    return lambda end, count: np.asarray(run(jnp.asarray(end), jnp.asarray(count)))


def test_known_periods_and_solutions(conserved):
    # Pendulum: 4 K(1/2), complete elliptic integral. At the turn only the speed tells the time.
    assert abs(conserved(7.4162987092055, 8000)[1]) < 1e-10
    # Duffing: cn(sqrt(2) t | 1/4) at t = 7; closed form.
    assert abs(conserved(7.0, 8000)[2] + 0.97706227434627) < 1e-10
    # Predator and prey: a quadrature in log x. Of the two only the prey, at the speed -1, tells it.
    assert abs(conserved(6.6084826712, 8000)[8] - 1) < 1e-8


def test_what_is_conserved_stays(conserved):
    # Henon & Heiles 1964, to t = 500.
    q, r, p, s = conserved(500.0, 100_000)[4:8]
    energy = (p**2 + s**2 + q**2 + r**2) / 2 + q**2 * r - r**3 / 3
    assert abs(energy - 0.124996129117) < 1e-9
    # 3 - log 2, to t = 200; common practice.
    x, y = conserved(200.0, 40_000)[8:]
    assert abs(x - np.log(x) + y - np.log(y) - 2.30685281944) < 1e-9


@pytest.mark.parametrize("make", [heun, rk4])
def test_substeps_are_steps(make):
    field = lambda t, y, params: y * jnp.cos(params * t)
    h, t0, y = jnp.asarray(0.6), jnp.asarray(5.0), jnp.array([1.0, -2.0])
    folded = make(field, substeps=3)(2.0, h)(t0, y)
    advance = make(field)(2.0, h / 3)
    for k in range(3):
        y = advance(t0 + k * h / 3, y)
    np.testing.assert_allclose(folded, y, rtol=1e-14)


@pytest.mark.parametrize("make", [heun, rk4])
@pytest.mark.parametrize(
    "field, error, match",
    [
        (lambda t, y, p: jnp.sum(y), ValueError, r"must return one array .* \(2,\); got \(\)"),
        (lambda y, t, p: -y, ValueError, "check the order of the arguments"),
        (lambda t, y, p: (y[0], y[1]), ValueError, "must return one array .*; got tuple"),
        (lambda t, y, p: 0.0, ValueError, r"must return one array .* got \(\)"),
        (lambda t, y, p: y.astype(jnp.float32), TypeError, "dtype of `y`, float64; got float32"),
    ],
    ids=["scalar", "swapped", "tuple", "number", "dtype"],
)
def test_errors_of_the_field(user_errors, make, field, error, match):
    with pytest.raises(error, match=match):
        rollout(make(field), None, jnp.ones(2), 0.1, 3)


@pytest.mark.parametrize("make", [heun, rk4])
def test_errors_of_substeps(user_errors, make):
    field = lambda t, y, params: -y
    with pytest.raises(TypeError, match=r"`substeps` must be a Python int.*got float"):
        make(field, substeps=2.0)
    with pytest.raises(ValueError, match="`substeps` must be at least 1; got 0"):
        make(field, substeps=0)
