import jax.numpy as jnp
import numpy as np

from oscillib.fields import HopfNetwork, HopfParams, HopfUnitParams, hopf_unit


def test_uncoupled_units_are_those_of_the_network():
    rng = np.random.default_rng(0)
    growth, frequency, shear, saturation = rng.normal(size=(4, 5))
    own = {"shear": shear, "saturation": saturation}
    y = jnp.asarray(rng.normal(size=(2, 5)))
    ours = hopf_unit(0.0, y, HopfUnitParams(growth, frequency, **own))
    theirs = HopfNetwork()(0.0, y, HopfParams(growth, frequency, **own))
    np.testing.assert_allclose(ours, theirs, rtol=1e-14)
    one = HopfUnitParams(growth[0], frequency[0], shear=shear[0], saturation=saturation[0])
    np.testing.assert_allclose(hopf_unit(0.0, y[:, 0], one), theirs[:, 0], rtol=1e-14)
