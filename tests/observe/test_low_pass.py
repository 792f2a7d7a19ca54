import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.integrate import rk4, rollout
from oscillib.observe import LowPassParams, low_pass, low_pass_readout


class Tone(eqx.Module):
    """Parameters of a sensor that listens to a tone."""

    sensor: LowPassParams
    speed: jax.Array


def test_amplitude_and_lag_of_a_tone():
    # 1 / sqrt(1 + (w tau)^2) and atan(w tau) / w; closed form.
    field = lambda t, z, p: low_pass(t, z, jnp.cos(p.speed * t)[None], p.sensor)
    params = Tone(LowPassParams([0.7]), jnp.asarray(3.0))
    h = 2 * np.pi / 3 / 100
    z = jax.jit(lambda y: rollout(rk4(field), params, y, h, 500))(jnp.zeros((1, 1)))[400:, 0, 0]
    t = h * np.arange(400, 501)
    expected = np.cos(3 * t - np.arctan(2.1)) / np.sqrt(1 + 2.1**2)
    np.testing.assert_allclose(z, expected, rtol=0, atol=1e-5)


def test_readout():
    params = LowPassParams([1.0, 1.0], gain=[2.0, 3.0], offset=[10.0, 20.0])
    y = jnp.array([[9.0, 9.0], [0.5, 1.0]])
    np.testing.assert_allclose(low_pass_readout(y, params), [11.0, 23.0])
    out = jax.eval_shape(
        low_pass_readout,
        jax.ShapeDtypeStruct((2, 2), jnp.float32),
        jax.tree.map(lambda x: x.astype(jnp.float32), params),
    )
    assert out.dtype == jnp.float32


def test_errors(user_errors):
    params = LowPassParams([1.0, 1.0])
    with pytest.raises(ValueError, match="`gain` must have shape"):
        LowPassParams([1.0], gain=[1.0, 2.0])
    with pytest.raises(ValueError, match="`z` must have shape"):
        low_pass(0.0, jnp.zeros((2, 2)), jnp.zeros(2), params)
    with pytest.raises(ValueError, match="`drive` must have shape"):
        low_pass(0.0, jnp.zeros((1, 2)), jnp.zeros(3), params)
    with pytest.raises(ValueError, match=r"`y` must have shape \(row, node\)"):
        low_pass_readout(jnp.zeros((2, 3)), params)
