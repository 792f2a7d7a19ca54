"""Checkpoints: named arrays in one file, written whole or not at all, refused where they differ."""

import json
import os
import zipfile
import zlib
from importlib.metadata import version
from pathlib import Path
from typing import Any, NamedTuple

import jax
import numpy as np

from .._validate import check_count
from ._atomic import write_atomically
from ._leaf import Kind, from_numpy, is_data, is_key, is_weak, kind_of, to_numpy
from ._stream import Position


FORMAT = "oscillib checkpoint"
FORMAT_VERSION = 1
HEADER = "header"


class Checkpoint(NamedTuple):
    """What `load_checkpoint` returns.

    Attributes:
        tree: a tree like `like`, its arrays those of the file.
        step: how many steps had been taken.
        key: random state, or `None` where none was saved.
        position: where the stream of batches stood, or `None` where none was saved.
        library_version: version of the library that wrote the file.
    """

    tree: Any
    step: int
    key: Any
    position: Position | None
    library_version: str


def save_checkpoint(
    path: str | os.PathLike[str], tree: Any, *, step: int, key: Any, position: Position | None
) -> None:
    """Save all that a loop needs to go on as if it had not stopped; host-side.

    The file is a numpy archive (`.npz`) without pickled objects: an array for each leaf, and a
    header in JSON with the leaves' names, shapes and dtypes, the versions of format and library,
    the step and the position. Only arrays and numbers are saved; functions, texts and static fields
    are structure, and come from `like` when it is loaded.

    It is written beside `path`, brought to the disk and moved there in one step, so that whatever
    happens there is either the old checkpoint or the new one. One process at a time may write a
    path: of several, let `jax.process_index() == 0` do it. A process that is killed while writing
    may leave a hidden file `.NAME.*.tmp`, which the next save of that path removes.

    Arguments:
        path: where to write, in a folder that exists; an existing file is replaced.
        tree: any PyTree, such as `(params, memory)`: optax states, `eqx.Module`s, typed keys, numpy
            arrays, Python numbers, in any dtype of JAX.
        step: steps taken so far.
        key: random state, a typed key such as `jax.random.key(0)`; `None` if there is none.
        position: the `position` of the last batch used; `None` if there is none.

    Raises:
        TypeError: a leaf is traced or holds no numbers; `key` is no typed key; `step` is no int.
        ValueError: a leaf is spread over processes; two have one name; a Python int is too large.
        OSError: the file cannot be written; what was there before is still there.

    Example:
        >>> import pathlib, tempfile
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.cohort import Position, load_checkpoint, save_checkpoint
        >>> path = pathlib.Path(tempfile.mkdtemp()) / "run.npz"
        >>> params, key = {"gain": jnp.array([1.0, 2.0])}, jax.random.key(3)
        >>> save_checkpoint(path, params, step=7, key=key, position=Position(1, 40))
        >>> load_checkpoint(path, {"gain": jnp.zeros(2)}, key=key).tree
        {'gain': Array([1., 2.], dtype=float64)}

    Source: common practice, no source.
    """
    step = check_count("step", step, least=0)
    leaves = _named(tree, key)
    described, arrays = [], {}
    for i, (name, leaf) in enumerate(leaves.items()):
        kind = kind_of(name, leaf)
        described.append({"name": name, **kind._asdict(), "weak": is_weak(leaf)})
        arrays[f"leaf_{i}"] = to_numpy(name, leaf)
    header = {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "library_version": version("oscillib"),
        "step": step,
        "position": None if position is None else _plain(position),
        "leaves": described,
    }
    text = json.dumps(header, allow_nan=False).encode()
    arrays = {HEADER: np.frombuffer(text, np.uint8), **arrays}
    write_atomically(Path(path), lambda file: np.savez(file, allow_pickle=False, **arrays))


