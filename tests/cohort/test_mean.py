"""The mean over recordings: its value, its order of additions, and that devices do not matter."""

import json
import socket
import subprocess
import sys
from pathlib import Path
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.sharding import Mesh

from oscillib.cohort import mean_over_recordings, place, recording_mesh, replicate


PROGRAM = Path(__file__).with_name("training.py")
MESH = recording_mesh()
ALL = np.ones(6, bool)


class Readout(eqx.Module):
    """Two units, a count that is no parameter of the gradient, and functions."""

    weight: jax.Array
    calls: jax.Array
    squash: object = jnp.tanh
    name: str = eqx.field(static=True, default="readout")


def loss(params, x):
    return jnp.sum((params.squash(params.weight @ x) - 0.3) ** 2)


@pytest.fixture(scope="module")
def params():
    return Readout(jnp.array([[0.5, -1.0, 0.2], [0.1, 0.4, 2.0]]), jnp.asarray(3))


@pytest.fixture(scope="module")
def rows():
    return np.random.default_rng(0).normal(size=(6, 3))


@pytest.fixture(scope="module")
def mean():
    return mean_over_recordings(loss, MESH, group=2)


def equal(a, b):
    jax.tree.map(np.testing.assert_array_equal, a, b)


def test_is_the_mean_and_its_gradient(mean, params, rows):
    out = mean(params, rows, ALL)
    each = lambda p: jax.vmap(loss, (None, 0))(p, rows)
    value, gradient = eqx.filter_value_and_grad(lambda p: each(p).mean())(params)
    np.testing.assert_allclose(out.value, value, rtol=1e-14)
    np.testing.assert_allclose(out.values, each(params), rtol=1e-14)
    np.testing.assert_allclose(out.gradient.weight, gradient.weight, rtol=1e-13, atol=1e-15)
    assert out.gradient.calls is None
    assert jax.tree.structure(out.gradient) == jax.tree.structure(gradient)
    assert (int(out.count), out.finite.tolist()) == (6, [True] * 6)


def test_gradient_fits_finite_differences(mean, params, rows):
    out = mean(params, rows, ALL)
    way = np.random.default_rng(1).normal(size=(2, 3))
    moved = lambda h: eqx.tree_at(lambda p: p.weight, params, params.weight + h * way)
    slope = (mean(moved(1e-6), rows, ALL).value - mean(moved(-1e-6), rows, ALL).value) / 2e-6
    # Central differences: 1e-12 of their own error, and rounding of a value near 1 over the step.
    np.testing.assert_allclose(jnp.sum(out.gradient.weight * way), slope, rtol=0, atol=1e-9)


@pytest.mark.parametrize("filling", [np.nan, np.inf, 1e300, 0.0])
def test_absent_rows_change_no_bit(mean, params, rows, filling):
    present = np.array([True, False, True, True, False, False])
    filled = np.where(present[:, None], rows, filling)
    out = mean(params, filled, present)
    equal(out, mean(params, rows, present))
    # A group that is absent as a whole might as well not be there.
    short = mean(params, filled[:4], present[:4])
    equal((out.value, out.gradient, out.count), (short.value, short.gradient, short.count))
    assert int(out.count) == 3
    np.testing.assert_array_equal(out.values == 0, ~present)


def test_nothing_present_is_zero_and_says_so(mean, params, rows):
    out = mean(params, rows, ~ALL)
    assert (float(out.value), int(out.count)) == (0.0, 0)
    assert not np.any(out.gradient.weight)


@pytest.mark.parametrize("bad", ["value", "gradient"])
def test_a_bad_recording_is_named_and_can_be_left_out(params, rows, bad):
    # The root of 0 is finite, its slope is not.
    shape = jnp.log if bad == "value" else jnp.sqrt
    broken = lambda p, x: loss(p, x) + shape(jnp.abs(x[0]) * p.weight[0, 0] ** 2)
    zero = np.array(rows)
    zero[2, 0] = 0.0
    out = mean_over_recordings(broken, MESH, group=2)(params, zero, ALL)
    assert out.finite.tolist() == [True, True, bad == "gradient", True, True, True]
    assert not np.all(np.isfinite(out.gradient.weight))
    assert int(out.count) == 6
    # One by one, bad ones are seen by their gradient too.
    kept = mean_over_recordings(broken, MESH, group=2, leave_out_bad=True)
    out, absent = kept(params, zero, ALL), kept(params, rows, np.arange(6) != 2)
    assert out.finite.tolist() == [True, True, False, True, True, True]
    equal(out._replace(finite=absent.finite), absent)
    assert int(out.count) == 5


