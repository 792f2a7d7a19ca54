"""Checkpoints: a stop changes no bit, and whatever does not fit is refused by name."""

import importlib.util
import json
import random
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import optax
import pytest

import oscillib
from oscillib.cohort import Position, load_checkpoint, recording_mesh, save_checkpoint


PROGRAM = Path(__file__).with_name("training.py")
KEY = jax.random.key(5)


class Model(eqx.Module):
    """Arrays, functions in and out of static fields, a text, nothing, and a key."""

    weight: jax.Array
    count: jax.Array
    noise: jax.Array
    scale: float = 2.0
    squash: Any = jnp.tanh
    nothing: None = None
    name: str = eqx.field(static=True, default="model")


def model(fill):
    weight = fill * jnp.arange(6, dtype=jnp.float32).reshape(2, 3)
    return Model(weight, jnp.asarray(int(fill)), jax.random.key(int(fill)), scale=float(fill))


@pytest.fixture(scope="module")
def training():
    """The program of `test_mean.py`, as a module."""
    spec: Any = importlib.util.spec_from_file_location("training", PROGRAM)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(autouse=True)
def standard():
    """Adam itself mixes dtypes, which strict promotion refuses."""
    with jax.numpy_dtype_promotion("standard"):
        yield


@pytest.fixture
def path(tmp_path):
    return tmp_path / "run.npz"


def save(path, tree, **change):
    save_checkpoint(path, tree, **({"step": 3, "key": KEY, "position": Position(1, 4)} | change))


def bits(tree):
    data = lambda x: jax.random.key_data(x) if jnp.issubdtype(x.dtype, jax.dtypes.prng_key) else x
    arrays = [x for x in jax.tree.leaves(tree) if eqx.is_array(x)]
    return [(x.dtype, x.shape, np.asarray(data(x)).tobytes()) for x in arrays]


def test_modules_optimisers_and_keys_come_back(path):
    optimiser = optax.chain(optax.clip_by_global_norm(1.0), optax.adamw(1e-2))
    trees = []
    for fill in (7.0, 1.0):
        made = model(fill)
        memory = optimiser.init(eqx.filter(made, eqx.is_inexact_array))
        memory = jax.tree.map(lambda x, fill=fill: x + int(fill), memory)
        trees.append({"model": made, "memory": memory, "best": [np.float64(fill), int(fill)]})
    saved, like = trees
    save(path, saved, position=Position(2, 30, 9, 80))
    back = load_checkpoint(path, like, key=jax.random.key(0))
    assert jax.tree.structure(back.tree) == jax.tree.structure(saved)
    assert bits(back.tree) == bits(saved)
    assert back.tree["best"] == [7.0, 7]
    assert (back.tree["model"].scale, back.tree["model"].squash) == (7.0, jnp.tanh)
    assert (back.step, back.position) == (3, Position(2, 30, 9, 80))
    assert jnp.all(jax.random.key_data(back.key) == jax.random.key_data(KEY))
    assert back.library_version == oscillib.__version__


def test_like_may_be_shapes_alone(path):
    save(path, {"w": jnp.arange(3.0)}, key=None, position=None)
    like = jax.eval_shape(lambda: {"w": jnp.zeros(3)})
    back = load_checkpoint(path, like, key=None)
    np.testing.assert_array_equal(back.tree["w"], [0, 1, 2])
    assert (back.key, back.position) == (None, None)


def test_file_is_plain_arrays_and_text(path):
    save(path, {"w": jnp.ones(2), "k": jax.random.key(0, impl="rbg")})
    with np.load(path, allow_pickle=False) as file:
        header = json.loads(file["header"].tobytes())
        assert all(file[name].dtype.kind in "biufc" for name in file.files)
    assert header["step"] == 3
    assert [leaf["name"] for leaf in header["leaves"]] == ["tree['k']", "tree['w']", "key"]
    assert header["leaves"][0]["impl"] == "rbg"


def test_a_single_array_is_a_tree(path):
    save(path, jnp.ones(2))
    np.testing.assert_array_equal(load_checkpoint(path, jnp.zeros(2), key=KEY).tree, [1, 1])
    with pytest.raises(ValueError, match=r"`tree` must be float64 of shape \(3,\)"):
        load_checkpoint(path, jnp.zeros(3), key=KEY)


