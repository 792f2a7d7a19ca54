"""Planted faults in steps, flows, noise, losses, readouts and models; each must be named.

`pytest -s tests/checks/test_mutants_step.py` prints the kill table: mutant, check, message.
"""

import re

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.checks import (
    check_agreement,
    check_calibration,
    check_flow,
    check_mask,
    check_minimum,
    check_noise,
    check_order,
    check_readout,
    check_recovery,
    check_stability,
    check_step_bias,
)
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, euler_maruyama, heun, planar_rate, rk4, split_noise


KEY = jax.random.key(0)
MUTANTS = {}


def mutant(check, says):
    """Register a planted fault: the check that must catch it, and what its message must say."""

    def register(run):
        name = run.__name__.replace("_", " ").strip()
        assert name not in MUTANTS
        MUTANTS[name] = (check, says, run)
        return run

    return register


# --- steps ---------------------------------------------------------------------------------------


def pushed(t, y, params):
    return jnp.stack([-y[1] + jnp.cos(2 * t), params * y[0]]) - 0.1 * y**3


PUSH = jnp.asarray(1.5)
PUSHED_START = jnp.array([0.7, 0.0])


def runge_kutta(weights=(1, 2, 2, 1), times=(0.0, 0.5, 0.5, 1.0), scale=1.0):
    """The classical step, to be spoilt."""

    def step(params, h):
        def advance(t, y):
            k, slopes = 0 * y, []
            for part, c in zip((0.0, 0.5, 0.5, 1.0), times, strict=True):
                k = pushed(t + c * h, y + part * h * k, params)
                slopes.append(k)
            total = sum(w * k for w, k in zip(weights, slopes, strict=True))
            return y + scale * h * total / 6

        return advance

    return step


def order(step, claimed):
    return check_order(step, pushed, PUSH, PUSHED_START, order=claimed, h=0.2, t0=0.4)


def agreement(step):
    return check_agreement(step, pushed, PUSH, PUSHED_START, 0.05, 16, rtol=1e-5, t0=0.4)


def test_the_step_to_be_spoilt_is_right():
    step = runge_kutta()
    assert order(step, 4) is None  # a check raises, or returns nothing
    assert agreement(step) is None


@mutant("check_order", r"claimed order 4.*observed order 2")
def weights_of_rk4_in_the_wrong_order():
    order(runge_kutta(weights=(2, 1, 1, 2)), 4)


@mutant("check_order", r"claimed order 4.*observed order [012]\.")
def rk4_stage_at_the_wrong_time():
    order(runge_kutta(times=(0.0, 0.5, 0.5, 0.5)), 4)


@mutant("check_order", "claimed order 2.*observed order (1|0.9)")
def heun_as_euler():
    order(lambda params, h: lambda t, y: y + h * pushed(t, y, params), 2)


@mutant("check_order", "claimed order 2.*observed order (1|0.9)")
def lie_splitting_claimed_as_order_2():
    field, params = HopfNetwork(), HopfParams([0.4], [3.0], shear=[0.8])
    # The parts commute unless the rotation depends on the growing amplitude.
    flows = lambda h: (field.saturation_flow(params, h), field.linear_flow(params, h))

    def step(params, h):
        first, second = flows(h)
        return lambda t, y: second(first(y))

    start = jnp.array([[0.8], [0.2]])
    exact = lambda t: field.unit_flow(params, t)(start)
    check_order(step, field, params, start, order=2, h=0.2, exact=exact)


@mutant("check_order", "the error does not fall with the step")
def step_that_solves_another_field():
    order(runge_kutta(scale=1.01), 4)


@mutant("check_agreement", "ignores `h`")
def step_that_ignores_h():
    agreement(lambda params, h: runge_kutta()(params, 0.04 + 0 * h))


@mutant("check_agreement", "ignores `t`")
def step_that_ignores_t():
    agreement(lambda params, h: lambda t, y: runge_kutta()(params, h)(0 * t, y))


@mutant("check_agreement", "check the times of the stages")
def step_that_takes_stages_too_late():
    agreement(runge_kutta(times=(0.5, 1.0, 1.0, 1.5)))


@mutant("check_agreement", r"moves 2 times as far as `h field`")
def step_that_is_twice_too_long():
    agreement(lambda params, h: runge_kutta()(params, 2 * h))


@mutant("check_agreement", "does not move along the field")
def step_with_components_swapped():
    swapped = lambda params, h: lambda t, y: y + h * pushed(t, y, params)[::-1]
    agreement(swapped)