@pytest.mark.parametrize("size", [1, 2, 3, 5, 6, 7, 12, 13])
def test_adds_neighbours_in_pairs(size):
    # Single precision and magnitudes far apart: another order gives other bits.
    draw = np.random.default_rng(size)
    x = (draw.normal(size=size) * 10.0 ** draw.integers(-3, 4, size)).astype(np.float32)
    level = list(x)
    while len(level) > 1:
        ends = level[len(level) // 2 * 2 :]
        level = [a + b for a, b in zip(level[::2], level[1::2], strict=False)] + ends
    product = mean_over_recordings(lambda p, x: p * x, MESH, group=1)
    out = product(jnp.ones((), jnp.float32), x, np.ones(size, bool))
    assert out.value.dtype == out.gradient.dtype == np.float32
    assert np.asarray(out.value) == level[0] / np.float32(size)
    assert np.asarray(out.gradient) == level[0] / np.float32(size)
    np.testing.assert_array_equal(out.values, x)


def test_order_of_the_batch_changes_by_rounding_only(mean, params, rows):
    order = np.array([3, 0, 5, 1, 4, 2])
    out, other = mean(params, rows, ALL), mean(params, rows[order], ALL)
    np.testing.assert_allclose(other.value, out.value, rtol=1e-15)
    np.testing.assert_allclose(other.gradient.weight, out.gradient.weight, rtol=1e-14)


def test_keys_of_random_numbers_travel_with_the_rows(rows):
    noisy = lambda p, both: p * jnp.sum(both[0]) + jax.random.normal(both[1])
    keys = jax.random.split(jax.random.key(0), 6)
    expected = np.sum(rows, axis=1) + jax.vmap(jax.random.normal)(keys)
    for group in (3, None):
        out = mean_over_recordings(noisy, MESH, group=group)(jnp.array(1.0), (rows, keys), ALL)
        np.testing.assert_allclose(out.values, expected, rtol=1e-14)


def test_a_compiled_program_over_the_batch_agrees_by_rounding(mean, params, rows):
    out = mean_over_recordings(loss, MESH, group=None)(params, rows, ALL)
    exact = mean(params, rows, ALL)
    weight = replicate(params.weight, MESH)
    squash = lambda weight, x: jnp.sum((jnp.tanh(weight @ x) - 0.3) ** 2)
    plain = jax.jit(jax.value_and_grad(lambda w, x: jax.vmap(squash, (None, 0))(w, x).mean()))
    value, gradient = plain(weight, place(rows, MESH))
    close = lambda a, b: np.testing.assert_allclose(a, b, rtol=1e-13, atol=1e-15)
    close(out.value, exact.value)
    close(out.gradient.weight, exact.gradient.weight)
    close(value, exact.value)
    close(gradient, exact.gradient.weight)
    assert out.value.devices() == exact.value.devices()


def test_new_values_do_not_trace_again(params, rows):
    traces = []

    def counted(params, x):
        traces.append(x)
        return loss(params, x)

    for scale in (1.0, 2.0, 3.0):
        mean = mean_over_recordings(counted, MESH, group=2)
        mean(params, scale * rows, ALL)
        mean(params, rows[:4], ALL[:4])  # another number of groups is the same program
    assert len(traces) == 1


def run(*arguments):
    command = [sys.executable, str(PROGRAM), *map(str, arguments)]
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def results(program):
    out, err = program.communicate(timeout=300)
    assert program.returncode == 0, err
    return json.loads(out.splitlines()[-1])


def floats(bits):
    """Read those leaves that are double: all but the counts of the optimiser."""
    return np.concatenate([np.frombuffer(bytes.fromhex(x)) for x in bits if len(x) % 16 == 0])


def test_number_of_devices_changes_nothing():
    found = results(run(4, "--meshes", 1, 2, 3, 4, "--free", 1, 4))
    assert all(len(bits) > 10 for bits in found.values())
    for number in ("2", "3", "4"):
        assert found[number] == found["1"]
    # Four steps, each of which rounds elsewhere, through Adam's division by a root.
    for number in (1, 4):
        np.testing.assert_allclose(floats(found[f"free {number}"]), floats(found["1"]), rtol=1e-9)


@pytest.mark.long
def test_eight_devices_equal_one():
    # One recording a group, so that each of the eight has one.
    assert results(run(8, "--group", 1))["8"] == results(run(1, "--group", 1))["1"]


@pytest.mark.long
def test_number_of_processes_changes_nothing():
    alone = results(run(1))["1"]
    for devices in (1, 2):
        with socket.socket() as free:
            free.bind(("localhost", 0))
            port = free.getsockname()[1]
        pair = [run(devices, index, 2, port) for index in (0, 1)]
        for program in pair:
            assert results(program) == {str(2 * devices): alone}


@pytest.mark.parametrize(
    ("change", "kind", "match"),
    [
        ({"present": ALL[:4]}, ValueError, r"`present` must be Boolean of shape .* = \(6,\)"),
        ({"present": ALL.astype(int)}, ValueError, "`present` must be Boolean"),
        ({"rows": {"x": np.ones((6, 3)), "y": np.ones((5, 3))}}, ValueError, r"`batch\['y'\]`"),
        ({"rows": np.array(1.0)}, ValueError, "`batch` must have a leading recording axis"),
        ({"rows": np.ones((0, 3))}, ValueError, "`batch` must hold at least one recording"),
        ({"group": 4}, ValueError, "`batch` must hold a multiple of `group`=4 recordings; got 6"),
        ({"group": 0}, ValueError, "`group` must be at least 1"),
        ({"group": 2.0}, TypeError, "`group` must be a Python int"),
        ({"mesh": Mesh(np.array(jax.devices()), ("x",))}, ValueError, "`mesh` must be a Mesh"),
        ({"loss": lambda p, x: p.weight @ x}, ValueError, r"`loss` must return a scalar.*\(2,\)"),
        ({"loss": lambda p, x: jnp.sum(x > 0)}, TypeError, "`loss` must return a real floating"),
    ],
)
def test_errors(user_errors, params, change, kind, match):
    given: Any = {"loss": loss, "mesh": MESH, "group": 2, "rows": np.ones((6, 3)), "present": ALL}
    given |= change
    with pytest.raises(kind, match=match):
        mean = mean_over_recordings(given["loss"], given["mesh"], group=given["group"])
        mean(params, given["rows"], given["present"])


def test_refuses_traced_arguments(mean, params, rows):
    with pytest.raises(TypeError, match="`params` must hold known values"):
        eqx.filter_jit(lambda p: mean(p, rows, ALL).value)(params)
    with pytest.raises(TypeError, match="`batch` must hold known values"):
        eqx.filter_jit(lambda x: mean(params, x, ALL).value)(jnp.asarray(rows))
