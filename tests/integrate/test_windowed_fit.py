"""The classic failure of fitting a long oscillation, and how windows cure it."""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import optax
import pytest

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import cut, gather, join, roll_windows, rollout
from oscillib.losses import continuity, reconstruction
from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import Fixed, constrain, unconstrain


INTERVAL, STEPS = 0.1, 400  # forty cycles
START = jnp.array([[1.0], [0.0]])


def step(params, h):
    flow = HopfNetwork().unit_flow(params, h)
    return lambda t, y: flow(y)


def model(cycles):
    """A unit on its limit cycle, at `cycles` a time unit, seen around 3."""
    return {
        "field": HopfParams([1.0], [2 * np.pi * cycles]),
        "readout": ReadoutParams([1.0], [3.0]),
    }


def read(states, params):
    return jax.vmap(lambda y: linear_readout(y, params["readout"]))(states)


WRONG = model(1.15)
CONSTRAINTS = eqx.tree_at(
    lambda c: (c["field"].growth, c["field"].saturation),
    {name: part.constraints() for name, part in WRONG.items()},
    (Fixed(), Fixed()),
)


@pytest.fixture(scope="module")
def data():
    states = rollout(step, model(1.0)["field"], START, INTERVAL, STEPS)
    return read(states, model(1.0))


def fit(data, starts, params, *, length, weight, iterations):
    """Fit frequency, gain, offset and the start of every window; return them and the states."""
    windows = cut(INTERVAL * jnp.arange(STEPS + 1.0), length)
    target, owned = gather(data, windows), windows.owned[..., None]
    optimiser = optax.adam(0.01)
    leaves: Any = (unconstrain(params, CONSTRAINTS), starts)

    def loss(free):
        p = constrain(free[0], CONSTRAINTS, WRONG)
        rolled = roll_windows(step, p["field"], free[1], windows)
        predicted = jax.vmap(lambda states: read(states, p))(rolled.states)
        return reconstruction(predicted, target, owned, scale=jnp.ones(1)) + continuity(
            rolled.gaps, weight=weight
        )

    def update(carry: Any, _):
        free, memory = carry
        change, memory = optimiser.update(jax.grad(loss)(free), memory, free)
        moved: Any = optax.apply_updates(free, change)
        return (moved, memory), None

    @jax.jit
    def run(free: Any):
        (free, _), _ = jax.lax.scan(update, (free, optimiser.init(free)), length=iterations)
        p = constrain(free[0], CONSTRAINTS, WRONG)
        return p, join(roll_windows(step, p["field"], free[1], windows).states, windows)

    # Adam itself divides by powers of an integer count, which strict promotion refuses.
    with jax.numpy_dtype_promotion("standard"):
        return run(leaves)


def test_single_rollout_goes_flat_and_windows_recover_the_frequency(data):
    # From 15 percent off, six cycles slip over the recording: the squared error of one rollout is
    # least for no oscillation at all. The loss is convex in the frequency only within about
    # 1 / window; common practice, no source.
    params, states = fit(data, START[None], WRONG, length=STEPS, weight=0.0, iterations=500)
    flat = read(states, params)
    assert jnp.var(flat) < 0.05 * jnp.var(data)
    assert abs(jnp.mean(flat) - jnp.mean(data)) < 0.02
    assert abs(params["field"].frequency[0] / (2 * np.pi) - 1) > 0.1

    params, states = WRONG, rollout(step, WRONG["field"], START, INTERVAL, STEPS)
    for length, weight in ((5, 0.1), (20, 1.0), (80, 10.0)):
        starts = states[:-1:length]
        params, states = fit(data, starts, params, length=length, weight=weight, iterations=200)
    assert abs(params["field"].frequency[0] / (2 * np.pi) - 1) < 1e-3
    np.testing.assert_allclose(read(states, params), data, rtol=0, atol=1e-2)
