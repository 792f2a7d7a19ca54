from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.linalg
from jax.flatten_util import ravel_pytree

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import rk4, rollout, suzuki
from oscillib.parameters import all_finite


# The unit of the check values: growth, saturation, shear, angular frequency, start, time.
A, B, C, W = 0.4, 1.5, 0.9, 3.0
Z0, T7 = 0.2 + 0.1j, 7.0
DIFFUSIVE, ADDITIVE = HopfNetwork(), HopfNetwork(kind="additive")
FLOWS = ("unit_flow", "saturation_flow", "linear_flow", "coupling_flow")
RNG = np.random.default_rng(0)
UNKNOWN: Any = "signed"


def pair(z):
    z = np.atleast_1d(z)
    return jnp.asarray(np.stack([np.real(z), np.imag(z)]))


def complex_(y):
    return np.asarray(y[0]) + 1j * np.asarray(y[1])


def unit(a=A, b=B, c=C, w=W):
    return HopfParams([a], [w], shear=[c], saturation=[b])


def closed_form(t, a, b, c, w, z0):
    """Solution of the Bernoulli equation for |z|^2, in complex arithmetic; common practice."""
    grown = np.expm1(2 * a * t) / a if a else 2 * t
    big = 1 + b * abs(z0) ** 2 * grown
    return z0 * np.exp((a + 1j * w) * t) * big ** (-0.5 - 1j * c / (2 * b))


@pytest.fixture(scope="module")
def network():
    return HopfParams(
        RNG.normal(size=3),
        RNG.normal(3, 1, size=3),
        shear=RNG.normal(size=3),
        saturation=RNG.uniform(0.5, 2, size=3),
        coupling=RNG.normal(size=(3, 3)),
        gain=0.7,
    )


@pytest.fixture(scope="module")
def state():
    return jnp.asarray(RNG.normal(size=(2, 3)))


@pytest.fixture(scope="module")
def unit_at():
    return jax.jit(lambda p, h, y: DIFFUSIVE.unit_flow(p, h)(y))


# Closed form evaluated to 40 digits; common practice.
@pytest.mark.parametrize(
    "growth, x, y",
    [
        (A, 0.071124401454523437271, 0.50734829416618121031),
        (0.0, -0.11502851578068026332, 0.10563467451425604701),
    ],
)
def test_unit_flow_of_published_trajectory(unit_at, growth, x, y):
    out = unit_at(unit(growth), jnp.asarray(T7), pair(Z0))
    np.testing.assert_allclose(out.ravel(), [x, y], rtol=0, atol=1e-12)


def test_unit_flow_near_zero_growth_and_saturation(unit_at):
    # The series near 0 and the formula away from it must both hold, and meet.
    for a in (-0.5, -2.2e-3, -2.1e-3, -1e-5, 1e-12, 1e-4, 2.1e-3, 2.2e-3, 0.3):
        for b in (1e-9, 1e-3, 0.042, 0.043, 0.044, 2.0):
            out = unit_at(unit(a, b), jnp.asarray(T7), pair(Z0))
            # The complex power of the closed form loses digits as c / 2b grows.
            tolerance = 1e-13 * max(1, C / b)
            assert abs(complex_(out)[0] - closed_form(T7, a, b, C, W, Z0)) < tolerance


def test_limit_cycle_radius_and_frequency(unit_at):
    # Radius sqrt(a / b), angular frequency w - c a / b; closed form, common practice.
    late = unit_at(unit(), jnp.asarray(60.0), pair(Z0))
    later = unit_at(unit(), jnp.asarray(0.5), late)
    assert abs(np.abs(complex_(late)[0]) - 0.51639777949432225) < 1e-10
    turned = np.angle(complex_(later)[0] / complex_(late)[0]) / 0.5
    assert abs(turned - 2.76) < 1e-10


