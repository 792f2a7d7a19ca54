"""Where arrays go; several devices are met in `test_mean.py`, in programs of their own."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.sharding import Mesh, PartitionSpec

from oscillib.cohort import place, recording_mesh, replicate


MESH = recording_mesh()


def test_mesh_is_a_row_of_all_devices():
    assert MESH.axis_names == ("recording",)
    assert list(MESH.devices) == jax.devices()


def test_place_cuts_and_replicate_copies():
    tree = {
        "x": np.arange(6.0).reshape(2, 3),
        "key": jax.random.split(jax.random.key(0, impl="rbg")),
    }
    for put, spec in ((place, PartitionSpec("recording")), (replicate, PartitionSpec())):
        out = put(tree, MESH)
        assert out["x"].sharding.spec == spec
        np.testing.assert_array_equal(out["x"], tree["x"])
        assert out["key"].dtype == tree["key"].dtype
        assert jnp.all(jax.random.key_data(out["key"]) == jax.random.key_data(tree["key"]))
    again = place(out, MESH)
    np.testing.assert_array_equal(again["x"], tree["x"])


def test_replicate_keeps_what_is_no_array():
    out = replicate({"f": jnp.tanh, "n": 3, "x": jnp.ones(2)}, MESH)
    assert (out["f"], out["n"]) == (jnp.tanh, 3)


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`devices` must be at least one device, each once"):
        recording_mesh([])
    with pytest.raises(ValueError, match="`devices` must be at least one device, each once"):
        recording_mesh(jax.devices()[:1] * 2)
    with pytest.raises(ValueError, match=r"`batch\['b'\]` must hold 2 recordings"):
        place({"a": np.ones(2), "b": np.ones(3)}, MESH)
    with pytest.raises(ValueError, match=r"`batch\['a'\]` must have a leading recording axis"):
        place({"a": np.array(1.0)}, MESH)
    with pytest.raises(ValueError, match="`mesh` must be a Mesh with the one axis 'recording'"):
        replicate(np.ones(2), Mesh(np.array(jax.devices()), ("batch",)))
