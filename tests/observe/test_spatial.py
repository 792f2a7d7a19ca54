import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.observe import MapParams, map_back, map_readout
from oscillib.parameters import Fixed


WEIGHT = jnp.array([[1.0, 0.0], [0.5, 0.5], [0.0, 2.0]])


def test_channels_from_components():
    params = MapParams(WEIGHT, gain=[2.0, 3.0], offset=[10.0, 20.0, 30.0])
    y = jnp.array([[1.0, -1.0], [7.0, 7.0]])
    np.testing.assert_allclose(map_readout(y, params), [12.0, 19.5, 24.0])
    assert params.constraints().weight == Fixed()


def test_error_mapped_back():
    # By hand: squares of the weights 1, 1/4 and 1/4, 4.
    out = map_back(jnp.array([[1.0, 2.0, 4.0]]), WEIGHT)
    np.testing.assert_allclose(out, [[1.5 / 1.25, 16.5 / 4.25]])
    # An error alike on all channels stays what it was.
    np.testing.assert_allclose(map_back(jnp.full(3, 0.7), WEIGHT), 0.7, rtol=1e-14)


def test_a_component_that_no_channel_shows_has_no_error():
    out = map_back(jnp.ones(2), jnp.array([[1.0, 0.0], [1.0, 0.0]]))
    assert out[0] == 1 and np.isnan(out[1])


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`gain` must have shape"):
        MapParams(WEIGHT, gain=[1.0])
    with pytest.raises(ValueError, match="`y` must have shape"):
        map_readout(jnp.zeros((2, 3)), MapParams(WEIGHT))
    with pytest.raises(ValueError, match="`error` must have shape"):
        map_back(jnp.ones(2), WEIGHT)
