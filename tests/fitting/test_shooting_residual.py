"""What counts and what does not: masks, irregular times, several recordings, priors, bounds."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import (
    GaussianPrior,
    Shooting,
    SoftContinuity,
    Status,
    shoot,
)
from oscillib.integrate import cut, rk4
from oscillib.parameters import Fixed, Free, Interval, Positive, unconstrain


def spring(t, y, params):
    return jnp.stack([y[1], -params["stiffness"] * y[0]])


SPRING = rk4(spring, substeps=2)


def position(y, params):
    return params["gain"] * y[:1]


PARAMS = {"gain": jnp.asarray(1.0), "stiffness": jnp.asarray(3.0)}
CONSTRAINTS = {"gain": Fixed(), "stiffness": Positive()}
TIMES = jnp.linspace(0.0, 6.0, 61)
WINDOWS = cut(TIMES, 7)  # the last window is ragged: 60 steps in windows of 7
STARTS = jnp.stack([jnp.cos(2 * WINDOWS.t0), jnp.zeros(WINDOWS.count)], axis=1)
CLEAN = jnp.cos(2 * TIMES)[:, None]


@jax.jit
def fit_masked(values, mask):
    fit = Shooting(SPRING, position, PARAMS, STARTS, WINDOWS, values, scale=0.1 * jnp.ones(1),
                   mask=mask, constraints=CONSTRAINTS)  # fmt: skip
    return fit.result(fit.run(fit.init()))


def test_masked_entries_have_no_influence():
    noise = 0.1 * jax.random.normal(jax.random.key(0), CLEAN.shape)
    values, mask = CLEAN + noise, np.ones(CLEAN.shape, bool)
    mask[20:29] = mask[50:] = False  # more than a whole window, and the end
    results = [
        fit_masked(jnp.where(mask, values, filler), jnp.asarray(mask))
        for filler in (0.0, jnp.nan, jnp.inf, 1e30)
    ]
    assert results[0].status == Status.CONVERGED
    for other in results[1:]:
        for a, b in zip(jax.tree.leaves(results[0]), jax.tree.leaves(other), strict=True):
            assert np.asarray(a).tobytes() == np.asarray(b).tobytes()


def test_status_of_what_cannot_be_fitted():
    everywhere = jnp.ones(CLEAN.shape, bool)
    assert fit_masked(CLEAN, everywhere).status == Status.CONVERGED
    broken = fit_masked(CLEAN.at[11].set(jnp.nan), everywhere)
    assert broken.status == Status.NON_FINITE
    np.testing.assert_array_equal(broken.params["stiffness"], PARAMS["stiffness"])
    np.testing.assert_array_equal(broken.starts, STARTS)
    assert fit_masked(jnp.full_like(CLEAN, 0.5), everywhere).status == Status.COLLAPSED
    assert fit_masked(CLEAN, ~everywhere).status != Status.CONVERGED


def test_status_at_a_bound_and_at_the_step_limit():
    bounded = {"gain": Fixed(), "stiffness": Interval(0.5, 3.5)}  # the truth is 4
    at = {"constraints": bounded, "scale": 0.1 * jnp.ones(1)}
    fit = Shooting(SPRING, position, PARAMS, STARTS, WINDOWS, CLEAN, **at)
    state = fit.step(fit.init())
    assert fit.result(state).status == Status.STEP_LIMIT
    for _ in range(fit.solver.max_steps - 1):
        state = fit.step(state)
    end = fit.result(state)
    assert end.status == Status.AT_BOUND
    np.testing.assert_allclose(end.params["stiffness"], 3.5, rtol=1e-3)
    # A fit that has ended stays as it is.
    again = fit.step(state)
    for a, b in zip(jax.tree.leaves(again), jax.tree.leaves(state), strict=True):
        np.testing.assert_array_equal(a, b)


KEEP = np.sort(np.random.default_rng(1).choice(61, 40, replace=False))
IRREGULAR = cut(TIMES[KEEP], 6)


@jax.jit
def fit_irregular_with_prior(scale, weight):
    """Forty of the samples, at irregular times, and a prior at a stiffness of 5."""
    starts = jnp.stack([jnp.cos(2 * IRREGULAR.t0), jnp.zeros(IRREGULAR.count)], axis=1)
    free = unconstrain({"gain": jnp.asarray(1.0), "stiffness": jnp.asarray(5.0)}, CONSTRAINTS)
    fit = Shooting(
        rk4(spring, substeps=8), position, PARAMS, starts, IRREGULAR, CLEAN[KEEP],
        scale=scale, constraints=CONSTRAINTS, continuity=SoftContinuity(weight=weight),
        prior=GaussianPrior(free, {"gain": None, "stiffness": jnp.asarray(0.2)}),
        start_prior=GaussianPrior(starts, jnp.ones_like(starts)),
    )  # fmt: skip
    return fit.result(fit.run(fit.init())), TIMES[KEEP], starts


def test_irregular_times():
    fit, times, _ = fit_irregular_with_prior(jnp.full(1, 1e-4), jnp.asarray(1e8))
    assert fit.status == Status.CONVERGED
    np.testing.assert_allclose(fit.params["stiffness"], 4.0, rtol=1e-5)
    np.testing.assert_allclose(fit.predicted[:, 0], np.cos(2 * times), atol=1e-5)


def test_prior_is_a_gaussian_on_free_leaves():
    # Without data or continuity the posterior is the prior.
    fit, _, starts = fit_irregular_with_prior(jnp.full(1, 1e6), jnp.asarray(1e-12))
    np.testing.assert_allclose(fit.params["stiffness"], 5.0, rtol=1e-4)
    np.testing.assert_allclose(fit.covariance, [[0.04]], rtol=1e-4)
    np.testing.assert_allclose(fit.starts, starts, atol=1e-4)


def test_recordings_share_some_parameters_and_not_others():
    # Two recordings of one spring, with a gain and a start of their own; full states are read.
    def both(y, params):
        return params["gain"] * y

    phase, gains = jnp.array([0.0, 1.0]), jnp.array([1.0, 2.5])
    angle = 2 * TIMES[None] + phase[:, None]
    exact = jnp.stack([jnp.cos(angle), -2 * jnp.sin(angle)], axis=-1)
    noise = 0.01 * jax.random.normal(jax.random.key(2), exact.shape)
    values = gains[:, None, None] * exact + noise
    params = {"gain": jnp.ones(2), "stiffness": jnp.asarray(3.0)}
    # The gain is only known if the first start is.
    mean = jnp.broadcast_to(exact[:, :1], (2, 9, 2))
    spread = jnp.full((2, 9, 2), jnp.inf).at[:, 0].set(1e-4)
    fit = shoot(
        SPRING, both, params, values[:, :-1:7], WINDOWS, values, scale=0.01 * jnp.ones(2),
        constraints={"gain": Positive(), "stiffness": Positive()},
        own={"gain": True, "stiffness": False},
        start_prior=GaussianPrior(mean, spread),
    )  # fmt: skip
    assert fit.status == Status.CONVERGED
    assert np.abs(fit.gaps).max() < 1e-10
    error = np.sqrt(np.diagonal(fit.covariance, axis1=1, axis2=2))  # of (gain, stiffness), in logs
    assert fit.covariance.shape == (2, 2, 2)
    # both recordings know the shared parameter equally well
    np.testing.assert_allclose(error[0, 1], error[1, 1], rtol=1e-9)
    assert (np.abs(np.log(fit.params["gain"] / gains)) < 4 * error[:, 0]).all()
    assert abs(np.log(fit.params["stiffness"] / 4)) < 4 * error[0, 1]
    assert fit.predicted.shape == values.shape


@pytest.mark.long
def test_single_precision():
    half = lambda tree: jax.tree.map(lambda x: x.astype(jnp.float32), tree)
    fit = shoot(
        SPRING, position, half(PARAMS), half(STARTS), cut(half(TIMES), 7), half(CLEAN),
        scale=jnp.full(1, 0.1, jnp.float32), constraints=CONSTRAINTS,
    )  # fmt: skip
    assert fit.status == Status.CONVERGED
    assert fit.params["stiffness"].dtype == fit.covariance.dtype == jnp.float32
    np.testing.assert_allclose(fit.params["stiffness"], 4.0, rtol=1e-4)
    assert np.abs(fit.gaps).max() < 2e-5


def test_refusals(user_errors):
    def fit(**changes):
        arguments = {
            "params": PARAMS, "starts": STARTS, "windows": WINDOWS, "values": CLEAN,
            "scale": jnp.ones(1), "readout": position,
        } | changes  # fmt: skip
        return shoot(SPRING, **arguments)

    with pytest.raises(ValueError, match="`starts` must have shape"):
        fit(starts=STARTS[1:])
    with pytest.raises(ValueError, match="`values` must have shape"):
        fit(values=CLEAN[1:])
    with pytest.raises(ValueError, match="`readout"):
        fit(readout=lambda y, params: y)
    with pytest.raises(TypeError, match="`mask` must be boolean"):
        fit(mask=jnp.ones(CLEAN.shape))
    with pytest.raises(TypeError, match="`values` is float32"):
        fit(values=CLEAN.astype(jnp.float32))
    with pytest.raises(ValueError, match="`scale` must be positive"):
        fit(scale=jnp.zeros(1))
    with pytest.raises(ValueError, match="`constraints` must have the structure"):
        fit(constraints={"stiffness": Free()})
    with pytest.raises(ValueError, match="must lie strictly inside"):
        fit(constraints={"gain": Fixed(), "stiffness": Interval(0.0, 1.0)})
