import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import describe_directions, laplace, refine, weak_directions
from oscillib.parameters import Free, Interval, Positive


def triple(dtype=jnp.float64):
    names = ("gain", "noise", "rate")
    params = {k: jnp.asarray(v, dtype) for k, v in zip(names, (2.0, 0.5, 3.0), strict=True)}
    return params, dict.fromkeys(names, Positive())


@pytest.fixture(scope="module")
def find():
    """Weak directions of three positive parameters."""
    params, constraints = triple()
    return jax.jit(lambda matrix: weak_directions(matrix, params, constraints))


RIDGE = jnp.array([[50.0, 50.0, 10.0], [50.0, 50.0, 10.0], [10.0, 10.0, 25.0]])


def test_pair_is_named_and_the_rest_keeps_its_covariance(find):
    params, constraints = triple()
    found = find(RIDGE)
    np.testing.assert_array_equal(found.weak, [True, False, False])
    np.testing.assert_array_equal(found.refused, [True, True, False])
    # Gain and noise act as one parameter: inverse of [[50, 10], [10, 25]].
    np.testing.assert_allclose(found.covariance[2, 2], 50 / (50 * 25 - 100), rtol=1e-10)
    (words,) = describe_directions(found, params, constraints)
    assert words.startswith("`gain` and `noise` trade off: ")
    assert "raising `gain` by 1 percent and lowering `noise` by 1 percent" in words or (
        "raising `noise` by 1 percent and lowering `gain` by 1 percent" in words
    )


def test_a_well_known_set_is_left_alone(find):
    params, constraints = triple()
    matrix = RIDGE + 5 * jnp.eye(3)
    found = find(matrix)
    assert not found.weak.any() and not found.refused.any() and not found.negative.any()
    np.testing.assert_allclose(found.covariance, jnp.linalg.inv(matrix), rtol=1e-10)
    assert describe_directions(found, params, constraints) == ()


def test_units_of_free_parameters_do_not_matter():
    unit = jnp.array([1.0, 1e6, 1e-6])
    matrix = jnp.array([[4.0, 4.0, 1.0], [4.0, 4.0 + 1e-9, 1.0], [1.0, 1.0, 2.0]])
    find = jax.jit(lambda m, p: weak_directions(m, p, [Free()] * 3))
    for information in (matrix, matrix + jnp.eye(3)):
        a = find(information, [jnp.ones(())] * 3)
        b = find(information / unit[:, None] / unit[None, :], list(unit))
        np.testing.assert_array_equal(a.refused, b.refused)
        np.testing.assert_allclose(a.information, b.information, atol=1e-12)
        kept = ~np.asarray(a.refused)
        back = b.covariance / unit[:, None] / unit[None, :]
        np.testing.assert_allclose(a.covariance[kept][:, kept], back[kept][:, kept], rtol=1e-10)


def test_a_parameter_without_any_effect(find):
    params, constraints = triple()
    found = find(jnp.diag(jnp.array([9.0, 0.0, 4.0])))
    np.testing.assert_array_equal(found.refused, [False, True, False])
    np.testing.assert_allclose(found.covariance, np.diag([1 / 9, 0, 1 / 4]), rtol=1e-12)
    (words,) = describe_directions(found, params, constraints)
    assert words.startswith("`noise` is hardly informed: raising `noise` by 1 percent") or (
        words.startswith("`noise` is hardly informed: lowering `noise` by 1 percent")
    )


def test_limit_and_widths(find):
    # A standard error of 20 e-folds is no knowledge; against a prior of width 5 it is some.
    params, constraints = triple()
    matrix = jnp.diag(jnp.array([9.0, 1 / 400, 4.0]))
    np.testing.assert_array_equal(find(matrix).refused, [False, True, False])
    wide = weak_directions(matrix, params, constraints, widths=jnp.array([1.0, 5.0, 1.0]))
    assert not wide.refused.any()
    np.testing.assert_allclose(wide.covariance[1, 1], 400, rtol=1e-12)
    assert not weak_directions(matrix, params, constraints, limit=30.0).refused.any()


def test_magnitude_is_that_of_the_array():
    # An entry near zero, known to 0.3 beside one of magnitude 1: poor, but knowledge.
    params, constraints = jnp.array([0.01, 1.0]), Free()
    correlated = jnp.linalg.inv(jnp.array([[0.09, 0.0899], [0.0899, 0.09]]))
    find = jax.jit(lambda m: weak_directions(m, params, constraints))
    assert not find(correlated).refused.any()


def test_negative_curvature(find):
    params, constraints = triple()
    found = find(jnp.diag(jnp.array([9.0, 4.0, -2.0])))
    np.testing.assert_array_equal(found.negative, [True, False, False])
    np.testing.assert_array_equal(found.refused, [False, False, True])
    (words,) = describe_directions(found, params, constraints)
    assert words.startswith("`rate`: not at a minimum")


