import jax
import jax.numpy as jnp
import pytest

from oscillib.checks import check_readout
from oscillib.observe import (
    BalloonParams,
    BalloonReadout,
    LightParams,
    LowPassParams,
    MapParams,
    ReadoutParams,
    WaveformParams,
    light_readout,
    linear_readout,
    low_pass_readout,
    map_readout,
    waveform_readout,
)


STATE = jnp.array([[0.4, -0.7], [0.3, 0.5]])
HEMODYNAMIC = jnp.array([[0.1, -0.1], [0.05, 0.0], [0.1, 0.05], [-0.05, 0.02]])
BALLOON = BalloonParams(efficacy=[0.5, 0.4])

READOUTS = {
    "linear": (linear_readout, STATE, ReadoutParams([[1.0, 0.5], [0.0, 2.0], [1.0, 1.0]]), 3),
    "map": (map_readout, STATE, MapParams([[1.0, 0.0], [0.5, 0.5], [0.0, 1.0]]), 3),
    "waveform": (waveform_readout, STATE, WaveformParams([2.0, 1.0], cosine=[[0.5], [0.1]]), 2),
    "light": (light_readout, STATE, LightParams([0.0, 0.5], [1.0, 2.0], ceiling=[3.0, 9.0]), 2),
    "low pass": (low_pass_readout, STATE, LowPassParams([4.0, 2.0], gain=[2.0, 1.0]), 2),
    "classic": (BalloonReadout(signal="classic"), HEMODYNAMIC, BALLOON, 2),
    "revised": (BalloonReadout(signal="revised"), HEMODYNAMIC, BALLOON, 2),
}


# Each is compiled for itself; the others are checked in the long run.
@pytest.mark.parametrize(
    "name",
    [
        name if name in ("linear", "light") else pytest.param(name, marks=pytest.mark.long)
        for name in READOUTS
    ],
)
def test_shipped_readouts(name):
    readout, y, params, channels = READOUTS[name]
    check_readout(readout, y, params, channels, key=jax.random.key(0))


def test_state_that_does_not_fit_is_named():
    params = ReadoutParams([[1.0, 0.5, 0.0]])
    with pytest.raises(AssertionError, match="ValueError"):
        check_readout(linear_readout, STATE, params, 1, key=jax.random.key(0))


def test_hidden_state_is_named():
    calls = []

    def counting(y, params):
        calls.append(None)
        return (1 + 1e-3 * len(calls)) * params * y[0]

    with pytest.raises(AssertionError, match="equals a loop"):
        check_readout(counting, STATE, jnp.asarray(2.0), 2, key=jax.random.key(0))


def test_misuse(user_errors):
    del user_errors
    with pytest.raises(ValueError, match="`channels` must be at least 1"):
        check_readout(linear_readout, STATE, None, 0, key=jax.random.key(0))
    with pytest.raises(TypeError, match="`y` must hold real"):
        check_readout(linear_readout, jnp.ones(2, int), None, 1, key=jax.random.key(0))
