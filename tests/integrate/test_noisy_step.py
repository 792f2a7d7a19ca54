"""Noisy steps: exact where linear, weak order 2 elsewhere, right where Euler-Maruyama is not."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams, LinearNetwork, LinearParams
from oscillib.integrate import (
    NoisyParams,
    euler_maruyama,
    linear_transition,
    noisy_strang,
    rk4,
    rollout,
    split_noise,
    without_noise,
)


FIELD = HopfNetwork()
STEPS = {
    "strang": noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix),
    "split": split_noise(rk4(FIELD)),
    "euler": euler_maruyama(FIELD),
}
# Gauss-Hermite points: the mean over one step's noise is exact for polynomials up to degree 15.
NODES, WEIGHTS = np.polynomial.hermite_e.hermegauss(8)
NORMAL = jnp.asarray(np.stack(np.meshgrid(NODES, NODES), -1).reshape(-1, 2))
WEIGHT = jnp.asarray(np.outer(WEIGHTS, WEIGHTS).ravel() / WEIGHTS.sum() ** 2)


def unit(a, w, s, *, b=1.0):
    return NoisyParams(HopfParams([a], [w], saturation=[b]), noise=[s])


POWERS = [(i, j) for i in range(9) for j in range(9 - i)]


def basis(y):
    return jnp.stack([y[0, 0] ** i * y[1, 0] ** j for i, j in POWERS])


def moment_operators(step, params, sizes):
    """How one step of each size maps E[x^i y^j] up to degree 8, by least squares on a disc.

    A weak error is a difference of means. Simulation would bury it in sampling error; averaging
    one step over its noise by quadrature, and steps by powers of a matrix, has none.
    """
    angle, radius = np.arange(32) * (2 * np.pi / 32), 0.9 * np.sqrt((np.arange(12) + 0.5) / 12)
    circle = np.stack([np.cos(angle), np.sin(angle)], -1)
    points = jnp.asarray((radius[:, None, None] * circle).reshape(-1, 2, 1))

    def averaged(y, h):
        advance = step(params, h)
        factor = jnp.linalg.cholesky(advance.covariance)
        middle = advance.into_noise(0.0, y)[None] + (NORMAL @ factor.T)[:, :, None]
        return WEIGHT @ jax.vmap(lambda z: basis(advance.after(0.0, z)))(middle)

    after = jax.jit(jax.vmap(jax.vmap(averaged, (0, None)), (None, 0)))(points, sizes)
    before = np.asarray(jax.vmap(basis)(points))
    return [np.linalg.lstsq(before, np.asarray(a), rcond=None)[0] for a in after]


@pytest.mark.parametrize(("name", "order"), [("strang", 2), ("split", 2), ("euler", 1)])
def test_weak_order_by_regression(name, order):
    params, end = unit(-0.5, 2.0, 0.25), 1.0
    counts = [4, 8, 16, 32] if order == 2 else [32, 64, 128, 256]
    operators = moment_operators(STEPS[name], params, end / jnp.asarray(counts, float))
    start = np.asarray(basis(jnp.array([[0.6], [-0.2]])))
    ends = [start @ np.linalg.matrix_power(m, n) for m, n in zip(operators, counts, strict=True)]
    values = [sum(x[POWERS.index(p)] for p in ((2, 0), (0, 2), (1, 0))) for x in ends]
    # Differences of successive values fall with the order of the error itself.
    slope = -np.polyfit(np.log(counts[:-1]), np.log(np.abs(np.diff(values))), 1)[0]
    assert abs(slope - order) < 0.1


def test_euler_without_noise_is_of_order_1():
    # Textbook (Hairer, Lubich & Wanner 2006; from memory); slope 0.95458 computed apart.
    counts, params = np.array([64, 128, 256, 512]), unit(0.4, 3.0, 0.0)

    @jax.jit
    def end(h, count):
        advance = without_noise(STEPS["euler"])(params, h)
        start = jnp.array([[0.2], [0.1]])
        return jax.lax.fori_loop(0, count, lambda _, y: advance(0.0, y), start)

    # Closed form to 40 digits; common practice.
    exact = np.array([[0.55491488485800019834], [-0.057203871761378918795]])
    errors = [np.linalg.norm(end(jnp.asarray(4 / n), jnp.asarray(n)) - exact) for n in counts]
    assert abs(-np.polyfit(np.log(counts), np.log(errors), 1)[0] - 1) < 0.25


def test_mean_of_euler_maruyama_on_a_linear_drift():
    # (1 + mu h)^n, mu = 0.7, h = 1/16, n = 16; closed form.
    quiet = without_noise(euler_maruyama(LinearNetwork(), rate=LinearNetwork().noise_rate))
    params = NoisyParams(LinearParams.relaxing([-0.7]), jnp.array([[0.5]]))
    end = rollout(quiet, params, jnp.ones((1, 1)), 1 / 16, 16)[-1, 0, 0]
    assert abs(end - 1.984009813) < 1e-9


def test_strong_order_of_euler_maruyama_with_additive_noise():
    # dx = sin 2x dt + 0.4 dW: order 1, as additive noise leaves no other term; Kloeden & Platen
    # 1992 (from memory), slope 1.012 computed apart. One path, seen by steps of every length.
    step = euler_maruyama(lambda t, y, p: jnp.sin(2 * y), rate=lambda noise: jnp.diag(noise**2))
    params, finest = NoisyParams(None, jnp.array([0.4])), 2048
    draws = jax.random.normal(jax.random.key(0), (400, finest)) / np.sqrt(finest)

    def ends(count):
        advance = step(params, jnp.asarray(1 / count))
        scale = jnp.sqrt(advance.covariance[0, 0] * float(count))
        move = lambda y, w: (advance.after(0.0, advance.into_noise(0.0, y) + scale * w), None)
        one = lambda w: jax.lax.scan(move, jnp.array([0.5]), w)[0]
        return jax.jit(jax.vmap(one))(draws.reshape(400, count, -1).sum(axis=2))

    counts, exact = np.array([16, 64]), ends(finest)
    errors = [np.mean(np.abs(ends(n) - exact)) for n in counts]
    assert abs(-np.polyfit(np.log(counts), np.log(errors), 1)[0] - 1) < 0.15


def test_exact_for_a_linear_network_at_any_step():
    coupling = jnp.array([[0.0, 0.3], [0.1, 0.0]])
    field = HopfParams([-0.2, -0.4], [6.0, 5.0], saturation=[0.0, 0.0], coupling=coupling)
    params = NoisyParams(field, noise=[0.2, 0.3])
    advance = STEPS["strang"](params, jnp.asarray(3.0))
    rate = jnp.diag(jnp.array([0.2, 0.3, 0.2, 0.3]) ** 2)
    propagator, covariance = linear_transition(FIELD.linear_matrix(field), rate, 3.0)
    y = jnp.array([[1.0, 0.2], [0.3, -0.4]])
    np.testing.assert_allclose(advance.into_noise(0.0, y).ravel(), propagator @ y.ravel())
    np.testing.assert_allclose(advance.covariance, covariance)


def test_without_noise_is_the_deterministic_splitting():
    params = unit(0.4, 3.0, 0.3, b=1.5)
    y = jnp.array([[0.2], [0.1]])
    for name in STEPS:
        advance = STEPS[name](params, jnp.asarray(0.1))
        quiet = without_noise(STEPS[name])(params, jnp.asarray(0.1))
        np.testing.assert_array_equal(quiet(0.0, y), advance.after(0.0, advance.into_noise(0.0, y)))


def test_undo_inverts_the_last_map():
    advance = STEPS["strang"](unit(0.4, 3.0, 0.3), jnp.asarray(0.5))
    y = jnp.array([[0.4], [-0.3]])
    assert advance.undo is not None
    np.testing.assert_allclose(advance.undo(0.0, advance.after(0.0, y)), y, rtol=0, atol=1e-15)