@pytest.mark.parametrize("kind, steps, tolerance", [("exact", 8, 1e-10), ("suzuki", 200, 1e-6)])
def test_floquet_multipliers_of_a_whole_turn(kind, steps, tolerance):
    # {1, exp(-2 a T)}, T = 2 pi / (w - c a / b); closed form, common practice.
    period = 2 * np.pi / 2.76
    assert abs(np.exp(-2 * A * period) - 0.1618293114047040) < 1e-15
    step = {
        "exact": lambda p, h: lambda t, y: DIFFUSIVE.unit_flow(p, h)(y),
        "suzuki": suzuki(DIFFUSIVE.saturation_flow, DIFFUSIVE.linear_flow),
    }[kind]
    whole = lambda y: rollout(step, unit(), y, period / steps, steps)[-1]
    matrix = jax.jit(jax.jacobian(whole))(pair(np.sqrt(A / B) * np.exp(0.3j)))
    multipliers = np.sort(np.abs(np.linalg.eigvals(matrix.reshape(2, 2))))
    np.testing.assert_allclose(multipliers, [0.1618293114047040, 1.0], rtol=0, atol=tolerance)


def test_floquet_multipliers_of_one_unit_flow():
    period = jnp.asarray(2 * np.pi / 2.76)
    start = pair(np.sqrt(A / B) * np.exp(0.3j))
    matrix = jax.jit(jax.jacobian(DIFFUSIVE.unit_flow(unit(), period)))(start)
    multipliers = np.sort(np.abs(np.linalg.eigvals(matrix.reshape(2, 2))))
    np.testing.assert_allclose(multipliers, [0.1618293114047040, 1.0], rtol=0, atol=1e-12)


def test_asymptotic_phase(unit_at):
    # arg z - (c / b) log(|z| / r*); Kuramoto 1984, Winfree 2001 (isochrons; from memory).
    late = complex_(unit_at(unit(), jnp.asarray(60.0), pair(0.9 * np.exp(0.7j))))[0]
    assert abs(np.angle(late * np.exp(-1j * 2.76 * 60)) - 0.36668955739999995) < 1e-10


def test_first_and_second_derivatives_of_final_radius():
    # Derivatives of the closed form of |z(7)|^2 in growth and saturation, to 40 digits.
    def radius2(ab):
        p = HopfParams(ab[:1], [W], shear=[C], saturation=ab[1:])
        return jnp.sum(DIFFUSIVE.unit_flow(p, jnp.asarray(T7))(pair(Z0)) ** 2)

    at = jnp.array([A, B])
    expected = [0.70136703347805486, -0.17157757925873233]
    slope, curvature = jax.jit(lambda x: (jax.grad(radius2)(x), jax.hessian(radius2)(x)))(at)
    np.testing.assert_allclose(slope, expected, rtol=0, atol=1e-13)
    second = [
        [-0.213041923015819252, -0.496975433366838998],
        [-0.496975433366838998, 0.224329472465773909],
    ]
    np.testing.assert_allclose(curvature, second, rtol=0, atol=1e-12)


def test_saturation_flow():
    # Closed form to 40 digits; common practice.
    flow = DIFFUSIVE.saturation_flow(unit(), jnp.asarray(0.25))
    out = flow(pair(0.8 - 0.3j)).ravel()
    expected = [0.60608490103486578, -0.32309392944595345]
    np.testing.assert_allclose(out, expected, rtol=0, atol=1e-14)


def test_saturation_flow_backwards_until_it_ends():
    start = pair(0.8 - 0.3j)
    ends = 1 / (2 * B * 0.73)  # where 1 - 2 b h |z|^2 = 0
    back = DIFFUSIVE.saturation_flow(unit(), jnp.asarray(-0.9 * ends))(start)
    again = DIFFUSIVE.saturation_flow(unit(), jnp.asarray(0.9 * ends))(back)
    np.testing.assert_allclose(again, start, rtol=0, atol=1e-14)
    beyond = DIFFUSIVE.saturation_flow(unit(), jnp.asarray(-1.1 * ends))(start)
    assert not all_finite(beyond)


