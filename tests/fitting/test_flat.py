import dataclasses

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfParams
from oscillib.fitting import parameter_names
from oscillib.fitting._flat import check_entrywise, from_flat, gather, layout, scatter, to_flat
from oscillib.parameters import Constraint, Fixed, Free, Positive


@dataclasses.dataclass(frozen=True)
class Shares(Constraint):
    """Positive shares that add up to one: mixes entries."""

    def to_free(self, value):
        return jnp.log(value[:-1] / value[-1:])

    def to_value(self, free, template):
        return jax.nn.softmax(jnp.concatenate([free, jnp.zeros_like(template[:1])]))


@dataclasses.dataclass(frozen=True)
class Backwards(Constraint):
    """Entries in reverse order with reversed sign: still entry by entry."""

    def to_free(self, value):
        return -value[::-1]

    def to_value(self, free, template):
        return -free[::-1]


def network():
    params = {
        "field": HopfParams([0.1, 0.2], [6.0, 7.0], coupling=[[0.0, 0.3], [0.4, 0.0]]),
        "noise": [jnp.ones(()), jnp.ones(2)],
    }
    constraints = {"field": params["field"].constraints(), "noise": [Positive(), Fixed()]}
    return params, constraints


def test_names_of_a_network():
    assert parameter_names(*network()) == (
        "field.growth[0]", "field.growth[1]", "field.frequency[0]", "field.frequency[1]",
        "field.saturation[0]", "field.saturation[1]", "field.coupling[0,1]", "field.coupling[1,0]",
        "noise[0]",
    )  # fmt: skip
    assert parameter_names(jnp.ones(2), Free()) == ("params[0]", "params[1]")


def test_names_of_mixed_and_permuted_entries():
    params = {"shares": jnp.array([0.2, 0.3, 0.5]), "back": jnp.zeros(2)}
    constraints = {"shares": Shares(), "back": Backwards()}
    assert parameter_names(params, constraints) == (
        "back[1]", "back[0]", "shares[free 0]", "shares[free 1]",
    )  # fmt: skip
    with pytest.raises(ValueError, match="the constraint of `shares`"):
        check_entrywise(layout(params, constraints))


def test_names_do_not_need_values():
    params, constraints = network()
    seen = []
    jax.jit(lambda p: seen.append(parameter_names(p, constraints)))(params)
    assert seen == [parameter_names(params, constraints)]


def test_flat_vector_and_back():
    params, constraints = network()
    x = to_flat(params, constraints)
    back = from_flat(params, constraints)(x)
    for a, b in zip(jax.tree.leaves(params), jax.tree.leaves(back), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-15)


def test_scatter_and_gather():
    params, constraints = network()
    leaves = layout(params, constraints)
    entries = jnp.arange(1.0, 10.0)
    others = [jnp.zeros(leaf.shape) for leaf in leaves]
    tree = scatter(leaves, entries, params, others)
    np.testing.assert_array_equal(tree["field"].coupling, [[0.0, 7.0], [8.0, 0.0]])
    np.testing.assert_array_equal(gather(leaves, tree), entries)
