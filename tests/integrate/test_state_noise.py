"""State-dependent noise through diffrax: strong orders and laws of known equations."""

from typing import Any

import diffrax
import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.integrate import NoisyParams, state_noise_terms


class Table(diffrax.AbstractBrownianPath):
    """A Brownian path given on a regular grid, so that steps of every length see the same one."""

    values: jax.Array
    t0: Any
    t1: Any
    levy_area: Any = eqx.field(default=diffrax.BrownianIncrement, static=True)

    def evaluate(self, t0, t1=None, left=True, use_levy=False):
        del left, use_levy
        spacing = (self.t1 - self.t0) / (self.values.shape[0] - 1)
        at = lambda t: self.values[jnp.round((t - self.t0) / spacing).astype(int)]
        return at(t0) if t1 is None else at(t1) - at(t0)


def linear(t, y, rate):
    del t
    return rate * y


def solve(solver, field, diffusion, params, y0, path, count, max_steps=None):
    terms = state_noise_terms(field, diffusion, path)
    h = (path.t1 - path.t0) / count
    out = diffrax.diffeqsolve(
        terms, solver, path.t0, path.t1, h, y0, args=params, max_steps=max_steps, throw=False
    )
    ys: Any = out.ys
    return ys[-1]


# Geometric Brownian motion dX = mu X dt + s X dW, X(0) = 1, up to t = 1.
MU, S, FINEST = 0.7, 0.5, 256
PARAMS = NoisyParams(jnp.array([MU]), jnp.array([S]))
PATHS = np.random.default_rng(0).normal(size=(3000, FINEST, 1)) / np.sqrt(FINEST)
PATHS = jnp.asarray(np.concatenate([np.zeros((3000, 1, 1)), np.cumsum(PATHS, axis=1)], axis=1))


def ends(solver, drift=linear):
    grow = lambda w, n: solve(
        solver, drift, linear, PARAMS, jnp.ones(1), Table(values=w, t0=0.0, t1=1.0), n
    )
    run = jax.jit(jax.vmap(grow, (0, None)))
    return lambda count: run(PATHS, jnp.asarray(count, float))[:, 0]


@pytest.fixture(scope="module")
def milstein():
    return ends(diffrax.ItoMilstein())


def exact():
    return jnp.exp((MU - S**2 / 2) + S * PATHS[:, -1, 0])


def strong_order(of):
    counts = np.array([16, 32, 64, 128])
    errors = [float(jnp.mean(jnp.abs(of(n) - exact()))) for n in counts]
    order = -np.polyfit(np.log(counts), np.log(errors), 1)[0]
    print("strong order", order)
    return order


# Kloeden & Platen 1992 (from memory); slopes 0.5209, 0.9851 and 0.9883 computed apart.
@pytest.mark.long
def test_euler_maruyama_is_of_strong_order_one_half():
    assert abs(strong_order(ends(diffrax.Euler())) - 0.5) < 0.12


def test_milstein_is_of_strong_order_1(milstein):
    assert abs(strong_order(milstein) - 1) < 0.12


@pytest.mark.long
def test_heun_is_of_strong_order_1_in_the_sense_of_stratonovich():
    # The same motion: Stratonovich's drift is less by s^2 X / 2.
    stratonovich = ends(diffrax.Heun(), lambda t, y, mu: (mu - S**2 / 2) * y)
    assert abs(strong_order(stratonovich) - 1) < 0.15


def test_mean_and_variance_of_geometric_brownian_motion(milstein):
    # e^(mu) and e^(2 mu) (e^(s^2) - 1); closed form. What is compared is the difference from the
    # exact solution of the same paths, of which sampling leaves little.
    found, known = np.asarray(milstein(FINEST)), np.asarray(exact())
    mean = 2.013752707 + found.mean() - known.mean()
    variance = 1.15177986 + found.var() - known.var()
    assert abs(mean - np.exp(MU)) < 0.02
    assert abs(variance - np.exp(2 * MU) * (np.exp(S**2) - 1)) < 0.02


def test_stochastic_landau_equation():
    # dx = (a x - x^3) dt + s x o dW: x0 e^(at + sW) / sqrt(1 + 2 x0^2 int e^(2as + 2sW) ds) at
    # a = 0.5, s = 0.6, x0 = 0.3, t = 2, path from numpy's default_rng(7), 20000 steps; Kloeden &
    # Platen 1992, section 4.4 (from memory).
    steps = np.random.default_rng(7).normal(size=20_000) * np.sqrt(2 / 20_000)
    path = jnp.asarray(np.concatenate([[0.0], np.cumsum(steps)])[:, None])
    params = NoisyParams(jnp.array([0.5]), jnp.array([0.6]))
    field, diffusion = (lambda t, y, a: a * y - y**3), (linear)
    run = jax.jit(
        lambda s, w, n: solve(
            diffrax.Heun(), field, diffusion, NoisyParams(params.field, s), jnp.array([0.3]),
            Table(values=w, t0=0.0, t1=2.0), n,
        )[0]
    )  # fmt: skip
    assert abs(run(params.noise, path, 20_000.0) - 0.32736661) < 2e-4
    assert abs(run(params.noise, path, 1000.0) - 0.32736661) < 2e-4


@pytest.mark.long
def test_gradient_by_the_strength_of_the_noise():
    @jax.jit
    @jax.value_and_grad
    def end(s):
        path = Table(values=PATHS[0], t0=0.0, t1=1.0)
        params = NoisyParams(PARAMS.field, s[None])
        run = solve(diffrax.ItoMilstein(), linear, linear, params, jnp.ones(1), path, 8, 8)
        return run[0]

    value, slope = end(jnp.asarray(S))
    assert abs(slope - (end(S + 1e-6)[0] - end(S - 1e-6)[0]) / 2e-6) < 1e-8
    # Of the motion itself: X (W - s); eight steps are near it.
    assert abs(slope / (value * (PATHS[0, -1, 0] - S)) - 1) < 0.1


def test_errors_name_what_is_wrong():
    path = Table(values=jnp.zeros((3, 2)), t0=0.0, t1=1.0)
    for diffusion, error, message in (
        (lambda t, y, s: s, ValueError, r"`diffusion\(t, y, noise\)` must have shape that of `y`"),
        (
            lambda t, y, s: (s[0] * y).astype(jnp.float32),
            TypeError,
            "is float32 but `y` is float64",
        ),
    ):
        with pytest.raises(error, match=message):
            solve(diffrax.Euler(), linear, diffusion, PARAMS, jnp.ones(2), path, 2)
