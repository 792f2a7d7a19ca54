import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.encoders import FreeGaussian, Prior
from oscillib.fields import HopfParams
from oscillib.fitting import parameter_names
from oscillib.parameters import Fixed, Free, Interval, Positive, unconstrain


HOPF = HopfParams([0.1, -0.2], [6.0, 5.0], shear=[0.3, 0.4], coupling=[[0.0, 0.5], [0.2, 0.0]])
TREE = {"a": jnp.array([2.0, 3.0]), "b": jnp.array(0.5), "c": jnp.array([7.0])}
RULES = {"a": Positive(), "b": Interval(0.0, 1.0), "c": Fixed()}


def test_middle_widths_and_the_way_back():
    prior = Prior(TREE, RULES, sd=0.4)
    np.testing.assert_allclose(prior.law.mean, [np.log(2), np.log(3), 0], atol=1e-15)
    np.testing.assert_array_equal(prior.law.factor, 0.4 * np.eye(3))
    out = prior.params(prior.law.mean + jnp.array([1.0, 0.0, 2.0]))
    np.testing.assert_allclose(out["a"], [2 * np.e, 3], rtol=1e-14)
    np.testing.assert_allclose(out["b"], 1 / (1 + np.exp(-2.0)), rtol=1e-14)
    np.testing.assert_array_equal(out["c"], [7.0])
    np.testing.assert_allclose(prior.free(out), prior.law.mean + jnp.array([1.0, 0.0, 2.0]))


def test_entries_are_in_the_order_of_their_names():
    prior = Prior(HOPF, HOPF.constraints(), sd=1.0)
    names = parameter_names(HOPF, HOPF.constraints())
    assert len(names) == prior.size == 8
    assert names[3].endswith("frequency[1]")
    np.testing.assert_allclose(prior.law.mean[3], np.log(5.0))


def test_a_width_for_each_leaf():
    sd = {"a": jnp.array([0.1, 0.2]), "b": 0.3, "c": None}
    np.testing.assert_array_equal(
        jnp.diagonal(Prior(TREE, RULES, sd=sd).law.factor), [0.1, 0.2, 0.3]
    )
    free = unconstrain(HOPF, HOPF.constraints())
    wide = Prior(HOPF, HOPF.constraints(), sd=jax.tree.map(lambda x: jnp.full_like(x, 2.0), free))
    np.testing.assert_array_equal(wide.law.factor, 2 * np.eye(8))


def test_it_passes_through_transformations_and_never_retraces():
    traces = []

    @jax.jit
    def params(prior, free):
        traces.append(free)
        return jax.vmap(prior.params)(free)

    for middle in (1.0, 2.0):
        prior = Prior(TREE | {"c": jnp.array([middle])}, RULES, sd=middle)
        out = params(prior, jnp.zeros((4, 3)))
        np.testing.assert_array_equal(out["c"], np.full((4, 1), middle))
    assert len(traces) == 1
    correlated = FreeGaussian(prior.law.mean, jnp.tril(jnp.ones((3, 3))))
    other = eqx.tree_at(lambda p: p.law, prior, correlated)
    np.testing.assert_array_equal(other.law.covariance[0], [1, 1, 1])


def test_short_floats():
    short = jax.tree.map(lambda x: x.astype(jnp.float32), TREE)
    prior = Prior(short, RULES, sd=0.4)
    assert prior.law.mean.dtype == prior.law.factor.dtype == jnp.float32
    assert prior.params(prior.law.mean)["a"].dtype == jnp.float32


@pytest.mark.parametrize(
    "error, match, change",
    [
        (ValueError, "`sd` must be above 0; got 0.0", {"sd": 0.0}),
        (ValueError, "`sd` must be above 0; got nan", {"sd": np.nan}),
        (ValueError, "`sd` must be one number, or have the structure", {"sd": {"a": 1.0}}),
        (
            ValueError,
            r"`sd` must hold a number, or an array of shape \(2,\).*got shape \(3,\)",
            {"sd": {"a": jnp.ones(3), "b": 1.0, "c": None}},
        ),
        (
            ValueError,
            "`constraints` fix every parameter",
            {"constraints": dict.fromkeys("abc", Fixed())},
        ),
        (ValueError, "must lie strictly inside", {"params": TREE | {"b": jnp.array(2.0)}}),
        (
            TypeError,
            "`params` must be of one dtype where free; got float32, float64",
            {"params": TREE | {"b": jnp.array(0.5, jnp.float32)}},
        ),
    ],
)
def test_errors(user_errors, error, match, change):
    with pytest.raises(error, match=match):
        Prior(**({"params": TREE, "constraints": RULES, "sd": 1.0} | change))


def test_wrong_sizes(user_errors):
    prior = Prior(TREE, RULES, sd=1.0)
    with pytest.raises(ValueError, match=r"`free` must have shape \(free,\) = \(3\)"):
        prior.params(jnp.zeros(4))
    with pytest.raises(ValueError, match="`params, flattened,` must have shape"):
        prior.free(TREE | {"a": jnp.ones(3)})
    with pytest.raises(ValueError, match="structure"):
        Prior({"a": jnp.ones(1)}, {"b": Free()}, sd=1.0)
