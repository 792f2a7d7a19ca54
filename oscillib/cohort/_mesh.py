"""Devices in a row along the recording axis; arrays cut over them or copied to each."""

from collections.abc import Sequence
from functools import lru_cache
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jax.sharding import Mesh, NamedSharding, PartitionSpec


RECORDING = "recording"


def recording_mesh(devices: Sequence[Any] | None = None) -> Mesh:
    """Put devices in a row along an axis called `recording`.

    Devices of one process stand side by side, in the order of the processes, so that each process
    holds a consecutive share of every batch, the one that `batches` reads there.

    Arguments:
        devices: such as `jax.devices()[:2]`; default all devices of all processes.

    Returns:
        A `jax.sharding.Mesh` with the one axis `recording`.

    Raises:
        ValueError: no device, or one that is given twice.

    Example:
        >>> import jax
        >>> from oscillib.cohort import recording_mesh
        >>> recording_mesh(jax.devices()[:1]).shape["recording"]
        1
    """
    devices = list(jax.devices() if devices is None else devices)
    if not devices or len(set(devices)) < len(devices):
        raise ValueError(
            f"`devices` must be at least one device, each once; got {devices}. "
            "Fix: `jax.devices()`, or some of them."
        )
    ordered = sorted(devices, key=lambda device: (device.process_index, device.id))
    return Mesh(np.array(ordered), (RECORDING,))


def place(batch: Any, mesh: Mesh) -> Any:
    """Cut every array of a batch along its first axis and put each part on its device.

    With several processes each gives its own rows, and the parts together are the batch.
    Host-side: call it outside `jit`.

    Arguments:
        batch: PyTree of arrays with a leading `recording` axis, all of one length: the rows of the
            batch that this process holds.
        mesh: from `recording_mesh`.

    Returns:
        The same tree, its leaves `jax.Array`s of the whole batch's length.

    Raises:
        ValueError: the lengths differ, or are no multiple of the number of this process's devices;
            an array has no axis; the mesh has no axis `recording`.

    Example:
        >>> import jax
        >>> import numpy as np
        >>> from oscillib.cohort import place, recording_mesh
        >>> mesh = recording_mesh(jax.devices()[:1])
        >>> place({"values": np.ones((4, 3))}, mesh)["values"].sharding.spec[0]
        'recording'
    """
    check_mesh(mesh)
    rows = batch_length("batch", batch)
    own = len(own_devices(mesh))
    if rows % own:
        raise ValueError(
            f"`batch` must hold a multiple of {own} recordings, the number of devices of this "
            f"process in `mesh`; got {rows}. Fix: another `size` in `batches`, or a mesh over "
            "fewer devices."
        )
    return _put(batch, NamedSharding(mesh, PartitionSpec(RECORDING)))


def replicate(tree: Any, mesh: Mesh) -> Any:
    """Copy every array of a tree to every device; what is no array stays as it is.

    Parameters and the state of an optimiser start here, so that the first step of a loop is
    compiled for the same placement as all others. Every process must give the same values.
    Host-side: call it outside `jit`.

    Arguments:
        tree: PyTree, such as an encoder with its optimiser's state.
        mesh: from `recording_mesh`.

    Returns:
        The same tree, its arrays `jax.Array`s on all devices of the mesh.

    Raises:
        ValueError: the mesh has no axis `recording`.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.cohort import recording_mesh, replicate
        >>> params = replicate({"gain": jnp.ones(2)}, recording_mesh(jax.devices()[:1]))
        >>> params["gain"].sharding.is_fully_replicated
        True
    """
    check_mesh(mesh)
    return _put(tree, NamedSharding(mesh, PartitionSpec()))


def check_mesh(mesh: Any) -> None:
    """Raise ValueError unless the mesh has the one axis `recording`."""
    if not isinstance(mesh, Mesh) or mesh.axis_names != (RECORDING,):
        raise ValueError(
            f"`mesh` must be a Mesh with the one axis {RECORDING!r}; got {mesh}. "
            "Fix: `recording_mesh()`."
        )
    processes = [d.process_index for d in mesh.devices.flat]
    if processes != sorted(processes):
        raise ValueError(
            "`mesh` must hold the devices in the order of their processes; got those of processes "
            f"{processes}. Fix: `recording_mesh(devices)`."
        )


def batch_length(name: str, batch: Any) -> int:
    """Return the length of the first axis that all arrays of a batch share."""
    leaves = jax.tree_util.tree_leaves_with_path(batch)
    first = None
    for path, leaf in leaves:
        where = f"`{name}{jax.tree_util.keystr(path)}`"
        shape = np.shape(leaf)
        if not shape:
            raise ValueError(
                f"{where} must have a leading recording axis; got a scalar. "
                "Fix: one entry for each recording; what all share belongs to the parameters."
            )
        first = shape[0] if first is None else first
        if shape[0] != first:
            raise ValueError(
                f"{where} must hold {first} recordings, as the other arrays; got shape {shape}."
            )
    if not first:
        raise ValueError(f"`{name}` must hold at least one recording; got none.")
    return first


def own_devices(mesh: Mesh) -> list[Any]:
    """Return the devices of this process, in order, or raise where it has none."""
    own = [d for d in mesh.devices.flat if d.process_index == jax.process_index()]
    if not own:
        raise ValueError(
            f"`mesh` must hold a device of each process that uses it; process "
            f"{jax.process_index()} has none. Fix: `recording_mesh()` takes all devices."
        )
    return own


def process_count(mesh: Mesh) -> int:
    """Return how many processes have a device in the mesh."""
    return len({d.process_index for d in mesh.devices.flat})


def gather_processes(tree: Any, mesh: Mesh, home: Any) -> Any:
    """Join the arrays of all processes along their first axis, in order, and put them on `home`."""
    first: dict[int, Any] = {}
    for device in mesh.devices.flat:
        first.setdefault(device.process_index, device)
    across = Mesh(np.array(list(first.values())), ("process",))
    sharding = NamedSharding(across, PartitionSpec("process"))

    def spread(x):
        shape = (len(first) * x.shape[0], *x.shape[1:])
        own = jax.device_put(x, first[jax.process_index()])
        return jax.make_array_from_single_device_arrays(shape, sharding, [own])

    joined = _gather(across)(jax.tree.map(spread, tree))
    return jax.tree.map(lambda x: jax.device_put(x.addressable_data(0), home), joined)


@lru_cache
def _gather(across: Mesh) -> Any:
    # Nothing is computed: each device ends up with the parts of all.
    return jax.jit(lambda tree: tree, out_shardings=NamedSharding(across, PartitionSpec()))


def _put(tree: Any, sharding: NamedSharding) -> Any:
    return jax.tree.map(lambda leaf: _put_leaf(leaf, sharding), tree)


def _put_leaf(leaf: Any, sharding: NamedSharding) -> Any:
    if not isinstance(leaf, jax.Array | np.ndarray | np.generic):
        return leaf
    if isinstance(leaf, jax.Array) and jnp.issubdtype(leaf.dtype, jax.dtypes.prng_key):
        data = _put_leaf(jax.random.key_data(leaf), sharding)
        return jax.random.wrap_key_data(data, impl=jax.random.key_impl(leaf))
    if isinstance(leaf, jax.Array) and not leaf.is_fully_addressable:
        return jax.device_put(leaf, sharding)  # it is spread over the processes already
    return jax.make_array_from_process_local_data(sharding, np.asarray(leaf))
