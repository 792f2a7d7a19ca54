import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from oscillib.fields import (
    CoupledParams,
    Edges,
    HopfNetwork,
    HopfParams,
    HopfUnitParams,
    VanDerPolParams,
    coupled,
    hopf_unit,
    van_der_pol,
)
from oscillib.parameters import Free


RNG = np.random.default_rng(0)
PAIR = jnp.array([[0.0, 1.0], [1.0, 0.0]])
HOPF = coupled(hopf_unit, component=(0, 1))


@pytest.mark.parametrize("kind", ["diffusive", "additive"])
def test_wrapped_units_are_the_hopf_network(kind):
    growth, frequency, shear, saturation = RNG.normal(size=(4, 5))
    k = RNG.normal(size=(5, 5))
    own = {"shear": shear, "saturation": saturation}
    y = jnp.asarray(RNG.normal(size=(2, 5)))
    network = HopfParams(growth, frequency, coupling=k, gain=0.7, **own)
    expected = HopfNetwork(kind=kind)(0.0, y, network)
    unit = HopfUnitParams(growth, frequency, **own)
    field = coupled(hopf_unit, component=(0, 1), kind=kind)
    for coupling in (k, Edges.from_matrix(jnp.asarray(k))):
        out = field(0.0, y, CoupledParams(unit, coupling, gain=0.7))
        np.testing.assert_allclose(out, expected, rtol=1e-13)


def test_a_field_of_ones_own_with_a_shared_parameter():
    # One component driven by its neighbour, the other left alone; by hand.
    unit = lambda t, y, p: jnp.stack([y[1], -p["stiffness"] * y[0] - p["friction"] * y[1]])
    params = CoupledParams(
        {"stiffness": jnp.array([1.0, 4.0]), "friction": 0.5}, coupling=[[0.0, 2.0], [0.0, 0.0]]
    )
    assert params.constraints().unit == {"stiffness": Free(), "friction": Free()}
    out = coupled(unit, component=1)(0.0, jnp.array([[1.0, 2.0], [3.0, 5.0]]), params)
    np.testing.assert_allclose(out, [[3, 5], [-1 - 1.5 + 2 * (5 - 3), -8 - 2.5]])


def death(growth, k, difference):
    """Largest real part of the eigenvalues at the origin of the coupled network."""
    frequency = jnp.asarray(difference)
    n = len(frequency)
    params = CoupledParams(HopfUnitParams(growth * np.ones(n), frequency), k)
    jacobian = JACOBIAN(params, jnp.zeros((2, n))).reshape(2 * n, 2 * n)
    return np.max(np.linalg.eigvals(np.asarray(jacobian)).real)


JACOBIAN = jax.jit(lambda p, y: jax.jacfwd(lambda y: HOPF(0.0, y, p))(y))


def crossing(f, low, high):
    sign = f(low) > 0
    for _ in range(45):
        middle = (low + high) / 2
        low, high = (middle, high) if (f(middle) > 0) == sign else (low, middle)
    return low


def test_amplitude_death_of_two_units():
    # Aronson, Ermentrout & Kopell 1990 (from memory): 1 < K < (1 + D^2 / 4) / 2, here D = 3.
    growth = lambda k: death(1.0, k * PAIR, [-1.5, 1.5])
    assert abs(crossing(growth, 0.5, 1.3) - 1) < 1e-10
    assert abs(crossing(growth, 1.3, 3.0) - 1.625) < 1e-10


def test_amplitude_death_of_a_population():
    # Mirollo & Strogatz 1990 (from memory): frequencies uniform on [-g, g], g = 2.5, mean-field
    # coupling: death ends at 1/K = atan(g / (K - 1)) / g. Equally spaced frequencies stand in.
    n = 40
    frequency = 2.5 * (2 * (np.arange(n) + 0.5) / n - 1)
    growth = lambda k: death(1.0, jnp.full((n, n), k / n), frequency)
    assert abs(crossing(growth, 1.5, 3.0) - 2.27331398) < 1e-3


def test_amplitude_death_of_a_population_without_end():
    # As above. Equally spaced frequencies are off by a multiple of 1/n^2, then of 1/n^4: two
    # populations give what infinitely many would.
    def end(n):
        frequency = 2.5 * (2 * (np.arange(n) + 0.5) / n - 1)
        return crossing(lambda k: death(1.0, jnp.full((n, n), k / n), frequency), 2.2, 2.4)

    assert abs((4 * end(40) - end(20)) / 3 - 2.27331398) < 1e-5


# Aronson, Ermentrout & Kopell 1990 (from memory): radius^2 1 - K + sqrt(K^2 - D^2/4) and phase
# difference asin(D / 2K) where locked; zero radius in death.
@pytest.mark.parametrize("k, d, square, phase", [(0.9, 1.2, 0.77082039325, 0.729727656227)])
def test_locked_pair(k, d, square, phase):
    params = CoupledParams(HopfUnitParams([1.0, 1.0], [-d / 2, d / 2]), k * PAIR)
    field = jax.jit(lambda y: HOPF(0.0, y.reshape(2, 2), params).reshape(-1))
    out = solve_ivp(
        lambda t, y: np.asarray(field(y)), (0, 100), [1.0, 0.5, 0.0, 0.3], method="DOP853",
        rtol=1e-11, atol=1e-11,
    )  # fmt: skip
    z = out.y[:2, -1] + 1j * out.y[2:, -1]
    np.testing.assert_allclose(np.abs(z) ** 2, square, rtol=0, atol=1e-8)
    assert abs(np.angle(z[1] / z[0]) - phase) < 1e-8


def test_delayed_with_the_present_as_past_is_the_network():
    edges = Edges([0, 1, 2], [1, 2, 2], [0.5, 0.2, 0.1], nodes=3)
    params = CoupledParams(VanDerPolParams([1.0, 2.0, 3.0]), edges, gain=2.0)
    y = jnp.asarray(RNG.normal(size=(2, 3)))
    for kind in ("diffusive", "additive"):
        field = coupled(van_der_pol, kind=kind)
        out = field.delayed(0.0, y, y[:, edges.source], params)
        np.testing.assert_allclose(out, field(0.0, y, params), rtol=1e-14)


def test_errors(user_errors):
    unit = VanDerPolParams([1.0, 2.0])
    with pytest.raises(
        ValueError, match=r"`unit.damping` must have shape .*node.* got shape \(2,\)"
    ):
        CoupledParams(unit, jnp.zeros((3, 3)))
    with pytest.raises(ValueError, match="`component` must name each component once"):
        coupled(van_der_pol, component=(0, 0))
    with pytest.raises(ValueError, match="`component` must be below 2"):
        coupled(van_der_pol, component=2)(0.0, jnp.zeros((2, 2)), CoupledParams(unit, PAIR))
    with pytest.raises(ValueError, match="`kind` must be"):
        coupled(van_der_pol, kind="sum")  # pyright: ignore[reportArgumentType]
    with pytest.raises(ValueError, match=r"must be Edges.*from_matrix"):
        coupled(van_der_pol).delayed(
            0.0, jnp.zeros((2, 2)), jnp.zeros((2, 1)), CoupledParams(unit, PAIR)
        )
    flat = lambda t, y, p: jnp.sum(y)[None]
    with pytest.raises(ValueError, match=r"`unit\(t, y, params\)` must have shape"):
        coupled(flat)(0.0, jnp.zeros((2, 2)), CoupledParams(unit, PAIR))
