from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import Status, refine, refine_init, refine_step
from oscillib.parameters import Fixed, Free, Positive


@pytest.fixture(scope="module")
def nile():
    """Annual flow of the Nile at Aswan, 1871-1970, 100 values."""
    from statsmodels.datasets import nile

    table: Any = nile.load_pandas().data
    return jnp.asarray(table["volume"].to_numpy(float))


def local_level(params, y):
    """Negative log-likelihood of a random walk seen through noise, its start unknown."""
    level, noise = params["level"], params["noise"]

    def step(carry, y):
        mean, variance = carry
        total = variance + noise
        error = y - mean
        gain = variance / total
        loss = (jnp.log(2 * jnp.pi * total) + error**2 / total) / 2
        return (mean + gain * error, variance * (1 - gain) + level), loss

    return jax.lax.scan(step, (y[0], noise + level), y[1:])[1].sum()


def rosenbrock(x):
    return 100 * (x[1] - x[0] ** 2) ** 2 + (1 - x[0]) ** 2


def heavy_tails(params, y):
    """Negative log-likelihood of location and scale of a Student t of 5 degrees of freedom."""
    z = (y - params["centre"]) / params["scale"]
    return jnp.sum(3 * jnp.log1p(z**2 / 5)) + y.size * jnp.log(params["scale"])


SHAPE = {"centre": Free(), "scale": Positive()}


def start(dtype=jnp.float64):
    return {"centre": jnp.asarray(0.0, dtype), "scale": jnp.asarray(1.0, dtype)}


@pytest.fixture(scope="module")
def samples():
    y = 2.0 + 3.0 * np.random.default_rng(0).standard_t(5, size=(4, 80))
    return jnp.asarray(y)


@pytest.fixture(scope="module")
def batch_fit():
    fit = lambda p, y: refine(lambda q: heavy_tails(q, y), p, SHAPE)
    return jax.jit(jax.vmap(fit, in_axes=(None, 0)))


def test_local_level_of_the_nile(nile):
    params = {"level": jnp.asarray(1e4), "noise": jnp.asarray(1e4)}
    constraints = {"level": Positive(), "noise": Positive()}
    fit = jax.jit(lambda p: refine(lambda q: local_level(q, nile), p, constraints))(params)
    assert fit.status == Status.CONVERGED and fit.steps <= 8
    # Durbin and Koopman 2001, section 2.10: variances 15,099 and 1,469.1, log-likelihood -632.54
    # (from memory); further digits seen in public tests, and found by another optimiser.
    assert abs(fit.params["noise"] - 15098.52) < 0.1
    assert abs(fit.params["level"] - 1469.18) < 0.1
    assert abs(fit.loss - 632.5456) < 0.002


def test_rosenbrock():
    fit = jax.jit(lambda p: refine(rosenbrock, p, Free()))
    for dtype, error in ((jnp.float64, 1e-5), (jnp.float32, 2e-2)):
        out = fit(jnp.array([-1.2, 1.0], dtype))
        assert out.status == Status.CONVERGED and out.steps <= 40
        assert out.params.dtype == out.loss.dtype == dtype
        # Minimum (1, 1): the definition.
        np.testing.assert_allclose(out.params, [1.0, 1.0], rtol=error)
    # Gradient and Hessian at (-1.2, 1): Rosenbrock 1960; closed form.
    step = lambda p: refine_step(rosenbrock, refine_init(rosenbrock, p, Free()), Free())
    first = jax.jit(step)(jnp.array([-1.2, 1.0]))
    np.testing.assert_allclose(first.gradient, [-215.6, -88.0], rtol=0, atol=1e-9)
    np.testing.assert_allclose(first.curvature, [[1330, 480], [480, 200]], rtol=0, atol=1e-9)


def test_convergence_is_quadratic(samples):
    step = jax.jit(
        lambda s: refine_step(lambda q: heavy_tails(q, samples[0]), s, SHAPE, tolerance=0.0)
    )
    state = refine_init(lambda q: heavy_tails(q, samples[0]), start(), SHAPE)
    decrements = []
    while state.steps < 12:
        state = step(state)
        decrements.append(float(state.decrement))
    distance = np.sqrt([d for d in decrements if 1e-17 < d < 0.1])
    print("distances from the optimum in standard errors:", np.sqrt(decrements))
    orders = np.log(distance[2:] / distance[1:-1]) / np.log(distance[1:-1] / distance[:-2])
    assert len(distance) >= 3
    assert np.all(orders > 1.7)


def test_fisher_scoring(samples, batch_fit):
    y = samples[1]
    # Expected information of a Student t of v degrees of freedom: location (v + 1) / (v + 3) n /
    # scale^2, log scale 2 v / (v + 3) n (Lange, Little and Taylor 1989, from memory).
    curvature = lambda p: jnp.diag(
        y.size * jnp.stack([6 / 8 / p["scale"] ** 2, jnp.asarray(10 / 8)])
    )
    loss = lambda q: heavy_tails(q, y)
    scoring = jax.jit(lambda p: refine(loss, p, SHAPE, curvature=curvature))(start())
    newton = jax.tree.map(lambda v: v[1], batch_fit(start(), samples))
    assert scoring.status == newton.status == Status.CONVERGED
    assert abs(scoring.params["centre"] - newton.params["centre"]) < 1e-4
    assert abs(scoring.loss - newton.loss) < 1e-9


