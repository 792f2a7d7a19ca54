"""The waveform readout against its formula in complex numbers."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.observe import ReadoutParams, WaveformParams, linear_readout, waveform_readout


@pytest.fixture(scope="module")
def params():
    draw = np.random.default_rng(0).normal
    return WaveformParams(
        gain=[2.0, 3.0, 0.5], offset=draw(size=3), cosine=draw(size=(3, 2)), sine=draw(size=(3, 2)),
        level=draw(size=3),
    )  # fmt: skip


STATE = jnp.asarray(np.random.default_rng(1).normal(size=(2, 3)))


def test_formula_in_complex_numbers(params):
    # Fourier series of a waveform; common practice, no source.
    z = np.asarray(STATE[0]) + 1j * np.asarray(STATE[1])
    expected = z.real + params.level * np.abs(z) ** 2
    for k in range(2):
        power = z ** (k + 2)
        expected = expected + params.cosine[:, k] * power.real + params.sine[:, k] * power.imag
    expected = params.offset + params.gain * expected
    np.testing.assert_allclose(waveform_readout(STATE, params), expected, rtol=1e-13)


def test_without_overtones_it_is_the_linear_readout(params):
    plain = WaveformParams(params.gain, params.offset)
    linear = linear_readout(STATE, ReadoutParams(params.gain, params.offset))
    np.testing.assert_array_equal(waveform_readout(STATE, plain), linear)


def test_jit_vmap_grad_and_one_trace(params):
    traces = []

    @jax.jit
    def read(states, params):
        traces.append(1)
        return jax.vmap(waveform_readout, in_axes=(0, None))(states, params)

    states = jnp.stack([STATE, 2 * STATE])
    read(states, params)
    both = read(states, jax.tree.map(lambda x: 2 * x, params))
    assert len(traces) == 1
    np.testing.assert_allclose(
        both[1], waveform_readout(2 * STATE, jax.tree.map(lambda x: 2 * x, params)), rtol=1e-13
    )
    slope = jax.grad(lambda p: jnp.sum(waveform_readout(jnp.zeros((2, 3)), p)))(params)
    assert all(bool(jnp.all(jnp.isfinite(leaf))) for leaf in jax.tree.leaves(slope))


def test_float32_stays():
    params = WaveformParams(np.ones(1, np.float32))
    assert waveform_readout(jnp.ones((2, 1), jnp.float32), params).dtype == jnp.float32


def test_errors_name_the_argument(user_errors, params):
    with pytest.raises(ValueError, match=r"`y` must have shape \(component, node\)"):
        waveform_readout(jnp.ones((2, 4)), params)
    with pytest.raises(ValueError, match=r"`sine` must have shape \(channel, overtone\)"):
        WaveformParams([1.0], cosine=[[0.0]], sine=[[0.0, 0.0]])
    with pytest.raises(TypeError, match="`level` is float32 but `gain` is float64"):
        WaveformParams(np.ones(1), level=np.ones(1, np.float32))
