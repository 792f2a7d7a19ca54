import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.observe import LightParams, light_readout
from oscillib.parameters import Fixed, Positive


PARAMS = LightParams([2.0], [0.5], ceiling=[100.0], background=[3.0])


def test_formula():
    for x in (-3.0, 0.0, 4.0):
        light = np.exp(2 + 0.5 * x)
        expected = 3 + 100 * light / (100 + light)
        np.testing.assert_allclose(light_readout(jnp.array([[x]]), PARAMS), expected, rtol=1e-14)


def test_limits_have_finite_derivatives():
    read = jax.jit(jax.value_and_grad(lambda x: light_readout(x[None, None], PARAMS)[0]))
    for x, value in [(-1e4, 3.0), (1e4, 103.0)]:
        out, slope = read(jnp.asarray(x))
        assert abs(out - value) < 1e-12 and slope == 0
    # In the dark the channel follows the light itself.
    out, slope = read(jnp.asarray(-20.0))
    np.testing.assert_allclose([out - 3, slope], [np.exp(-8), 0.5 * np.exp(-8)], rtol=1e-5)


def test_single_precision_and_constraints():
    params = jax.tree.map(lambda x: x.astype(jnp.float32), PARAMS)
    out = jax.eval_shape(light_readout, jax.ShapeDtypeStruct((1, 1), jnp.float32), params)
    assert out.dtype == jnp.float32 and out.shape == (1,)
    constraints = PARAMS.constraints()
    assert constraints.gain == Positive() and constraints.ceiling == Fixed()


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`ceiling` must have shape"):
        LightParams([2.0], [0.5], ceiling=[1.0, 2.0])
    with pytest.raises(ValueError, match="`y` must have shape"):
        light_readout(jnp.zeros((1, 2)), PARAMS)
    with pytest.raises(TypeError, match="`y` is float32"):
        light_readout(jnp.zeros((1, 1), jnp.float32), PARAMS)