@pytest.mark.parametrize("flow", FLOWS)
def test_every_derivative_exists_where_formulas_divide_by_zero(flow):
    """Derivatives in state and parameters at zero equal the mean of those around it.

    Second derivatives along one direction that has a part in every entry.
    """

    def total(flat):
        params, y = unravel(flat)
        return jnp.sum(getattr(DIFFUSIVE, flow)(params, jnp.asarray(0.3))(y) * weights)

    weights = jnp.array([[1.0, -0.4], [0.7, 0.2]])
    base = HopfParams([0.2, -0.3], [3.0, 2.0], shear=[0.9, 0.4], coupling=[[0.0, 0.5], [0.2, 0.0]])
    place = (base, jnp.array([[0.2, 0.4], [-0.3, 0.1]]))
    _, unravel = ravel_pytree(place)
    along = jnp.asarray(np.random.default_rng(1).normal(size=ravel_pytree(place)[0].shape))
    derivatives = jax.jit(lambda flat: jax.jvp(jax.grad(total), (flat,), (along,)))
    zero = {
        "growth": lambda s: (s[0].growth,),
        "saturation": lambda s: (s[0].saturation,),
        "state": lambda s: (s[1],),
        "shear and coupling": lambda s: (s[0].shear, s[0].coupling),
        "all": lambda s: (s[0].growth, s[0].saturation, s[0].coupling, s[1]),
    }
    for where in zero.values():
        at = eqx.tree_at(where, place, replace_fn=lambda x: 0 * x)
        around = [eqx.tree_at(where, at, replace_fn=lambda x, e=e: x + e) for e in (-1e-4, 1e-4)]
        exact = derivatives(ravel_pytree(at)[0])
        below, above = (derivatives(ravel_pytree(s)[0]) for s in around)
        for got, lower, upper in zip(exact, below, above, strict=True):
            assert all_finite(got)
            # The mean over +-1e-4 differs by its square times fourth derivatives of order ten.
            np.testing.assert_allclose(got, (lower + upper) / 2, rtol=0, atol=1e-6)


def test_field_has_every_derivative_at_the_origin(network):
    y = jnp.zeros((2, 3))
    first, second = jax.jacfwd, lambda f: jax.jacfwd(jax.jacrev(f))
    field = lambda y: DIFFUSIVE(0.0, y, network)
    matrix, curvature = jax.jit(lambda y: (first(field)(y), second(field)(y)))(y)
    assert all_finite([matrix, curvature])
    expected = DIFFUSIVE.linear_matrix(network)
    np.testing.assert_allclose(matrix.reshape(6, 6), expected, rtol=0, atol=1e-15)


def test_second_derivatives_in_float32_near_zero_growth():
    def second(dtype):
        def f(ab):
            p = HopfParams(ab[:1], jnp.ones(1, dtype), saturation=ab[1:])
            flow = DIFFUSIVE.unit_flow(p, jnp.asarray(0.5, dtype))
            return jnp.sum(flow(jnp.full((2, 1), 0.1, dtype)))

        at, growth = jnp.array([3e-4, 1.5], dtype), jnp.array([1.0, 0.0], dtype)
        return jax.jit(lambda x: jax.jvp(jax.grad(f), (x,), (growth,))[1])(at)

    # Float32 itself is good to 1e-7; the quotient (e^u - 1) / u was off by 6 percent here.
    np.testing.assert_allclose(second(jnp.float32), second(jnp.float64), rtol=1e-4)


@pytest.mark.parametrize("kind", ["diffusive", "additive"])
def test_field_is_the_written_equation(network, state, kind):
    z = complex_(state)
    p = jax.tree.map(np.asarray, network)
    expected = np.zeros(3, complex)
    for i in range(3):
        expected[i] = (p.growth[i] + 1j * p.frequency[i]) * z[i]
        expected[i] -= (p.saturation[i] + 1j * p.shear[i]) * abs(z[i]) ** 2 * z[i]
        for j in range(3):
            drive = z[j] - z[i] if kind == "diffusive" else z[j]
            expected[i] += p.gain * p.coupling[i, j] * drive
    out = HopfNetwork(kind=kind)(0.0, state, network)
    np.testing.assert_allclose(complex_(out), expected, rtol=0, atol=1e-14)