def test_a_resumed_run_equals_an_uninterrupted_one(training, path):
    """Two epochs and a half with Adam, keys and a padded batch, stopped after each step."""
    mesh = recording_mesh(jax.devices()[:1])
    whole = training.train(mesh, group=4, steps=5)
    values = []
    for steps in range(1, 6):
        params, memory, new = training.train(mesh, group=4, steps=steps, file=path)
        assert len(new) == 1
        values += new
    assert bits((params, memory, values)) == bits(whole)
    assert [p.name for p in path.parent.iterdir()] == ["run.npz"]


WANTED = {"w": jnp.ones((2, 3)), "b": [jnp.ones(2), 1.0], "k": jax.random.key(0)}


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"w": jnp.ones((3, 2))}, r"`tree\['w'\]` must be .* \(3, 2\); got .* \(2, 3\)"),
        ({"w": jnp.ones((2, 3), "f4")}, r"`tree\['w'\]` must be float32 .*; got float64"),
        ({"w": 1.0}, r"`tree\['w'\]` must be a Python float; got float64"),
        ({"b": [jnp.ones(2), 1]}, r"`tree\['b'\]\[1\]` must be a Python int; got a Python float"),
        ({"b": [jnp.ones(2)]}, r"`tree\['b'\]\[1\]` must not be there; got a Python float"),
        ({"v": jnp.ones(2)}, r"`tree\['v'\]` must be float64 of shape \(2,\); got nothing"),
        ({"k": jax.random.key(0, impl="rbg")}, r"`tree\['k'\]` must be .*'rbg'.*got .*'threefry"),
        ({"k": jax.random.split(KEY, 2)}, r"`tree\['k'\]` must be .*\(2,\); got .*\(\)"),
        ({"k": jax.random.key_data(KEY)}, r"`tree\['k'\]` must be uint32 .*got random keys"),
    ],
)
def test_a_mismatch_is_refused_by_name(path, change, match):
    save(path, WANTED)
    with pytest.raises(ValueError, match=match):
        load_checkpoint(path, WANTED | change, key=KEY)


def test_another_key_is_refused_by_name(path):
    save(path, WANTED)
    with pytest.raises(ValueError, match=r"`key` must be random keys 'rbg'.*; got .*'threefry"):
        load_checkpoint(path, WANTED, key=jax.random.key(0, impl="rbg"))
    with pytest.raises(ValueError, match="`key` must not be there; got random keys"):
        load_checkpoint(path, WANTED, key=None)
    save(path, WANTED, key=None)
    with pytest.raises(ValueError, match=r"`key` must be random keys .*; got nothing"):
        load_checkpoint(path, WANTED, key=KEY)


def test_all_that_is_wrong_is_named_at_once(path):
    save(path, {"w": jnp.ones(2), "b": jnp.ones(2)})
    with pytest.raises(ValueError, match=r"`tree\['b'\]`.*`tree\['v'\]`.*`tree\['w'\]`.*Fix: "):
        load_checkpoint(path, {"v": jnp.ones(2), "b": jnp.ones(3)}, key=KEY)


def test_every_cut_is_seen(path):
    save(path, {"w": jnp.arange(20.0)})
    whole = path.read_bytes()
    for length in [*range(0, len(whole), 37), len(whole) - 1]:
        path.write_bytes(whole[:length])
        with pytest.raises(ValueError, match=r"run.npz: this is no checkpoint, or it is cut short"):
            load_checkpoint(path, {"w": jnp.zeros(20)}, key=KEY)


def test_every_damaged_byte_is_seen_or_harmless(path):
    tree = {"w": jnp.arange(20.0)}
    save(path, tree)
    whole, seen = path.read_bytes(), 0
    for place in range(0, len(whole), 3):
        path.write_bytes(whole[:place] + bytes([whole[place] ^ 0x55]) + whole[place + 1 :])
        try:
            back = load_checkpoint(path, {"w": jnp.zeros(20)}, key=KEY)
        except ValueError as error:
            seen += "run.npz" in str(error)
        else:  # the archive also holds dates, which nobody reads
            assert bits(back.tree) == bits(tree)
            assert (back.step, back.position) == (3, Position(1, 4))
    assert seen > len(whole) / 6


def rewrite(path, **change):
    with np.load(path) as file:
        arrays = dict(file)
    header = json.loads(arrays["header"].tobytes()) | change
    arrays["header"] = np.frombuffer(json.dumps(header).encode(), np.uint8)
    np.savez(path, allow_pickle=False, **arrays)