def test_two_pairs_are_told_apart():
    pair = jnp.ones((2, 2))
    matrix = jnp.kron(jnp.eye(2), pair) * jnp.array([[4.0, 4.0, 4.0, 4.0]]).T
    params = {"a": jnp.ones(2), "b": jnp.ones(2)}
    # Any mixture of the two directions is as good an eigenvector.
    constraints = {"a": Positive(), "b": Positive()}
    found = jax.jit(lambda m: weak_directions(m, params, constraints))(matrix)
    c, s = np.cos(0.7), np.sin(0.7)
    turned = jnp.asarray([[c, s], [-s, c]]) @ found.vectors[:2]
    found = found._replace(vectors=found.vectors.at[:2].set(turned))
    words = describe_directions(found, params, constraints)
    pairs = sorted(w.split(" trade off")[0] for w in words)
    assert {frozenset(p.split(" and ")) for p in pairs} == {
        frozenset(("`a[0]`", "`a[1]`")), frozenset(("`b[0]`", "`b[1]`")),
    }  # fmt: skip


def test_zero_value_and_many_parameters_in_words():
    params = {"x": jnp.zeros(8)}
    found = jax.jit(lambda m: weak_directions(m, params, {"x": Free()}))(jnp.ones((8, 8)))
    assert found.weak.sum() == 7
    ones = found._replace(
        information=jnp.zeros(8),
        weak=jnp.arange(8) == 0,
        unresolved=jnp.arange(8) == 0,
        vectors=jnp.ones((8, 8)),
    )
    (words,) = describe_directions(ones, params, {"x": Free()})
    assert "and 2 more trade off" in words and "raising `x[0]` by 0.01" in words


@pytest.mark.long
def test_unidentifiable_product_after_a_fit():
    # Only the product of two free parameters enters: the Hessian's null direction is curved, and
    # what is left of the gradient gives it a curvature of either sign. The less noise there is,
    # the more of that counts.
    rng = np.random.default_rng(3)
    times = jnp.linspace(0.0, 6.0, 40)
    constraints = {"a": Free(), "b": Free(), "phase": Interval(-3.0, 3.0)}

    def both(a, y, noise):
        params = {"a": a, "b": jnp.asarray(1.5), "phase": jnp.asarray(0.8)}
        wave = lambda p: p["a"] * p["b"] * jnp.sin(times + p["phase"])
        loss = lambda p: jnp.sum(((y - wave(p)) / noise) ** 2) / 2
        return laplace(loss, refine(loss, params, constraints).params, constraints)

    noise = jnp.repeat(jnp.array([1.0, 1e-2, 1e-4]), 20)
    y = 6 * jnp.sin(times + 1)[None] + noise[:, None] * jnp.asarray(rng.normal(size=(60, 40)))
    out = jax.jit(jax.vmap(both))(jnp.asarray(1 + 3 * rng.random(60)), y, noise)
    assert jnp.all(out.refused["a"] & out.refused["b"] & ~out.refused["phase"])
    assert not out.directions.negative.any()
    # Closed form: information about the phase, apart from the amplitude.
    error = noise / (6 * jnp.sqrt(jnp.sum(jnp.cos(times + 1) ** 2)))
    correlation = jnp.corrcoef(jnp.stack([jnp.cos(times + 1), jnp.sin(times + 1)]))[0, 1]
    assert abs(correlation) < 0.2
    ratio = out.standard_error["phase"] / error
    assert jnp.all((ratio > 0.8) & (ratio < 1.25))


def test_jit_vmap_float32_and_non_finite():
    params, constraints = triple(jnp.float32)
    matrices = jnp.stack([RIDGE, RIDGE + 5 * jnp.eye(3), RIDGE * jnp.nan]).astype(jnp.float32)
    found = jax.jit(jax.vmap(lambda m: weak_directions(m, params, constraints)))(matrices)
    assert found.covariance.dtype == jnp.float32
    np.testing.assert_array_equal(
        found.refused, [[True, True, False], [False, False, False], [True, True, True]]
    )
    assert jnp.all(jnp.isfinite(found.covariance))
    np.testing.assert_allclose(found.covariance[0, 2, 2], 50 / (50 * 25 - 100), rtol=1e-4)


def test_errors_name_what_is_wrong(user_errors):
    params, constraints = triple()
    with pytest.raises(ValueError, match="`information` must have shape"):
        weak_directions(jnp.eye(2), params, constraints)
    with pytest.raises(ValueError, match="`gradient` must have shape"):
        weak_directions(jnp.eye(3), params, constraints, gradient=jnp.ones(2))
    with pytest.raises(ValueError, match="`widths` must have shape"):
        weak_directions(jnp.eye(3), params, constraints, widths=jnp.ones(2))
