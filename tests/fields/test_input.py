import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax import lax

from oscillib.fields import (
    ForcedParams,
    HopfNetwork,
    HopfParams,
    Input,
    forced,
    hold_input,
)
from oscillib.integrate import heun, rk4, rollout


TIMES, VALUES = [0.0, 1.0, 3.0], [[1.0], [2.0], [-2.0]]
DECAY = forced(lambda t, y, rate: -rate * y)


@pytest.mark.parametrize(
    "kind, expected",
    [
        ("hold", [1, 1, 1, 2, 2, -2, -2]),
        ("linear", [1, 1, 1.5, 2, 0, -2, -2]),
    ],
)
def test_values_between_at_and_beyond_the_samples(kind, expected):
    signal = jax.jit(jax.vmap(Input(TIMES, VALUES, kind=kind)))
    at = jnp.array([-5.0, 0.0, 0.5, 1.0, 2.0, 3.0, 9.0])
    np.testing.assert_allclose(signal(at)[:, 0], expected)
    # As numpy does it, at random times.
    at = jnp.asarray(np.random.default_rng(0).uniform(-1, 4, size=7))
    if kind == "linear":
        np.testing.assert_allclose(
            signal(at)[:, 0], np.interp(at, TIMES, np.ravel(VALUES)), rtol=1e-14
        )


def exact_held(t):
    """Solve x' = -x + u from 0 with u held at 1 until 1 and at 2 until 3; by hand."""
    x1 = 1 - np.exp(-1.0)
    return 2 + (x1 - 2) * np.exp(-(t - 1))


def exact_linear(t):
    """Solve x' = -x + u from 0 with u = 1 + s until 1 and 4 - 2 s until 3; by hand."""
    # With u = p + q s: x = p - q + q s + c e^-s.
    x1 = 1.0
    return 6 - 2 * t + (x1 - 4) * np.exp(-(t - 1))


@pytest.mark.parametrize(
    "kind, make, order",
    [
        ("linear", rk4, 4),
        ("linear", heun, 2),
        ("hold", lambda f: hold_input(rk4(f)), 4),
        ("hold", lambda f: hold_input(heun(f)), 2),
        ("hold", rk4, 1),  # what the docstring warns of
    ],
)
def test_order_with_samples_on_the_grid(kind, make, order):
    params = ForcedParams(jnp.asarray(1.0), Input(TIMES, VALUES, kind=kind), [[1.0]])
    exact = (exact_linear if kind == "linear" else exact_held)(2.5)
    counts = np.array([5, 10, 20, 40])

    @jax.jit
    def end(count):
        h = 2.5 / count
        advance = make(DECAY)(params, h)
        return lax.fori_loop(
            0, count.astype(int), lambda k, y: advance(k * h, y), jnp.zeros((1, 1))
        )

    errors = [abs(end(jnp.asarray(float(n)))[0, 0] - exact) for n in counts]
    slope = -np.polyfit(np.log(counts), np.log(errors), 1)[0]
    assert abs(slope - order) < 0.25


def test_gradient_passes_to_values_and_weight():
    def end(values, weight):
        params = ForcedParams(jnp.asarray(1.0), Input(TIMES, values, kind="linear"), weight)
        return rollout(rk4(DECAY), params, jnp.zeros((1, 1)), 0.25, 10)[-1, 0, 0]

    values, weight = jnp.asarray(VALUES), jnp.array([[1.0]])
    value, (by_values, by_weight) = jax.jit(jax.value_and_grad(end, argnums=(0, 1)))(values, weight)
    # The end state is linear in both.
    np.testing.assert_allclose(np.sum(by_values * values), value, rtol=1e-12)
    np.testing.assert_allclose(by_weight[0, 0], value, rtol=1e-12)


@pytest.fixture(scope="module")
def settled():
    step = hold_input(rk4(forced(HopfNetwork())))
    run = jax.jit(lambda p, h: rollout(step, p, jnp.ones((2, 1)), h, 4000)[-1])
    return lambda params, h: np.linalg.norm(run(params, jnp.asarray(h)))


def test_locked_radius_of_a_forced_unit(settled):
    # Harmonic forcing F e^(iOt), in the frame that turns with it a constant input: the square R of
    # the radius solves R ((a - R)^2 + (w - O)^2) = F^2; a = b = 1, w - O = 0.3, F = 0.8. Closed
    # form (Pikovsky, Rosenblum & Kurths 2001, from memory).
    constant = Input([0.0], [[0.8]], kind="hold")
    radius = settled(ForcedParams(HopfParams([1.0], [0.3]), constant, [[1.0]]), 0.05)
    assert abs(radius - 1.25091934991) < 1e-9


def test_cube_root_law(settled):
    # A critical unit driven at resonance: |z| = F^(1/3), F = 0.001 (Camalet et al. 2000; Eguiluz et
    # al. 2000; from memory).
    constant = Input([0.0], [[0.001]], kind="hold")
    radius = settled(ForcedParams(HopfParams([0.0], [0.0]), constant, [[1.0]]), 0.5)
    assert abs(radius - 0.1) < 1e-6


class Tone(eqx.Module):
    speed: jax.Array

    def __call__(self, t):
        return jnp.cos(self.speed * t)[None]


def test_an_input_of_ones_own_on_the_chosen_component():
    params = ForcedParams(jnp.asarray(0.0), Tone(jnp.asarray(2.0)), [[3.0], [0.0]])
    out = forced(lambda t, y, p: 0 * y, component=1)(jnp.asarray(0.5), jnp.zeros((2, 2)), params)
    np.testing.assert_allclose(out, [[0, 0], [3 * np.cos(1.0), 0]])


@pytest.mark.parametrize(
    "make, error, match",
    [
        (lambda: Input(TIMES, VALUES, kind="cubic"), ValueError, "`kind` must be 'hold'"),
        (lambda: Input([0.0], [[1.0]], kind="linear"), ValueError, "at least 2 sample"),
        (lambda: Input([0.0, 0.0], [[1.0]] * 2, kind="hold"), ValueError, "strictly increasing"),
        (
            lambda: Input(TIMES, [1.0, 2.0, 3.0], kind="hold"),
            ValueError,
            "`values` must have shape",
        ),
        (lambda: Input([0.0], [[np.nan]], kind="hold"), ValueError, "finite; fill in missing"),
        (
            lambda: DECAY(
                0.0,
                jnp.zeros((1, 2)),
                ForcedParams(jnp.asarray(1.0), Input([0.0], [[1.0]], kind="hold"), [[1.0]]),
            ),
            ValueError,
            "`params.weight` must have shape",
        ),
        (
            lambda: forced(lambda t, y, p: y, component=3)(0.0, jnp.zeros((1, 2)), None),
            ValueError,
            "`component` must lie in 0 ... 0",
        ),
    ],
)
def test_errors(user_errors, make, error, match):
    with pytest.raises(error, match=match):
        make()