@mutant("check_agreement", r"shape and dtype of the step.*float32")
def step_that_rounds_to_single_precision():
    agreement(lambda params, h: lambda t, y: heun(pushed)(params, h)(t, y).astype(jnp.float32))


# --- flows ---------------------------------------------------------------------------------------


def decay(t, y, params):
    return -params * y


def flow(f):
    check_flow(f, jnp.asarray(2.0), jnp.array([1.0, -0.5]), 0.4, decay)


@mutant("check_flow", "derivative of the flow at h = 0.*wrong sign")
def flow_with_the_wrong_sign():
    flow(lambda params, h: lambda y: jnp.exp(params * h) * y)


@mutant("check_flow", r"flow\(h/2\) twice is flow\(h\)")
def flow_that_does_not_compose():
    flow(lambda params, h: lambda y: (1 - params * h) * y)


@mutant("check_flow", r"flow\(0\) is the identity")
def flow_that_moves_in_no_time():
    flow(lambda params, h: lambda y: jnp.exp(-params * (h + 0.01)) * y)


@mutant("check_flow", "derivative of the flow at h = 0.*all of what the flow solves")
def flow_of_half_the_time():
    flow(lambda params, h: lambda y: jnp.exp(-params * h / 2) * y)


@mutant("check_flow", r"flow\(-h\) undoes flow\(h\)")
def flow_that_takes_the_size_of_h():
    flow(lambda params, h: lambda y: jnp.exp(-params * jnp.where(h < 0, -h, h)) * y)


@mutant("check_flow", r"shape and dtype of the flow.*\(2, 2\)")
def flow_that_broadcasts():
    flow(lambda params, h: lambda y: jnp.exp(-params * h) * y[None] * jnp.ones((2, 1)))


# --- linear problems -----------------------------------------------------------------------------

FIELD = HopfNetwork()
UNIT = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.2])
RIGHT = split_noise(heun(FIELD))
AT = jnp.array([[0.4], [-0.3]])


@mutant("check_step_bias", r"growth of the step.*explicit Euler step adds w\^2 h / 2 = 0\.9")
def euler_maruyama_makes_a_damped_unit_grow():
    check_step_bias(euler_maruyama(FIELD), FIELD, UNIT, 0.05, limit=0.01)


@mutant("check_step_bias", "frequency of the step")
def half_implicit_step_turns_too_slowly():
    def step(params, h):
        matrix = FIELD.linear_matrix(params)
        eye = jnp.eye(2)
        propagator = jnp.linalg.solve(eye - h / 2 * matrix, eye + h / 2 * matrix)
        return lambda t, y: (propagator @ y.reshape(-1)).reshape(y.shape)

    check_step_bias(step, FIELD, UNIT.field, 0.1, limit=0.05)


@mutant("check_step_bias", "stationary variance of the step")
def variance_of_all_the_noise_at_rest():
    doubled = split_noise(rk4(FIELD), rate=lambda s: 2 * planar_rate(s))
    check_step_bias(doubled, FIELD, UNIT, 0.05, limit=0.01, variance_limit=0.1)


@mutant("check_stability", r"stability of the step.*growth by 1 \+ 2")
def heun_claimed_stable_on_a_neutral_unit():
    neutral = HopfParams([0.0], [6.0])
    check_stability(heun(FIELD), neutral, 0 * AT, 0.05)


@mutant("check_stability", r"stability of the step.*at step size 0\.5")
def rk4_claimed_stable_beyond_its_limit():
    check_stability(rk4(FIELD), HopfParams([0.0], [6.0]), 0 * AT, 0.5, count=2)


# --- noise ---------------------------------------------------------------------------------------


def spoilt(covariance=lambda c, params, h: c, **maps):
    """A right step, with another covariance or other maps around it."""

    def step(params, h):
        good = RIGHT(params, h)
        changed = {name: f(good, h) for name, f in maps.items()}
        return good._replace(covariance=covariance(good.covariance, params, h), **changed)

    return step


def noise(step, start=AT, **options):
    check_noise(step, FIELD, UNIT, start, 0.1, rtol=0.05, key=KEY, **options)


@mutant("check_noise", "covariance of one step.*2 times what it should be")
def noise_doubled():
    noise(spoilt(lambda c, params, h: 2 * c))


@mutant("check_noise", r"covariance grows like h.*h\^2")
def noise_times_h_instead_of_its_root():
    noise(spoilt(lambda c, params, h: c * h))


@mutant("check_noise", r"covariance grows like h.*h\^0\.")
def noise_not_scaled_by_the_step():
    noise(spoilt(lambda c, params, h: c / h))


