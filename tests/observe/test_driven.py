import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import rk4, rollout
from oscillib.observe import (
    BalloonParams,
    BalloonReadout,
    LowPassParams,
    ObservedParams,
    balloon,
    balloon_steady,
    low_pass,
    observed,
)
from oscillib.parameters import Free, Positive


HOPF = HopfParams([0.5, 0.2], [6.0, 5.0], coupling=[[0.0, 0.3], [0.1, 0.0]])


def test_the_field_is_left_as_it_is():
    params = ObservedParams(HOPF, LowPassParams([2.0, 3.0]))
    y = jnp.asarray(np.random.default_rng(0).normal(size=(3, 2)))
    out = observed(HopfNetwork(), low_pass, rows=1, component=1)(0.0, y, params)
    np.testing.assert_array_equal(out[:2], HopfNetwork()(0.0, y[:2], HOPF))
    np.testing.assert_allclose(out[2], (y[1] - y[2]) / np.array([2.0, 3.0]), rtol=1e-14)


def test_constant_activity_reaches_the_steady_signal():
    # Activity 0.1 held by a field that does not move: signal 0.010864022259; Friston, Harrison &
    # Penny 2003 (parameter values from memory), steady state in closed form.
    still = observed(lambda t, y, params: 0 * y, balloon, rows=4)
    params = ObservedParams(jnp.asarray(0.0), BalloonParams([1.0]))
    start = jnp.concatenate([jnp.array([[0.1]]), jnp.zeros((4, 1))])
    end = jax.jit(lambda y: rollout(rk4(still), params, y, 0.1, 800)[-1])(start)
    np.testing.assert_allclose(end[1:], balloon_steady(end[0], params.observer), rtol=0, atol=1e-9)
    signal = BalloonReadout(signal="classic")(end, params.observer)
    assert abs(signal[0] - 0.010864022259) < 1e-9


def test_constraints():
    constraints = ObservedParams({"a": jnp.ones(2)}, LowPassParams([2.0])).constraints()
    assert constraints.field == {"a": Free()} and constraints.observer.time == Positive()


def test_errors(user_errors):
    params = ObservedParams(HOPF, LowPassParams([2.0, 3.0]))
    with pytest.raises(ValueError, match=r"`component` must lie in 0 \.\.\. 1"):
        observed(HopfNetwork(), low_pass, rows=1, component=2)(0.0, jnp.zeros((3, 2)), params)
    with pytest.raises(ValueError, match="`rows` must be at least 1"):
        observed(HopfNetwork(), low_pass, rows=0)
    flat = lambda t, z, drive, p: z[0]
    with pytest.raises(ValueError, match=r"`observer\(t, z, drive, params\)` must have shape"):
        observed(HopfNetwork(), flat, rows=1)(0.0, jnp.zeros((3, 2)), params)
