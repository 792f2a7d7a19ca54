import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats

from oscillib.fitting import describe_directions, laplace, refine
from oscillib.parameters import Fixed, Free, Interval, OffDiagonal, Positive


def test_linear_regression():
    rng = np.random.default_rng(1)
    x = np.stack([np.ones(40), np.linspace(-1, 2, 40), rng.normal(size=40)], axis=1)
    y = x @ [0.5, -1.0, 2.0] + 0.3 * rng.normal(size=40)
    covariance = 0.09 * np.linalg.inv(x.T @ x)
    best = np.linalg.lstsq(x, y, rcond=None)[0]
    design, seen = jnp.asarray(x), jnp.asarray(y)
    loss = lambda b: jnp.sum((seen - design @ b) ** 2) / 0.18
    out = jax.jit(lambda b: laplace(loss, b, Free(), level=0.95))(jnp.asarray(best))
    # Closed form: s^2 (X'X)^-1.
    np.testing.assert_allclose(out.covariance, covariance, rtol=1e-10)
    np.testing.assert_allclose(out.standard_error, np.sqrt(np.diag(covariance)), rtol=1e-10)
    half = scipy.stats.norm.ppf(0.975) * np.sqrt(np.diag(covariance))
    np.testing.assert_allclose(out.lower, best - half, rtol=1e-8)
    np.testing.assert_allclose(out.upper, best + half, rtol=1e-8)
    assert out.distance < 1e-10 and not out.refused.any()


def test_logistic_regression_as_statsmodels():
    import statsmodels.api as sm

    rng = np.random.default_rng(2)
    x = np.column_stack([np.ones(200), rng.normal(size=(200, 2))])
    y = (rng.random(200) < 1 / (1 + np.exp(-(x @ [0.3, 1.0, -0.7])))).astype(float)
    expected = sm.Logit(y, x).fit(disp=False, tol=1e-12)
    design, seen = jnp.asarray(x), jnp.asarray(y)

    def loss(b):
        eta = design @ b
        return jnp.sum(jnp.logaddexp(0.0, eta) - seen * eta)

    def fit(b):
        found = refine(loss, b, Free())
        return found, laplace(loss, found.params, Free(), curvature=found.curvature)

    found, out = jax.jit(fit)(jnp.zeros(3))
    error = np.abs(np.asarray(out.standard_error) / expected.bse - 1).max()
    print("standard errors against statsmodels, largest relative difference:", error)
    assert error < 1e-6
    np.testing.assert_allclose(found.params, expected.params, atol=1e-6)
    assert abs(found.loss + expected.llf) < 1e-9


Y = 2.0 + 3.0 * jnp.asarray(np.random.default_rng(5).normal(size=60))
CONSTRAINTS = {
    "coupling": OffDiagonal(),
    "fraction": Interval(0.0, 1.0),
    "offset": Fixed(),
    "spread": Positive(),
}
CURVES = jnp.array([40.0, 10.0])


def mixed_loss(params, y):
    """Normal data with a known optimum for everything else."""
    z = (y - 2.0) / params["spread"]
    edges = jnp.stack([params["coupling"][0, 1] - 0.3, params["coupling"][1, 0] + 0.2])
    odds = jnp.log(params["fraction"]) - jnp.log1p(-params["fraction"])
    return (
        jnp.sum(z**2) / 2
        + y.size * jnp.log(params["spread"])
        + jnp.sum(CURVES.astype(y.dtype) * edges**2) / 2
        + 8 * (odds - 2) ** 2
        + params["offset"] * 0
    )


def mixed_params(dtype=jnp.float64):
    return {
        "coupling": jnp.array([[0.0, 0.3], [-0.2, 0.0]], dtype),
        "fraction": jax.nn.sigmoid(jnp.asarray(2.0, dtype)),
        "offset": jnp.asarray(7.0, dtype),
        "spread": jnp.sqrt(jnp.mean((Y.astype(dtype) - 2) ** 2)),
    }