@pytest.fixture(scope="module")
def flows():
    """Every flow compiled once: `flows[name](params, h, y)`."""
    compiled = lambda name: jax.jit(lambda p, h, y: getattr(DIFFUSIVE, name)(p, h)(y))
    return {name: compiled(name) for name in FLOWS}


def test_field_is_the_sum_of_the_flows_derivatives(network, state, flows):
    # Differences over +-2e-4 and +-1e-4, extrapolated: off by 1e-16 times fifth derivatives (1e5)
    # and by rounding over 1e-4.
    def slope(name):
        wide, narrow = (
            (flows[name](network, jnp.asarray(h), state)
             - flows[name](network, jnp.asarray(-h), state)) / (2 * h)
            for h in (2e-4, 1e-4)
        )  # fmt: skip
        return (4 * narrow - wide) / 3

    expected = DIFFUSIVE(0.0, state, network)
    for parts in (("unit_flow", "coupling_flow"), ("saturation_flow", "linear_flow")):
        total = slope(parts[0]) + slope(parts[1])
        np.testing.assert_allclose(total, expected, rtol=0, atol=1e-10)


@pytest.mark.parametrize("flow", FLOWS)
def test_flows_compose_commute_with_relabelling_and_with_turning(network, state, flows, flow):
    apply = lambda h, y, p=network: flows[flow](p, jnp.asarray(h), y)
    close = lambda a, b: np.testing.assert_allclose(a, b, rtol=0, atol=1e-13)
    close(apply(0.0, state), state)
    close(apply(0.2, apply(0.1, state)), apply(0.3, state))

    order = np.array([2, 0, 1])
    shuffled = jax.tree.map(lambda x: x[order] if x.ndim == 1 else x, network)
    shuffled = eqx.tree_at(lambda p: p.coupling, shuffled, network.coupling[order][:, order])
    close(apply(0.3, state[:, order], shuffled), apply(0.3, state)[:, order])

    turn = lambda y: pair(complex_(y) * np.exp(1.1j))
    close(apply(0.3, turn(state)), turn(apply(0.3, state)))


def test_flows_of_additive_coupling_are_exact_exponentials(network, state):
    # scipy's matrix exponential of the written equation's matrix, in complex arithmetic.
    drive = np.asarray(network.gain * network.coupling)
    own = np.diag(np.asarray(network.growth) + 1j * np.asarray(network.frequency))
    h = jnp.asarray(0.3)
    for flow, matrix in ((ADDITIVE.coupling_flow, drive), (ADDITIVE.linear_flow, own + drive)):
        expected = scipy.linalg.expm(0.3 * matrix) @ complex_(state)
        out = jax.jit(lambda p, flow=flow: flow(p, h)(state))(network)
        np.testing.assert_allclose(complex_(out), expected, rtol=0, atol=1e-13)


def two(strength, difference):
    """Two units with a = b = 1, in the frame that turns with their mean frequency."""
    return HopfParams(
        jnp.ones(2),
        jnp.array([0.5, -0.5]) * difference,
        coupling=jnp.array([[0.0, 1.0], [1.0, 0.0]]),
        gain=jnp.asarray(strength),
    )


def test_amplitude_death_between_two_strengths():
    # Origin stable for 1 < K < (1 + D^2 / 4) / 2, here 1.625: Aronson, Ermentrout & Kopell 1990,
    # Physica D 41 (from memory); recomputed.
    def growth(strength):
        matrix = DIFFUSIVE.linear_matrix(two(strength, 3.0))
        return np.max(np.linalg.eigvals(matrix).real)

    assert abs(growth(1.0)) < 1e-10
    assert abs(growth(1.625)) < 1e-10
    assert growth(0.9) > 0.05
    assert growth(1.3) < -0.05
    assert growth(1.8) > 0.05