def mixed(level):
    root = jnp.array([[1.0, 0.0], [0.6, 0.5]])
    return level[0] ** 2 * root @ root.T


@mutant("check_noise", "the covariances between entries are not")
def missing_cross_covariance():
    independent = split_noise(heun(FIELD), rate=lambda s: jnp.diag(jnp.diag(mixed(s))))
    noise(independent, rate=mixed)


@mutant("check_noise", "symmetry of the covariance")
def covariance_not_symmetric():
    noise(spoilt(lambda c, params, h: c.at[0, 1].add(0.5 * c[0, 0])))


@mutant("check_noise", "no negative eigenvalue")
def covariance_indefinite():
    noise(spoilt(lambda c, params, h: c * jnp.array([[1.0, 0.0], [0.0, -1.0]])))


@mutant("check_noise", "covariance of one step")
def noise_on_one_component_only():
    noise(spoilt(lambda c, params, h: c * jnp.array([[1.0, 0.0], [0.0, 0.0]])))


@mutant("check_noise", "mean of simulated paths")
def noisy_step_with_its_drift_doubled():
    noise(spoilt(before=lambda good, h: lambda t, y: good.after(t, good.before(t, y))))


@mutant("check_noise", "covariance of simulated paths.*1.8")
def noisy_step_that_grows_at_rest():
    noise(spoilt(matrix=lambda good, h: 1.2 * jnp.eye(2)), start=0 * AT)


@mutant("check_noise", "finite covariance")
def covariance_from_the_root_of_a_negative_number():
    noise(spoilt(lambda c, params, h: jnp.sqrt(-c)))


# --- losses --------------------------------------------------------------------------------------

MASK = np.array([True, False, True, True])
VALUES = jnp.array([1.0, 9.0, 2.0, 4.0])
SLOPE = {"slope": jnp.asarray(1.3)}


def residual(params, values):
    return params["slope"] * jnp.arange(4.0) - values


def masked(loss):
    check_mask(loss, SLOPE, VALUES, MASK, key=KEY)


@mutant("check_mask", "masked entries do not change the gradient.*NaN")
def nan_leaks_through_the_gradient():
    masked(lambda p, v, m: jnp.sum(jnp.where(m, residual(p, v) ** 2, 0)))


@mutant("check_mask", "masked entries do not change the value.*NaN")
def loss_weighted_by_the_mask():
    masked(lambda p, v, m: jnp.sum(m.astype(v.dtype) * residual(p, v) ** 2))


@mutant("check_mask", "masked entries do not change the value.*NaN")
def loss_normalised_by_all_that_is_finite():
    def loss(p, v, m):
        total = jnp.sum(jnp.where(m, residual(p, jnp.where(m, v, 0)), 0) ** 2)
        return total / jnp.sum(jnp.isfinite(v)).astype(v.dtype)

    masked(loss)


@mutant("check_mask", "masked entries do not change the value")
def loss_centred_by_the_mean_of_everything():
    def loss(p, v, m):
        known = jnp.where(jnp.isfinite(v), v, 0)
        return jnp.sum(jnp.where(m, residual(p, known - jnp.mean(known)), 0) ** 2)

    masked(loss)


@mutant("check_mask", "observed entries count")
def loss_that_ignores_its_values():
    masked(lambda p, v, m: p["slope"] ** 2 * jnp.sum(m).astype(v.dtype))


@mutant("check_mask", "finite gradient.*root of zero")
def gradient_of_a_distance_at_no_distance():
    masked(lambda p, v, m: jnp.sqrt(jnp.sum(jnp.where(m, 0 * p["slope"] * v, 0) ** 2)))


DATA = 1.3 * jnp.arange(4.0)


def minimum(loss):
    check_minimum(loss, SLOPE, key=KEY)


@mutant("check_minimum", r"gradient at the truth.*slope")
def loss_with_an_offset():
    minimum(lambda p: jnp.sum((residual(p, DATA) + 0.1) ** 2))


@mutant("check_minimum", "curvature at the truth.*maximum or a saddle")
def loss_with_the_wrong_sign():
    minimum(lambda p: -jnp.sum(residual(p, DATA) ** 2))


@mutant("check_minimum", "the loss depends on the parameters")
def loss_that_ignores_its_parameters():
    minimum(lambda p: jnp.sum(DATA) + 0 * p["slope"])


@jax.custom_jvp
def square(x):
    return x**2


@square.defjvp
def _(primals, tangents):
    (x,), (dx,) = primals, tangents
    return x**2, x * dx