def load_checkpoint(path: str | os.PathLike[str], like: Any, *, key: Any) -> Checkpoint:
    """Load a checkpoint into the structure of a tree, or refuse it by name; host-side.

    Each array goes where its counterpart in `like` is. A loop that goes on from here, with the
    stream at `position`, gives bit for bit what it would have given without the stop.

    Arguments:
        path: a file from `save_checkpoint`.
        like: a tree of the same structure, shapes and dtypes as the saved one: what the loop starts
            from when there is no checkpoint. Its values do not matter; `jax.ShapeDtypeStruct`s do.
        key: a key of the saved one's implementation, or `None` if none was saved.

    Returns:
        A `Checkpoint`.

    Raises:
        FileNotFoundError: no such file.
        TypeError: a leaf of `like` is traced or holds no numbers; `key` is no typed key.
        ValueError: the file is no checkpoint, is cut short or damaged, or has another version of
            the format; a leaf is missing, left over, or of another shape, dtype or key
            implementation. The message names every such leaf.

    Example:
        >>> import pathlib, tempfile
        >>> import jax.numpy as jnp
        >>> from oscillib.cohort import load_checkpoint, save_checkpoint
        >>> path = pathlib.Path(tempfile.mkdtemp()) / "run.npz"
        >>> save_checkpoint(path, {"gain": jnp.ones(2)}, step=0, key=None, position=None)
        >>> try:
        ...     load_checkpoint(path, {"gain": jnp.ones(3)}, key=None)
        ... except ValueError as error:
        ...     print(str(error).removeprefix(f"{path}: ").partition(" Fix")[0])
        `tree['gain']` must be float64 of shape (3,); got float64 of shape (2,).

    Source: common practice, no source.
    """
    wanted = _named(like, key)
    header, arrays = _read(Path(path))
    saved = {
        leaf["name"]: (Kind(leaf["kind"], tuple(leaf["shape"]), leaf["dtype"], leaf["impl"]), i)
        for i, leaf in enumerate(header["leaves"])
    }
    _check_alike(path, {name: kind_of(name, leaf) for name, leaf in wanted.items()}, saved)
    found = {}
    for name, leaf in wanted.items():
        i = saved[name][1]
        found[name] = from_numpy(arrays[f"leaf_{i}"], leaf, header["leaves"][i]["weak"])
    flat, structure = jax.tree_util.tree_flatten_with_path(like)
    tree = jax.tree.unflatten(structure, [found.get(_name(way), leaf) for way, leaf in flat])
    position = header["position"]
    return Checkpoint(
        tree=tree,
        step=header["step"],
        key=found.get("key"),
        position=None if position is None else Position(**position),
        library_version=header["library_version"],
    )


def _name(way: Any) -> str:
    return "tree" + jax.tree_util.keystr(way)


def _named(tree: Any, key: Any) -> dict[str, Any]:
    """Return what is saved, by name."""
    if key is not None and not is_key(key):
        raise TypeError(
            "`key` must be a typed key of random numbers, or None; got "
            f"{type(key).__name__}. Fix: `jax.random.key(0)`, or `jax.random.wrap_key_data(key)`."
        )
    leaves: dict[str, Any] = {}
    for way, leaf in jax.tree_util.tree_leaves_with_path(tree):
        name = _name(way)
        if not is_data(leaf):
            continue
        if name in leaves:
            raise ValueError(f"`tree` must give each leaf a name of its own; two are `{name}`.")
        leaves[name] = leaf
    return leaves if key is None else {**leaves, "key": key}


def _plain(position: Position) -> dict[str, int | None]:
    plain = Position(*position)._asdict()
    return {
        k: None if v is None else check_count(f"position.{k}", v, least=0) for k, v in plain.items()
    }


def _read(path: Path) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
    """Return header and arrays, or raise where the file is not whole."""
    if not path.exists():
        raise FileNotFoundError(f"{path}: there is no such checkpoint.")
    try:
        # Reading everything compares everything with its check sum.
        with path.open("rb") as opened, np.load(opened, allow_pickle=False) as file:
            arrays = {name: file[name] for name in file.files}
        header = json.loads(arrays.pop(HEADER).tobytes())
        known, number = header["format"] == FORMAT, header["format_version"]
        described = header["leaves"] if number == FORMAT_VERSION else []
        whole = number != FORMAT_VERSION or all(
            arrays[f"leaf_{i}"].shape[: len(leaf["shape"])] == tuple(leaf["shape"])
            for i, leaf in enumerate(described)
        )
    except _DAMAGE as error:
        raise ValueError(
            f"{path}: this is no checkpoint, or it is cut short or damaged "
            f"({type(error).__name__}: {error}). Fix: an older one; a fresh start."
        ) from error
    if number != FORMAT_VERSION:
        raise ValueError(
            f"{path}: the format must be version {FORMAT_VERSION}; got {number}, written by "
            f"version {header.get('library_version')} of the library. Fix: that version."
        )
    if not (known and whole):
        raise ValueError(f"{path}: this is no checkpoint, or its header does not fit its arrays.")
    return header, arrays


_DAMAGE = (zipfile.BadZipFile, zlib.error, ValueError, TypeError, KeyError, EOFError, OSError)
_DAMAGE = (*_DAMAGE, AttributeError, IndexError, NotImplementedError)


def _check_alike(path: Any, wanted: dict[str, Kind], saved: dict[str, tuple[Kind, int]]) -> None:
    wrong = [
        f"`{name}` must be {kind}; got {saved[name][0] if name in saved else 'nothing'}"
        for name, kind in wanted.items()
        if name not in saved or saved[name][0] != kind
    ]
    wrong += [
        f"`{name}` must not be there; got {kind}"
        for name, (kind, _) in saved.items()
        if name not in wanted
    ]
    if wrong:
        raise ValueError(
            f"{path}: {'; '.join(wrong)}. Fix: build `like` and `key` as the run did that saved "
            "them, with the same settings of the model, the optimiser and the precision."
        )
