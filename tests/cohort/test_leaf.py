"""Leaves to plain arrays and back, in every dtype, bit for bit."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.cohort._leaf import from_numpy, is_data, is_weak, kind_of, to_numpy


DTYPES = ["bool", "int8", "uint32", "int64", "float16", "float32", "float64", "complex128"]
DTYPES += ["bfloat16", "float8_e4m3fn", "int4"]


def back(leaf, like=None):
    values = to_numpy("x", leaf)
    assert values.dtype.kind in "biufc"
    return from_numpy(values, leaf if like is None else like, is_weak(leaf))


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("shape", [(), (3,), (0, 2)])
def test_arrays_of_every_dtype(dtype, shape):
    leaf = jnp.arange(np.prod(shape, dtype=int)).astype(dtype).reshape(shape)
    for given in (leaf, np.asarray(leaf)):
        got = back(given)
        assert type(got) is type(given)
        assert (got.dtype, got.shape) == (given.dtype, given.shape)
        assert np.asarray(got).tobytes() == np.asarray(given).tobytes()


def test_what_is_not_a_number_comes_back_with_its_bits():
    leaf = jnp.array([jnp.nan, -jnp.inf, -0.0, 5e-324])
    assert np.asarray(back(leaf)).tobytes() == np.asarray(leaf).tobytes()


@pytest.mark.parametrize("impl", ["threefry2x32", "rbg"])
def test_keys(impl):
    for key in (jax.random.key(3, impl=impl), jax.random.split(jax.random.key(3, impl=impl), 4)):
        got = back(key)
        assert (got.dtype, got.shape) == (key.dtype, key.shape)
        assert jnp.all(jax.random.key_data(got) == jax.random.key_data(key))
        assert kind_of("x", key)[:2] == ("key", key.shape)
        assert kind_of("x", key).impl == impl


@pytest.mark.parametrize("leaf", [True, 3, -(2**63), 0.1, 1 + 2j, float("inf")])
def test_numbers_of_python(leaf):
    got = back(leaf)
    assert (type(got), got) == (type(leaf), leaf)


@pytest.mark.parametrize("leaf", [np.float64(0.1), np.int32(4), np.float32(2)])
def test_numbers_of_numpy(leaf):
    got = back(leaf)
    assert (type(got), got) == (type(leaf), leaf)
    assert kind_of("x", leaf).kind == "array"


def test_other_byte_orders_and_strides():
    leaf = np.arange(6.0).astype(">f8").reshape(2, 3).T
    got = from_numpy(to_numpy("x", leaf), np.zeros((3, 2)), False)
    assert got.dtype == np.float64
    np.testing.assert_array_equal(got, leaf)


@pytest.mark.parametrize("leaf", [jnp.asarray(2.0), jnp.asarray(3), jnp.full((2, 2), 0.25)])
def test_weak_arrays_stay_weak(leaf):
    assert is_weak(leaf)
    got = back(leaf)
    assert is_weak(got)
    assert got.dtype == leaf.dtype
    np.testing.assert_array_equal(got, leaf)
    assert not is_weak(from_numpy(to_numpy("x", leaf), leaf, False))


def test_goes_where_its_counterpart_is():
    free, fixed = jnp.ones(2), jax.device_put(jnp.ones(2), jax.devices()[0])
    assert not back(free).committed
    assert back(fixed).committed
    assert not back(free, jax.ShapeDtypeStruct((2,), float)).committed


def test_structure_is_no_data():
    assert not any(map(is_data, (jnp.tanh, "text", object(), jnp.float32)))
    assert all(map(is_data, (1, 2.0, True, np.ones(1), jnp.ones(1), np.float32(1))))


def test_errors(user_errors):
    for leaf in (np.array(["a"]), np.array([{}]), np.array([1], "datetime64[s]")):
        with pytest.raises(TypeError, match=f"`x` must hold numbers; got {leaf.dtype}"[:30]):
            kind_of("x", leaf)
    with pytest.raises(TypeError, match="`x` must hold numbers; got a masked array"):
        kind_of("x", np.ma.masked_array([1.0, 2.0], [True, False]))
    with pytest.raises(ValueError, match="`x` must fit into 64 bits"):
        to_numpy("x", 2**70)
    with pytest.raises(TypeError, match="`x` must hold known values"):
        jax.jit(lambda x: kind_of("x", x))(1.0)