def test_two_coupled_units_die_drift_or_lock():
    # Source as above: (K, D) = (1.3, 3) death, (0.8, 3) drift, (2, 3) and (0.9, 1.2) locked, with
    # R^2 = 1 - K + sqrt(K^2 - D^2 / 4) and phase difference asin(D / 2K).
    strengths, differences = jnp.array([1.3, 0.8, 2.0, 0.9]), jnp.array([3.0, 3.0, 3.0, 1.2])
    start = jnp.array([[0.3, 0.1], [0.0, 0.2]])

    @jax.jit
    @jax.vmap
    def final(k, d):
        return rollout(rk4(DIFFUSIVE), two(k, d), start, 0.05, 4000)[jnp.array([-60, -1])]

    states = np.moveaxis(np.asarray(final(strengths, differences)), 2, 0)
    z = states[0] + 1j * states[1]
    radius = np.abs(z)
    assert np.all(radius[0] < 1e-10)
    assert np.all(radius[1:] > 0.05)
    difference = np.angle(z[..., 0] / z[..., 1])
    moved = np.abs(difference[:, 1] - difference[:, 0])
    assert moved[1] > 0.1
    assert np.all(moved[2:] < 1e-8)
    np.testing.assert_allclose(radius[3, 1] ** 2, 0.770820393249936909, rtol=0, atol=1e-8)
    np.testing.assert_allclose(difference[3, 1], 0.729727656226966363, rtol=0, atol=1e-8)


def test_additive_is_diffusive_with_growth_lowered_by_the_row_sums(network, state):
    row_sums = network.gain * jnp.sum(network.coupling, axis=1)
    lowered = eqx.tree_at(lambda p: p.growth, network, network.growth - row_sums)
    np.testing.assert_allclose(
        ADDITIVE(0.0, state, lowered), DIFFUSIVE(0.0, state, network), rtol=0, atol=1e-14
    )


def test_diagonal_of_diffusive_coupling_has_no_effect(network, state):
    changed = eqx.tree_at(lambda p: p.coupling, network, network.coupling + 5 * jnp.eye(3))
    np.testing.assert_allclose(
        DIFFUSIVE(0.0, state, changed), DIFFUSIVE(0.0, state, network), rtol=0, atol=1e-13
    )


def test_params_may_be_built_from_traced_numbers():
    slope = jax.grad(lambda a: jnp.sum(HopfParams([a, 2 * a], [1.0, 1.0]).growth))(1.0)
    assert slope == 3


@pytest.mark.parametrize(
    "error, match, build",
    [
        (ValueError, r"`growth` must have shape \(node,\)", lambda: HopfParams(0.1, [1.0])),
        (ValueError, r"`frequency` .*\(2\); got shape \(3,\)", lambda: HopfParams([0, 0], [1] * 3)),
        (
            ValueError,
            r"`shear` .* got shape \(\)",
            lambda: HopfParams([0.0], [1.0], shear=1.0),
        ),
        (
            ValueError,
            r"`coupling` must have shape \(node, node\) = \(2, 2\); got shape \(2, 3\)",
            lambda: HopfParams([0, 0], [1, 1], coupling=np.ones((2, 3))),
        ),
        (ValueError, "`gain` must have shape", lambda: HopfParams([0.0], [1.0], gain=[1.0])),
        (
            TypeError,
            "`frequency` is float32 but `growth` is float64.*Fix",
            lambda: HopfParams([0.0], np.ones(1, np.float32)),
        ),
        (ValueError, "`kind` must be .* got 'signed'", lambda: HopfNetwork(kind=UNKNOWN)),
    ],
)
def test_errors_of_construction(user_errors, error, match, build):
    with pytest.raises(error, match=match):
        build()


@pytest.mark.parametrize("flow", [None, *FLOWS])
def test_errors_of_the_state(user_errors, network, flow):
    def apply(y):
        if flow is None:
            return DIFFUSIVE(0.0, y, network)
        return getattr(DIFFUSIVE, flow)(network, jnp.asarray(0.1))(y)

    # One node would broadcast over three, and float32 would be promoted, without a word.
    with pytest.raises(ValueError, match=r"`y` must have shape \(component, node\) = \(2, 3\)"):
        apply(jnp.ones((2, 1)))
    with pytest.raises(TypeError, match=r"`y` is float32 but `params.growth` is float64"):
        apply(jnp.ones((2, 3), jnp.float32))
