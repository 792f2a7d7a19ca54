from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import optax
import pytest

from oscillib.fields import HopfParams
from oscillib.observe import ReadoutParams
from oscillib.parameters import (
    Constraint,
    Fixed,
    Free,
    Interval,
    Positive,
    all_finite,
    constrain,
    unconstrain,
)


PARAMS = HopfParams([0.2, -0.1], [6.0, 6.5], coupling=[[0.5, 0.1], [0.2, -0.3]], gain=2.0)


def assert_trees_close(got, expected):
    assert jax.tree.structure(got) == jax.tree.structure(expected)
    close = lambda a, b: np.testing.assert_allclose(a, b, rtol=1e-14)
    jax.tree.map(close, got, expected)


def test_nested_tree_goes_there_and_back():
    params = {"field": PARAMS, "readout": (ReadoutParams([2.0, 3.0]), jnp.array(0.3))}
    constraints = {
        "field": PARAMS.constraints(),
        "readout": (params["readout"][0].constraints(), Interval(0.0, 1.0)),
    }
    free = unconstrain(params, constraints)
    assert free["field"].gain is None
    assert free["field"].coupling.shape == (2,)
    assert_trees_close(constrain(free, constraints, params), params)


def test_optimiser_moves_all_but_the_fixed():
    # The diagonal of the coupling and the fixed leaves keep every bit.
    constraints = PARAMS.constraints()
    free = unconstrain(PARAMS, constraints)
    optimiser = optax.sgd(0.1)

    def loss(free):
        leaves = jax.tree.leaves(constrain(free, constraints, PARAMS))
        return sum(jnp.sum(leaf**2) for leaf in leaves)

    gradient = jax.grad(loss)(free)
    assert gradient.shear is None
    assert gradient.gain is None
    updates: Any
    updates, _ = optimiser.update(gradient, optimiser.init(free), free)
    moved = constrain(optax.apply_updates(free, updates), constraints, PARAMS)
    for name in ("growth", "frequency", "saturation"):
        assert jnp.all(getattr(moved, name) != getattr(PARAMS, name))
    assert jnp.all((moved.coupling == PARAMS.coupling) == jnp.eye(2, dtype=bool))
    np.testing.assert_array_equal(moved.shear, PARAMS.shear)
    np.testing.assert_array_equal(moved.gain, PARAMS.gain)
    expected = PARAMS.frequency * jnp.exp(updates.frequency)
    np.testing.assert_allclose(moved.frequency, expected, rtol=1e-14)


class Ordered(Constraint):
    """Strictly increasing: the first entry and the logarithms of the steps."""

    def to_free(self, value):
        return jnp.concatenate([value[:1], jnp.log(jnp.diff(value))])

    def to_value(self, free, template):
        return jnp.cumsum(jnp.concatenate([free[:1], jnp.exp(free[1:])]))


def test_constraint_of_ones_own():
    params, constraints = {"a": jnp.array([1.0, 3.0, 3.5])}, {"a": Ordered()}
    free = unconstrain(params, constraints)
    assert_trees_close(constrain(free, constraints, params), params)
    moved = constrain({"a": free["a"] - 7}, constraints, params)
    assert jnp.all(jnp.diff(moved["a"]) > 0)


def test_usual_constraint_is_changed_with_tree_at():
    constraints = eqx.tree_at(lambda c: c.shear, PARAMS.constraints(), Free())
    np.testing.assert_array_equal(unconstrain(PARAMS, constraints).shear, PARAMS.shear)


def test_all_finite():
    assert all_finite({"a": jnp.ones(2), "b": None, "c": jnp.array(3), "d": 1.0})
    assert all_finite(())
    assert not all_finite({"a": jnp.ones(2), "b": (jnp.array([0.0, jnp.inf]),)})
    assert not jax.jit(all_finite)({"a": jnp.nan})


def test_value_outside_its_constraint():
    bad = eqx.tree_at(lambda p: p.frequency, PARAMS, jnp.array([6.0, -1.0]))
    with pytest.raises(ValueError, match=r"`params.frequency` must lie strictly inside.*Fix"):
        unconstrain(bad, bad.constraints())
    # Inside `jit` nothing raises: the result is not finite.
    assert not all_finite(jax.jit(lambda p: unconstrain(p, PARAMS.constraints()))(bad))
    with pytest.raises(ValueError, match=r"`params\['a'\]` must lie strictly inside"):
        unconstrain({"a": jnp.ones(())}, {"a": Interval(0.0, 1.0)})


@pytest.mark.parametrize(
    "constraints, match",
    [
        ({"a": Positive()}, r"`constraints` must have the structure of `params`"),
        ({"a": Positive(), "c": Positive()}, r"`constraints` must have the structure"),
        ({"a": Positive(), "b": 3.0}, r"`constraints\['b'\]` must be a Constraint .*; got 3.0"),
        ({"a": Positive(), "b": Fixed}, r"`constraints\['b'\]` must be a Constraint"),
        ({"a": Positive(), "b": None}, r"`constraints` must have the structure"),
    ],
)
def test_errors_of_structure(user_errors, constraints, match):
    params = {"a": jnp.ones(2), "b": jnp.ones(())}
    with pytest.raises(ValueError, match=match):
        unconstrain(params, constraints)
    with pytest.raises(ValueError, match=match):
        constrain({"a": jnp.ones(2), "b": jnp.ones(())}, constraints, params)
