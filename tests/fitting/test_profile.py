import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.optimize
import scipy.stats

from oscillib.fitting import Status, laplace, profile
from oscillib.parameters import Free, Interval, Positive


Y = 2.0 + 3.0 * np.random.default_rng(5).normal(size=20)
CONSTRAINTS = {"centre": Free(), "spread": Positive()}


def loss(params, y):
    z = (y - params["centre"]) / params["spread"]
    return jnp.sum(z**2) / 2 + y.size * jnp.log(params["spread"])


def best(y, dtype=jnp.float64):
    return {"centre": jnp.asarray(y.mean(), dtype), "spread": jnp.asarray(y.std(), dtype)}


@pytest.fixture(scope="module")
def profile_centre():
    """Profile of the centre of normal data, spread unknown, over a batch of recordings."""

    def of(params, y):
        return profile(lambda q: loss(q, y), params, CONSTRAINTS, "centre", points=12)

    return jax.jit(jax.vmap(of))


def test_parabola_gives_the_laplace_interval():
    matrix = jnp.array([[2.0, 0.6, 0.1], [0.6, 1.0, -0.3], [0.1, -0.3, 3.0]])
    q = lambda v: v @ matrix @ v / 2

    def both(params):
        return (
            laplace(q, params, Free()),
            profile(q, params, Free(), 1),
            profile(q, params, Free(), "params[1]", grid=jnp.linspace(-6.0, 6.0, 9)),
        )

    expected, default, given = jax.jit(both)(jnp.zeros(3))
    for out in (default, given):
        assert jnp.all(out.status == Status.CONVERGED) and not out.beaten
        assert not out.lower_open and not out.upper_open
        np.testing.assert_allclose(out.lower, expected.lower[1], rtol=1e-8)
        np.testing.assert_allclose(out.upper, expected.upper[1], rtol=1e-8)
    np.testing.assert_array_equal(given.grid, jnp.linspace(-6.0, 6.0, 9))


def test_normal_data_and_a_lost_recording(profile_centre):
    ys = np.stack([Y, Y[::-1] - 7, Y * 2])
    params = jax.tree.map(lambda *v: jnp.stack(v), *[best(y) for y in ys])
    out = profile_centre(params, jnp.asarray(ys))
    assert jnp.all(out.status == Status.CONVERGED) and not out.beaten.any()
    # Closed form: n log(1 + (c - mean)^2 / var) = chi-square quantile.
    q = scipy.stats.chi2.ppf(0.9, 1)
    half = ys.std(axis=1) * np.sqrt(np.expm1(q / 20))
    np.testing.assert_allclose(out.lower, ys.mean(axis=1) - half, atol=1e-3 * half.min())
    np.testing.assert_allclose(out.upper, ys.mean(axis=1) + half, atol=1e-3 * half.min())
    shift = np.asarray(out.grid) - ys.mean(axis=1)[:, None]
    exact = 10 * np.log(ys.var(axis=1)[:, None] + shift**2) + 10
    np.testing.assert_allclose(out.loss, exact, rtol=1e-9)

    lost = profile_centre(params, jnp.asarray(ys).at[1, 3].set(jnp.nan))
    assert jnp.all(lost.status[1] == Status.NON_FINITE)
    assert lost.lower_open[1] and lost.upper_open[1] and lost.upper[1] == jnp.inf
    for a, b in zip(jax.tree.leaves(out), jax.tree.leaves(lost), strict=True):
        np.testing.assert_array_equal(a[::2], b[::2])


def test_positive_parameter_alone():
    # Only the spread: its likelihood is skewed, and the interval not symmetric about the estimate.
    v = float(Y.std())
    only = lambda s: 20 * (v / s) ** 2 / 2 + 20 * jnp.log(s)
    out = jax.jit(lambda p: profile(only, p, Positive(), 0, points=15))(jnp.asarray(v))
    rise = lambda s: 20 * ((v / s) ** 2 - 1) / 2 + 20 * np.log(s / v)
    q = scipy.stats.chi2.ppf(0.9, 1) / 2
    root = lambda a, b: scipy.optimize.root_scalar(lambda s: rise(s) - q, bracket=(a, b)).root
    np.testing.assert_allclose(out.lower, root(0.1 * v, v), rtol=5e-4)
    np.testing.assert_allclose(out.upper, root(v, 10 * v), rtol=5e-4)


def test_unidentifiable_pair_is_open():
    constraints = {"gain": Positive(), "noise": Positive(), "centre": Free()}

    def pair(p):
        return loss({"centre": p["centre"], "spread": p["gain"] * p["noise"]}, jnp.asarray(Y))

    params = {
        "gain": jnp.asarray(2.0),
        "noise": jnp.asarray(Y.std() / 2),
        "centre": jnp.asarray(Y.mean()),
    }
    out = jax.jit(lambda p: profile(pair, p, constraints, "gain", points=4))(params)
    assert out.lower_open and out.upper_open
    assert out.lower == -jnp.inf and out.upper == jnp.inf
    np.testing.assert_allclose(out.loss, pair(params), rtol=1e-12)


def test_start_that_is_no_optimum_is_told(profile_centre):
    factors = jnp.array([1.0, 1.3, 0.8])
    off = {"centre": jnp.full(3, Y.mean()), "spread": factors * Y.std()}
    out = profile_centre(off, jnp.stack([jnp.asarray(Y)] * 3))
    np.testing.assert_array_equal(out.beaten, [False, True, True])


def test_float32():
    y = jnp.asarray(Y, jnp.float32)
    run = lambda p: profile(lambda q: loss(q, y), p, CONSTRAINTS, "spread", points=4)
    out = jax.jit(run)(best(Y, jnp.float32))
    assert out.lower.dtype == out.grid.dtype == jnp.float32
    assert not out.lower_open and not out.upper_open
    assert 0.6 < float(out.lower) / Y.std() < 0.9 < 1.1 < float(out.upper) / Y.std() < 1.6


@pytest.mark.parametrize(
    "call, match",
    [
        (lambda f, p, c: profile(f, p, c, "center"), "`entry` must be one of centre, spread"),
        (lambda f, p, c: profile(f, p, c, 2), "`entry` must be below 2"),
        (lambda f, p, c: profile(f, p, c, 0, level=90), "`level` must lie strictly"),
        (lambda f, p, c: profile(f, p, c, 0, grid=[1.0, 0.0]), "`grid` must be increasing"),
        (lambda f, p, c: profile(f, p, c, 1, grid=[-1.0, 2.0]), "`grid` must be within"),
    ],
)
def test_errors_name_what_is_wrong(user_errors, call, match):
    with pytest.raises(ValueError, match=match):
        call(lambda q: loss(q, jnp.asarray(Y)), best(Y), CONSTRAINTS)


def test_interval_constraint_open_side_is_infinite():
    # Flat towards the upper end: no cut there.
    f = lambda p: 6 * (1 - p) ** 4
    grid = jnp.linspace(0.1, 0.95, 8)
    out = jax.jit(lambda p: profile(f, p, Interval(0.0, 1.0), 0, grid=grid))(jnp.asarray(0.9))
    assert out.upper_open and out.upper == jnp.inf and not out.lower_open
