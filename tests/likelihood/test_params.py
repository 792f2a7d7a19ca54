"""The tree of parameters of a noisy system and of how it is read."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.likelihood import StateSpaceParams
from oscillib.observe import ReadoutParams
from oscillib.parameters import constrain, unconstrain


def test_to_unconstrained_leaves_and_back(pair):
    params = pair(1.0)
    constraints = params.constraints()
    back = constrain(unconstrain(params, constraints), constraints, params)
    jax.tree.map(lambda a, b: np.testing.assert_allclose(a, b, rtol=1e-14), back, params)


@pytest.mark.usefixtures("user_errors")
def test_message():
    with pytest.raises(ValueError, match=r"`reading_noise` must have shape \(channel,\)"):
        StateSpaceParams(None, ReadoutParams([1.0]), jnp.asarray(0.1))