def test_leaves_a_ridge_but_tells_a_saddle():
    loss = lambda x: (x[0] ** 2 - 1) ** 2 + x[1] ** 2
    fit = jax.jit(lambda p: refine(loss, p, Free()))
    off = fit(jnp.array([1e-4, 1.0]))
    assert off.status == Status.CONVERGED and abs(off.params[0] - 1) < 1e-6
    on = fit(jnp.array([0.0, 1.0]))
    assert on.status == Status.SADDLE


def test_at_a_bound():
    # Both samples lie within the known noise of variance 1: the extra variance falls to zero.
    y = jnp.array([0.5, -0.5, 1.0])
    loss = lambda p: jnp.sum(y**2 / (p + 1)) / 2 + 1.5 * jnp.log(p + 1)
    fit = jax.jit(lambda p: refine(loss, p, Positive()))
    assert fit(jnp.asarray(1.0)).status == Status.AT_BOUND
    # Small, but known: not at a bound.
    sharp = lambda p: (jnp.log(p) + 18.0) ** 2 / 0.02
    fit = jax.jit(lambda p: refine(sharp, p, Positive()))(jnp.asarray(1.0))
    assert fit.status == Status.CONVERGED and abs(fit.params / np.exp(-18) - 1) < 1e-5


def test_step_limit_and_non_finite():
    few = jax.jit(lambda p: refine(rosenbrock, p, Free(), max_steps=3))(jnp.array([-1.2, 1.0]))
    assert few.status == Status.STEP_LIMIT and few.steps == 3 and few.loss < 24.2
    nowhere = jax.jit(lambda p: refine(lambda x: jnp.log(x - 10.0), p, Free()))(jnp.asarray(1.0))
    assert nowhere.status == Status.NON_FINITE and nowhere.params == 1.0
    # Value finite, derivative not.
    kink = jax.jit(lambda p: refine(lambda x: jnp.sqrt(x), p, Free()))(jnp.asarray(0.0))
    assert kink.status == Status.NON_FINITE


def test_stalled():
    # A corner has no small gradient anywhere.
    fit = jax.jit(lambda p: refine(lambda x: jnp.abs(x) + x**2, p, Free()))(jnp.asarray(0.3))
    assert fit.status == Status.STALLED and abs(fit.params) < 1e-4


def test_batch_equals_loop_and_traces_once(samples, batch_fit):
    together = batch_fit(start(), samples)
    assert jnp.all(together.status == Status.CONVERGED)
    traces = []

    def loss(params, y):
        traces.append(1)
        return heavy_tails(params, y)

    alone = jax.jit(lambda p, y: refine(lambda q: loss(q, y), p, SHAPE))
    for k in range(len(samples)):
        one = alone(start(), samples[k])
        assert one.steps == together.steps[k]
        for name in SHAPE:
            np.testing.assert_allclose(one.params[name], together.params[name][k], rtol=1e-12)
    # The check of the shape, and the one evaluation in the loop.
    assert len(traces) == 2


def test_one_bad_recording_leaves_the_others_alone(samples, batch_fit):
    good = batch_fit(start(), samples)
    bad = batch_fit(start(), samples.at[2, 5].set(jnp.nan))
    assert bad.status[2] == Status.NON_FINITE and bad.loss[2] == jnp.inf
    assert bad.params["scale"][2] == 1.0
    rest = np.array([0, 1, 3])
    for a, b in zip(jax.tree.leaves(good), jax.tree.leaves(bad), strict=True):
        np.testing.assert_array_equal(a[rest], b[rest])


def test_fixed_stays_fixed(samples):
    constraints = {"centre": Fixed(), "scale": Positive()}
    fit = jax.jit(lambda p: refine(lambda q: heavy_tails(q, samples[0]), p, constraints))(start())
    assert fit.params["centre"] == 0.0 and fit.curvature.shape == (1, 1)


@pytest.mark.parametrize(
    "call, error, match",
    [
        (lambda: refine(lambda p: p, jnp.ones(2), Free()), ValueError, "`loss` must return one"),
        (lambda: refine(jnp.sum, jnp.ones(2), Fixed()), ValueError, "at least one entry"),
        (
            lambda: refine(jnp.sum, jnp.ones(2), Free(), curvature=lambda p: jnp.eye(3)),
            ValueError,
            r"`curvature\(params\)` must have shape",
        ),
        (
            lambda: refine(
                lambda p: p[0] + 0.0, (jnp.ones(()), jnp.ones((), jnp.float32)), (Free(), Free())
            ),
            TypeError,
            "one floating dtype",
        ),
        (
            lambda: refine(jnp.sum, jnp.ones(2), Free(), max_steps=0),
            ValueError,
            "`max_steps` must be at least 1",
        ),
    ],
)
def test_errors_name_what_is_wrong(user_errors, call, error, match):
    with pytest.raises(error, match=match):
        call()
