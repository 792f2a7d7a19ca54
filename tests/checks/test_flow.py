import jax.numpy as jnp
import pytest

from oscillib.checks import check_flow
from oscillib.fields import HopfNetwork, HopfParams


FIELD = HopfNetwork()
PARAMS = HopfParams([0.4, -0.3], [3.0, 4.0], shear=[0.5, 0.2], coupling=[[0.0, 0.8], [0.4, 0.0]])
START = jnp.array([[0.8, -0.3], [0.2, 0.5]])


def without(params, **zeros):
    names = ("growth", "frequency", "shear", "saturation", "coupling")
    values = {name: getattr(params, name) * (0 if name in zeros else 1) for name in names}
    return HopfParams(values.pop("growth"), values.pop("frequency"), **values)


def linear_part(t, y, params):
    return FIELD(t, y, without(params, saturation=0, shear=0))


def saturation_part(t, y, params):
    return FIELD(t, y, without(params, growth=0, frequency=0, coupling=0))


def unit_part(t, y, params):
    return FIELD(t, y, without(params, coupling=0))


def coupling_part(t, y, params):
    return FIELD(t, y, without(params, growth=0, frequency=0, saturation=0, shear=0))


LONG = pytest.mark.long
FLOWS = {
    "saturation": (FIELD.saturation_flow, saturation_part),
    "linear": (FIELD.linear_flow, linear_part),
    "unit": (FIELD.unit_flow, unit_part),
    "coupling": (FIELD.coupling_flow, coupling_part),
}


# Each is compiled for itself; the others are checked in the long run.
@pytest.mark.parametrize(
    "name", ["linear", "saturation", *(pytest.param(x, marks=LONG) for x in ("unit", "coupling"))]
)
def test_shipped_flows_are_exact(name):
    flow, part = FLOWS[name]
    check_flow(flow, PARAMS, START, 0.3, part)


def test_single_precision():
    decay = lambda params, h: lambda y: jnp.exp(-params * h) * y
    rate, start = jnp.float32(2.0), jnp.ones(2, jnp.float32)
    check_flow(decay, rate, start, 0.3, lambda t, y, params: -params * y)


def test_flow_that_exists_only_forwards():
    # Backwards over 1.2 the amplitude would have been infinite on the way.
    far = jnp.array([[3.0, 0.0], [0.0, 3.0]])
    check_flow(FIELD.saturation_flow, PARAMS, far, 0.3, saturation_part)
    heat = lambda params, h: lambda y: jnp.where(h < 0, jnp.nan, jnp.exp(-params * h)) * y
    decay = lambda t, y, params: -params * y
    check_flow(heat, jnp.asarray(2.0), jnp.ones(1), 0.3, decay, backwards=False)
    with pytest.raises(AssertionError, match="undoes"):
        check_flow(heat, jnp.asarray(2.0), jnp.ones(1), 0.3, decay)


def test_flow_that_is_right_at_first_only():
    # Right at h = 0 and half a step on, but not the solution in between.
    flow = lambda params, h: lambda y: jnp.exp(-params * h) * y + (h * (h - 0.3) * (h - 0.15)) ** 2
    with pytest.raises(AssertionError):
        check_flow(flow, jnp.asarray(2.0), jnp.ones(1), 0.3, lambda t, y, params: -params * y)


def test_misuse(user_errors):
    del user_errors
    flow = lambda params, h: lambda y: y
    with pytest.raises(ValueError, match="`h` must have shape"):
        check_flow(flow, None, jnp.ones(1), jnp.ones(2), lambda t, y, params: 0 * y)
    with pytest.raises(TypeError, match="`y0` must hold real"):
        check_flow(flow, None, jnp.ones(1, int), 0.1, lambda t, y, params: 0 * y)
