import jax
import jax.numpy as jnp
import pytest

from oscillib.checks import check_agreement, check_order
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, heun, noisy_strang, rk4, strang, suzuki, without_noise


# Two coupled units: neither cut of the network is exact.
FIELD = HopfNetwork()
PARAMS = HopfParams([0.4, -0.3], [3.0, 4.0], shear=[0.5, 0.2], coupling=[[0.0, 0.8], [0.4, 0.0]])
START = jnp.array([[0.8, -0.3], [0.2, 0.5]])


def pushed(t, y, params):
    """A unit that turns, pushed in time: a step must take its stages at the right times."""
    return jnp.stack([-y[1] + jnp.cos(2 * t), params * y[0]]) - 0.1 * y**3


PUSH = jnp.asarray(1.5)
PUSHED_START = jnp.array([0.7, 0.0])
RK4_PUSHED = rk4(pushed)

# Orders: Hairer, Norsett & Wanner, Solving ODEs I; Strang 1968; Suzuki 1990 (from memory).
STEPS = {
    "heun": (heun(FIELD), 2),
    "rk4": (rk4(FIELD), 4),
    "strang": (strang(FIELD.saturation_flow, FIELD.linear_flow), 2),
    "suzuki": (suzuki(FIELD.saturation_flow, FIELD.linear_flow), 4),
}


@pytest.mark.parametrize("name", STEPS)
def test_shipped_steps_have_the_order_that_they_claim(name):
    step, order = STEPS[name]
    check_order(step, FIELD, PARAMS, START, order=order, h=0.2)


@pytest.mark.parametrize("name", STEPS)
def test_shipped_steps_agree_with_error_control(name):
    step, order = STEPS[name]
    check_agreement(step, FIELD, PARAMS, START, 0.05, 16, rtol=0.01 if order == 2 else 1e-5)


def test_noisy_step_without_noise_has_order_2():
    step = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)
    quiet = lambda params, h: without_noise(step)(NoisyParams(params, jnp.ones(2)), h)
    check_order(quiet, FIELD, PARAMS, START, order=2, h=0.2)


def test_field_that_depends_on_time():
    check_order(RK4_PUSHED, pushed, PUSH, PUSHED_START, order=4, h=0.3, t0=0.7)
    check_agreement(RK4_PUSHED, pushed, PUSH, PUSHED_START, 0.1, 16, rtol=1e-5, t0=0.7)


def test_exact_solution_stands_in_for_the_reference():
    decay = lambda t, y, params: -params * y
    rate, start = jnp.asarray(2.0), jnp.array([1.0, -3.0])
    exact = lambda t: start * jnp.exp(-rate * (t - 1.0))
    check_order(heun(decay), decay, rate, start, order=2, h=0.1, t0=1.0, exact=exact)


def test_higher_order_passes_only_on_demand():
    check_order(RK4_PUSHED, pushed, PUSH, PUSHED_START, order=2, h=0.3, at_least=True)
    with pytest.raises(AssertionError, match="claimed order 2"):
        check_order(RK4_PUSHED, pushed, PUSH, PUSHED_START, order=2, h=0.3)


def test_an_exact_step_shows_no_order():
    units = HopfParams([0.4, -0.2], [3.0, 4.0])
    exact = lambda params, h: lambda t, y: FIELD.unit_flow(params, h)(y)
    with pytest.raises(AssertionError, match="at rounding level, so that no order can be seen"):
        check_order(exact, FIELD, units, START, order=2, h=0.2)
    check_agreement(exact, FIELD, units, START, 0.2, 8, rtol=1e-9)


def test_blow_up_is_named():
    explode = lambda t, y, params: params * y**3
    options = {"order": 2, "h": 1.0, "exact": lambda t: jnp.full(2, jnp.exp(-t))}
    with pytest.raises(AssertionError, match="not finite at step size 1"):
        check_order(heun(explode), explode, jnp.asarray(9.0), jnp.full(2, 9.0), **options)


def test_reference_that_fails_is_named():
    with pytest.raises(AssertionError, match=r"states\[1\]: .* no success before time 0.1"):
        check_agreement(RK4_PUSHED, pushed, PUSH * jnp.nan, PUSHED_START, 0.1, 4, rtol=0.1)


def test_single_precision():
    single = lambda tree: jax.tree.map(lambda x: x.astype(jnp.float32), tree)
    params, start, step = single(PUSH), single(PUSHED_START), heun(pushed)
    check_order(step, pushed, params, start, order=2, h=0.4, halvings=3)
    check_agreement(step, pushed, params, start, 0.05, 8, rtol=1e-2)


def test_misuse(user_errors):
    del user_errors
    with pytest.raises(ValueError, match="`halvings` must be at least 2"):
        check_order(heun(pushed), pushed, PUSH, PUSHED_START, order=2, h=0.1, halvings=1)
    with pytest.raises(TypeError, match="`h` is float32 but `y0` is float64"):
        check_order(heun(pushed), pushed, PUSH, PUSHED_START, order=2, h=jnp.float32(0.1))
    with pytest.raises(TypeError, match="`y0` must hold real floating-point numbers"):
        check_agreement(heun(pushed), pushed, PUSH, jnp.ones(2, int), 0.1, 4, rtol=0.1)
