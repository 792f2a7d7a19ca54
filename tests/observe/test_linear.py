import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import Free, Positive


Y = jnp.array([[1.0, -2.0, 3.0], [9.0, 9.0, 9.0]])


def test_gain_per_channel():
    out = linear_readout(Y, ReadoutParams([2.0, 1.0, 0.5], [10.0, 0.0, -1.0]))
    np.testing.assert_array_equal(out, [12.0, -2.0, 0.5])


def test_map_from_nodes_to_channels():
    out = linear_readout(Y, ReadoutParams([[1.0, 1.0, 0.0], [0.0, 0.5, 2.0]], [1.0, 0.0]))
    np.testing.assert_array_equal(out, [0.0, 5.0])


def test_constraints_follow_the_shape_of_the_gain():
    assert ReadoutParams([2.0]).constraints().gain == Positive()
    mapped = ReadoutParams([[2.0, 1.0]]).constraints()
    assert mapped.gain == mapped.offset == Free()


@pytest.mark.parametrize(
    "error, match, call",
    [
        (ValueError, r"`gain` must have shape .* got shape \(\)", lambda: ReadoutParams(1.0)),
        (
            ValueError,
            r"`offset` must have shape \(channel,\) = \(2\); got shape \(1,\)",
            lambda: ReadoutParams([1.0, 1.0], [0.0]),
        ),
        (
            TypeError,
            "`offset` is float32 but `gain` is float64",
            lambda: ReadoutParams([1.0], np.zeros(1, np.float32)),
        ),
        (
            ValueError,
            r"`y` must have shape \(component, node\) = \(any, 2\); got shape \(2, 3\)",
            lambda: linear_readout(Y, ReadoutParams([1.0, 1.0])),
        ),
        (
            ValueError,
            r"`y` must have shape \(component, node\) = \(any, 3\); got shape \(3,\)",
            lambda: linear_readout(Y[0], ReadoutParams(jnp.ones((1, 3)))),
        ),
        (
            TypeError,
            "`y` is float32 but `params.gain` is float64",
            lambda: linear_readout(Y.astype(jnp.float32), ReadoutParams([1.0, 1.0, 1.0])),
        ),
    ],
)
def test_errors(user_errors, error, match, call):
    with pytest.raises(error, match=match):
        call()