@mutant("check_minimum", "derivative|difference")
def loss_with_half_of_its_gradient():
    minimum(lambda p: jnp.sum(square(residual(p, DATA))))


# --- readouts ------------------------------------------------------------------------------------

GAIN = {"gain": jnp.array([1.0, 2.0])}


ROW = jnp.array([[0.4, -0.3]])


def read(readout, y=ROW, channels=2):
    check_readout(readout, y, GAIN, channels, key=KEY)


@mutant("check_readout", r"shape of the readout.*\(1,\)")
def readout_that_drops_a_channel():
    read(lambda y, p: (p["gain"] * y[0])[:1])


@mutant("check_readout", r"shape of the readout.*\(2, 2\)")
def readout_that_broadcasts():
    read(lambda y, p: p["gain"][:, None] * y)


@mutant("check_readout", "dtype of the readout.*float32")
def readout_in_single_precision():
    read(lambda y, p: (p["gain"] * y[0]).astype(jnp.float32))


@mutant("check_readout", "readout in float32.*dtype promotion")
def readout_with_a_double_precision_constant():
    read(lambda y, p: p["gain"] * y[0] + jnp.asarray([1.0, 2.0], jnp.float64))


@mutant("check_readout", "finite readout")
def readout_of_a_logarithm_at_zero():
    read(lambda y, p: p["gain"] * jnp.log(y[0]), y=jnp.zeros((1, 2)))


@mutant("check_readout", "derivative|difference")
def readout_with_a_wrong_derivative():
    read(lambda y, p: p["gain"] * square(y[0]))


# --- models --------------------------------------------------------------------------------------


def recovery(fit):
    simulate = lambda mean, key: mean + jax.random.normal(key, (50,))
    check_recovery(simulate, fit, jnp.asarray(2.0), key=KEY, count=100)


@mutant("check_recovery", "estimates are not biased")
def biased_estimator():
    recovery(lambda data: (jnp.mean(data) + 0.1, jnp.asarray(50**-0.5)))


@mutant("check_recovery", "standard errors are large enough.*overconfident")
def standard_error_of_samples_counted_twice():
    recovery(lambda data: (jnp.mean(data), jnp.asarray(100**-0.5)))


@mutant("check_recovery", "every fit succeeds")
def fit_that_fails_now_and_then():
    recovery(lambda data: (jnp.where(data[0] > 3, jnp.nan, jnp.mean(data)), jnp.asarray(50**-0.5)))


NORMAL = np.random.default_rng(0).normal(size=(400, 2))


@mutant("check_calibration", "coverage of 90% intervals.*overconfident")
def overconfident_intervals():
    check_calibration(z=NORMAL * np.array([1.0, 1.4]))


@mutant("check_calibration", "coverage of 90% intervals.*too wide")
def intervals_that_are_too_wide():
    check_calibration(z=NORMAL * np.array([1.0, 0.6]))


@mutant("check_calibration", "coverage of 50% intervals")
def intervals_of_another_level():
    check_calibration(inside=np.abs(NORMAL) < 1, level=0.5)


def ranks_of(draws):
    """Ranks of the truth 0 among draws around a reading with unit error, prior wide."""
    return np.sum(draws < 0, axis=1)


RNG = np.random.default_rng(1)
READING = RNG.normal(size=400)
POSTERIOR = RNG.normal(size=(400, 19))


def test_the_ranks_to_be_spoilt_are_right():
    check_calibration(ranks=ranks_of(READING[:, None] + POSTERIOR), draws=19)


@mutant("check_calibration", "ranks are uniform.*overconfident")
def posterior_that_is_too_narrow():
    check_calibration(ranks=ranks_of(READING[:, None] + 0.5 * POSTERIOR), draws=19)


@mutant("check_calibration", "ranks are uniform.*too wide")
def posterior_that_is_too_wide():
    check_calibration(ranks=ranks_of(READING[:, None] + 2 * POSTERIOR), draws=19)


@mutant("check_calibration", "ranks are uniform.*biased")
def posterior_that_is_shifted():
    check_calibration(ranks=ranks_of(READING[:, None] + 0.5 + POSTERIOR), draws=19)


@pytest.mark.parametrize("name", MUTANTS)
def test_mutant_is_caught_and_named(name):
    check, says, run = MUTANTS[name]
    with pytest.raises(AssertionError) as caught:
        run()
    message = str(caught.value)
    print(f"{name} | {check} | {' '.join(message.split())}")
    assert re.search(says, message, re.DOTALL), message


def test_there_are_enough():
    assert len(MUTANTS) >= 20
