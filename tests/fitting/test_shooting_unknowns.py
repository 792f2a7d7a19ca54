import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting._shooting_unknowns import Unknowns, check_start
from oscillib.parameters import Fixed, Free, OffDiagonal, Positive


PARAMS = {
    "coupling": jnp.array([[0.0, 2.0], [3.0, 0.0]]),
    "fixed": jnp.array([7.0, 8.0]),  # own, yet not fitted
    "gain": jnp.array([1.0, 2.0]),
    "rate": jnp.asarray(4.0),
}
CONSTRAINTS = {"coupling": OffDiagonal(), "fixed": Fixed(), "gain": Positive(), "rate": Free()}
OWN = {"coupling": False, "fixed": True, "gain": True, "rate": False}


def test_there_and_back():
    unknowns = Unknowns(CONSTRAINTS, OWN, PARAMS)
    own, shared = unknowns.pack(PARAMS, 2)
    np.testing.assert_allclose(own, np.log([[1.0], [2.0]]))
    np.testing.assert_array_equal(shared, [2.0, 3.0, 4.0])
    back = unknowns.unpack(own, shared)
    for a, b in zip(jax.tree.leaves(back), jax.tree.leaves(PARAMS), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-15)
    second = unknowns.one(own[1], shared, [leaf[1] for leaf in unknowns.split_template()[0]])
    assert second["gain"] == 2.0 and second["fixed"] == 8.0


def test_refusals(user_errors):
    check_start(PARAMS, CONSTRAINTS, OWN)
    with pytest.raises(ValueError, match="`own` must have the structure"):
        check_start(PARAMS, CONSTRAINTS, {"gain": True})
    outside = {**PARAMS, "gain": jnp.array([1.0, -1.0])}
    with pytest.raises(ValueError, match="must lie strictly inside"):
        check_start(outside, CONSTRAINTS, OWN)
