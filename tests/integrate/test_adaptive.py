import diffrax
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams, VanDerPolParams, van_der_pol
from oscillib.integrate import adaptive_rollout


NET = HopfNetwork()
START = jnp.array([[0.2], [0.1]])
TIMES = jnp.array([0.0, 4.0, 7.0])
DECAY = lambda t, y, params: -y


def radius2(growth, adjoint=None):
    params = HopfParams([growth], [3.0], shear=[0.9], saturation=[1.5])
    out = adaptive_rollout(
        NET, params, START, TIMES, rtol=1e-12, atol=1e-12,
        solver=diffrax.Dopri8(), adjoint=adjoint,
    )  # fmt: skip
    return jnp.sum(out.states[-1] ** 2), out


def test_published_trajectory_and_gradient():
    # Closed forms to 40 digits; the gradient of |z(7)|^2 in growth from its derivative.
    (_, out), slope = jax.jit(jax.value_and_grad(radius2, has_aux=True))(0.4)
    assert out.success
    expected = [0.071124401454523437, 0.50734829416618121]
    np.testing.assert_allclose(out.states[-1].ravel(), expected, rtol=0, atol=1e-10)
    assert abs(slope - 0.70136703347805486) < 1e-8


def test_forward_mode():
    value = lambda a: radius2(a, diffrax.ForwardMode())[0]
    slope = jax.jit(jax.jacfwd(value))(0.4)
    assert abs(slope - 0.70136703347805486) < 1e-8


def test_irregular_absolute_times():
    # y' = y cos t from t = 3: e^(sin t - sin 3).
    times = jnp.array([3.0, 3.1, 4.7, 10.0])
    field = lambda t, y, params: y * jnp.cos(t)
    out = adaptive_rollout(field, None, jnp.ones(2), times, rtol=1e-11, atol=1e-11)
    expected = np.exp(np.sin(times) - np.sin(3.0))
    np.testing.assert_allclose(out.states[:, 1], expected, rtol=1e-9)
    assert out.success


def robertson(t, y, p):
    slow, fast = 0.04 * y[0] - 1e4 * y[1] * y[2], 3e7 * y[1] ** 2
    return jnp.stack([-slow, slow - fast, fast])


def hires(t, y, p):
    a, b, c, d, e, f, g, h = y
    meet, part = 280 * f * h, 1.81 * g
    return jnp.stack(
        [
            -1.71 * a + 0.43 * b + 8.32 * c + 0.0007, 1.71 * a - 8.75 * b,
            -10.03 * c + 0.43 * d + 0.035 * e, 8.32 * b + 1.71 * c - 1.12 * d,
            -1.745 * e + 0.43 * f + 0.43 * g,
            -meet + 0.69 * d + 1.71 * e - 0.43 * f + 0.69 * g, meet - part, part - meet,
        ]
    )  # fmt: skip


def oregonator(t, y, p):
    a, b, c = y
    return jnp.stack(
        [77.27 * (b + a * (1 - 8.375e-6 * a - b)), (c - (1 + a) * b) / 77.27, 0.161 * (a - c)]
    )


# Test Set for IVP Solvers (Mazzia & Magherini, Bari; formerly CWI): ends as in the set's source.
# That of van der Pol's oscillator, eps = 1e-6 at t = 2, is here in the time of mu = 1000.
STIFF = {
    "Robertson": (robertson, None, [1.0, 0, 0], 1e11, [2.083340149701255e-08,
                  8.333360770334713e-14, 0.999999979166505], 1e-16, 1e-9),
    "HIRES": (hires, None, [1.0, 0, 0, 0, 0, 0, 0, 0.0057], 321.8122, [0.0007371312573325668,
              0.0001442485726316185, 5.888729740967575e-05, 0.001175651343283149,
              0.002386356198831331, 0.006238968252742796, 0.002849998395185769,
              0.002850001604814231], 1e-13, 1e-11),
    "van der Pol": (van_der_pol, VanDerPolParams(1000.0), [2.0, 0], 2000.0,
                    [1.706167732170483, -0.8928097010247975e-3], 1e-13, 1e-9),
    "Oregonator": (oregonator, None, [1.0, 2, 3], 360.0,
                   [1.000814870318523, 1228.178521549917, 132.0554942846706], 1e-10, 1e-6),
}  # fmt: skip


@pytest.mark.long
@pytest.mark.parametrize("name", STIFF)
def test_an_implicit_solver_finds_the_ends_of_stiff_problems(name):
    field, params, start, end, expected, atol, tolerance = STIFF[name]
    out = jax.jit(
        lambda y: adaptive_rollout(
            field, params, y, jnp.array([0.0, end]), rtol=max(1e-11, atol), atol=atol,
            solver=diffrax.Kvaerno5(), max_steps=200_000,
        )
    )(jnp.array(start))  # fmt: skip
    assert out.success
    np.testing.assert_allclose(out.states[-1], expected, rtol=0, atol=tolerance)
    # Some entries are far below the others.
    np.testing.assert_allclose(out.states[-1], expected, rtol=1e-8)


def test_success_is_false_where_the_run_fails():
    def run(power, max_steps):
        return adaptive_rollout(
            lambda t, y, params: y**params, power, jnp.ones(1), jnp.array([0.0, 3.0]),
            rtol=1e-6, atol=1e-6, max_steps=max_steps,
        )  # fmt: skip

    growth = jax.jit(lambda power: run(power, 256))
    assert growth(jnp.asarray(1.0)).success
    assert not growth(jnp.asarray(2.0)).success  # 1 / (1 - t) ends at t = 1
    few = jax.jit(lambda power: run(power, 3))(jnp.asarray(1.0))
    assert not few.success
    assert few.num_steps == 3


@pytest.mark.parametrize(
    "error, match, y0, times",
    [
        (ValueError, "`times` must be strictly increasing; got -1.0 at", 1.0, [0.0, 2.0, 1.0]),
        (ValueError, "`times` must be strictly increasing; got 0.0 at", 1.0, [0.0, 1.0, 1.0]),
        (ValueError, "`times` must hold at least two samples; got 1", 1.0, [0.0]),
        (ValueError, r"`times` must have shape \(time,\)", 1.0, [[0.0, 1.0]]),
        (TypeError, "`times` is float64 but `y0` is float32", np.float32(1), [0.0, 1.0]),
        (TypeError, "`y0` must hold real floating-point numbers", 1, [0.0, 1.0]),
    ],
)
def test_errors(user_errors, error, match, y0, times):
    with pytest.raises(error, match=match):
        adaptive_rollout(
            DECAY, None, jnp.asarray(y0)[None], jnp.asarray(times), rtol=1e-6, atol=1e-6
        )


def test_error_of_the_field(user_errors):
    with pytest.raises(ValueError, match="must return one array of the shape of `y`"):
        adaptive_rollout(
            lambda y, t, params: -y, None, jnp.ones(2), jnp.arange(2.0), rtol=1e-6, atol=1e-6
        )