@pytest.mark.parametrize("dtype, error", [(jnp.float64, 1e-10), (jnp.float32, 1e-3)])
def test_every_constraint(dtype, error):
    y, params = Y.astype(dtype), mixed_params(dtype)
    out = jax.jit(lambda p: laplace(lambda q: mixed_loss(q, y), p, CONSTRAINTS))(params)
    z = scipy.stats.norm.ppf(0.95)
    spread = float(params["spread"])
    # Closed forms: the information about log spread is 2 n, about the logit 16.
    np.testing.assert_allclose(out.standard_error["spread"], spread / np.sqrt(120), rtol=error)
    np.testing.assert_allclose(out.lower["spread"], spread * np.exp(-z / np.sqrt(120)), rtol=error)
    np.testing.assert_allclose(out.upper["spread"], spread * np.exp(z / np.sqrt(120)), rtol=error)
    logit = lambda v: 1 / (1 + np.exp(-v))
    np.testing.assert_allclose(out.lower["fraction"], logit(2 - z / 4), rtol=error)
    np.testing.assert_allclose(out.upper["fraction"], logit(2 + z / 4), rtol=error)
    slope = logit(2.0) * (1 - logit(2.0))
    np.testing.assert_allclose(out.standard_error["fraction"], slope / 4, rtol=error)
    np.testing.assert_allclose(
        out.standard_error["coupling"], [[0, 40**-0.5], [10**-0.5, 0]], rtol=error
    )
    assert out.lower["offset"] == out.upper["offset"] == 7.0 and not out.fitted["offset"]
    assert out.standard_error["offset"] == 0.0
    np.testing.assert_array_equal(out.fitted["coupling"], ~np.eye(2, dtype=bool))
    assert np.all(np.diag(out.lower["coupling"]) == 0)
    expected = [1 / 40, 1 / 10, slope**2 / 16, spread**2 / 120]
    np.testing.assert_allclose(out.covariance, np.diag(expected), rtol=error, atol=1e-5 * error)
    dtypes = {leaf.dtype for leaf in jax.tree.leaves(out)}
    assert dtypes == {jnp.dtype(dtype), jnp.dtype(bool)}


def test_unidentifiable_pair_is_refused_and_the_rest_is_not():
    constraints = {"gain": Positive(), "noise": Positive(), "centre": Free()}

    def loss(p, y):
        spread = p["gain"] * p["noise"]
        return jnp.sum(((y - p["centre"]) / spread) ** 2) / 2 + y.size * jnp.log(spread)

    def fit(params, y):
        found = refine(lambda q: loss(q, y), params, constraints)
        return found, laplace(lambda q: loss(q, y), found.params, constraints)

    start = {"gain": jnp.asarray(1.0), "noise": jnp.asarray(0.5), "centre": jnp.asarray(0.0)}
    batch = jax.jit(jax.vmap(fit, in_axes=(None, 0)))
    ys = jnp.stack([Y, Y[::-1] * 2, Y + 1])
    found, out = batch(start, ys)
    assert jnp.all(out.refused["gain"] & out.refused["noise"] & ~out.refused["centre"])
    for tree in (out.lower, out.upper):
        assert jnp.all(jnp.isnan(tree["gain"]) & jnp.isnan(tree["noise"]))
    assert jnp.all(jnp.isinf(out.standard_error["gain"]))
    # The centre is as it would be without the pair: s / sqrt(n).
    np.testing.assert_allclose(
        out.standard_error["centre"], np.std(ys, axis=1) / np.sqrt(60), rtol=1e-6
    )
    directions, params = jax.tree.map(lambda v: v[0], (out.directions, found.params))
    (words,) = describe_directions(directions, params, constraints)
    # Which of two equals comes first is a matter of rounding.
    pairs = ("`gain` and `noise` trade off", "`noise` and `gain` trade off")
    assert any(pair in words for pair in pairs)
    # A recording that is lost refuses everything of its own, and nothing of the others.
    _, lost = batch(start, ys.at[1, 0].set(jnp.nan))
    assert lost.refused["centre"][1] and jnp.isnan(lost.lower["centre"][1])
    np.testing.assert_array_equal(lost.lower["centre"][::2], out.lower["centre"][::2])


def test_supplied_matrix_and_distance():
    loss = lambda b: 2 * (b[0] - 1) ** 2 + 8 * b[1] ** 2
    b = jnp.array([1.5, 0.0])
    matrix = jnp.diag(jnp.array([4.0, 16.0]))
    out = jax.jit(lambda b: laplace(loss, b, Free(), curvature=matrix))(b)
    # Half a unit off, at a standard error of a half.
    np.testing.assert_allclose(out.distance, 1.0, rtol=1e-12)
    np.testing.assert_allclose(out.standard_error, [0.5, 0.25], rtol=1e-12)


@pytest.mark.parametrize(
    "call, match",
    [
        (lambda: laplace(jnp.sum, jnp.ones(2), Free(), level=1.0), "`level` must lie strictly"),
        (lambda: laplace(jnp.sum, jnp.ones(2), Free(), curvature=jnp.eye(3)), "`curvature` must"),
        (
            lambda: laplace(jnp.sum, jnp.ones(2), Free(), curvature="fisher"),  # pyright: ignore
            "'hessian' or a",
        ),
        (lambda: laplace(lambda p: p, jnp.ones(2), Free()), "`loss` must return one"),
    ],
)
def test_errors_name_what_is_wrong(user_errors, call, match):
    with pytest.raises(ValueError, match=match):
        call()