def test_another_version_or_file_is_refused(path):
    save(path, {"w": jnp.ones(2)})
    rewrite(path, format_version=2, library_version="9.1")
    with pytest.raises(ValueError, match=r"version 1; got 2, written by version 9.1"):
        load_checkpoint(path, {"w": jnp.ones(2)}, key=KEY)
    save(path, {"w": jnp.ones(2)})
    rewrite(path, format="something else")
    with pytest.raises(ValueError, match="this is no checkpoint"):
        load_checkpoint(path, {"w": jnp.ones(2)}, key=KEY)
    np.savez(path, w=np.ones(2), allow_pickle=False)
    with pytest.raises(ValueError, match="this is no checkpoint"):
        load_checkpoint(path, {"w": jnp.ones(2)}, key=KEY)
    np.save(path.with_suffix(".npy"), np.ones(2))
    with pytest.raises(ValueError, match="this is no checkpoint"):
        load_checkpoint(path.with_suffix(".npy"), {"w": jnp.ones(2)}, key=KEY)
    with pytest.raises(FileNotFoundError, match=r"none.npz"):
        load_checkpoint(path.with_name("none.npz"), {"w": jnp.ones(2)}, key=KEY)


def test_a_pickled_object_is_never_opened(path):
    save(path, {"w": jnp.ones(2)})
    with np.load(path) as file:
        arrays = dict(file)
    arrays["leaf_0"] = np.array([print], dtype=object)
    np.savez(path, allow_pickle=True, **arrays)
    with pytest.raises(ValueError, match="allow_pickle=False"):
        load_checkpoint(path, {"w": jnp.ones(2)}, key=KEY)


def test_errors_of_saving_leave_the_old_one(user_errors, path):
    save(path, {"w": jnp.ones(2)})
    before = path.read_bytes()
    cases: Any = [
        ({"tree": {"w": np.array(["a"])}}, TypeError, r"`tree\['w'\]` must hold numbers"),
        ({"tree": {"w": 2**70}}, ValueError, r"`tree\['w'\]` must fit into 64 bits"),
        ({"key": jax.random.key_data(KEY)}, TypeError, "`key` must be a typed key"),
        ({"step": -1}, ValueError, "`step` must be at least 0"),
        ({"step": jnp.asarray(1)}, TypeError, "`step` must be a Python int"),
        ({"position": (0, 1.5)}, TypeError, "`position.index` must be a Python int"),
    ]
    for change, kind, match in cases:
        with pytest.raises(kind, match=match):
            save(path, **({"tree": {"w": jnp.ones(2)}} | change))
    assert path.read_bytes() == before
    with pytest.raises(FileNotFoundError):
        save(path.parent / "none" / "run.npz", {"w": jnp.ones(2)})


@pytest.mark.long
def test_killed_twenty_times_ends_as_if_never(training, path):
    command = [sys.executable, str(PROGRAM), "1", "--steps"]
    file = ["--file", str(path)]
    draw, reached, leftovers = random.Random(0), [0], 0
    params, memory, key = training.start()
    for _ in range(20):
        with subprocess.Popen(
            [*command, "1000000", *file], stdout=subprocess.PIPE, text=True
        ) as program:
            for _ in range(3):  # then all is compiled, and it trains and saves by turns
                assert program.stdout.readline() == "saved\n"
            time.sleep(draw.uniform(0, 0.3))
            program.send_signal(signal.SIGKILL)
            program.stdout.read()
        assert program.returncode == -signal.SIGKILL
        saved = load_checkpoint(path, (params, memory), key=key)
        assert saved.step > reached[-1]
        reached.append(saved.step)
        leftovers += len(list(path.parent.iterdir())) > 1
    print(f"steps at the kills: {reached[1:]}; killed while writing: {leftovers}")
    command.append(str(reached[-1] + 20))
    runs = [
        subprocess.run(way, capture_output=True, text=True, check=True)
        for way in ([*command, *file], command)
    ]
    end, never = (json.loads(run.stdout.splitlines()[-1])["1"] for run in runs)
    tail = end[: len(jax.tree.leaves((params, memory)))]
    assert tail == never[: len(tail)]
    assert [p.name for p in path.parent.iterdir()] == ["run.npz"]
