"""Mean loss over recordings and its gradient, the same to the last bit on any number of devices."""

from collections.abc import Callable
from functools import partial
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jax.core import Tracer
from jax.sharding import Mesh, NamedSharding, PartitionSpec
from jaxtyping import Array, Bool, Float, Int

from .._validate import check_count
from ..parameters import all_finite
from ._mesh import (
    batch_length,
    check_mesh,
    gather_processes,
    own_devices,
    place,
    process_count,
    replicate,
)


class CohortMean(NamedTuple):
    """What a function made by `mean_over_recordings` returns.

    Attributes:
        value: mean loss over the recordings that count, scalar; 0 if none does.
        gradient: its gradient, a tree like the parameters, `None` at what is no floating array.
        values: loss of each recording of the batch, `(recording,)`; 0 where it does not count.
        finite: False where a recording that is present has a loss that is not finite (or, with
            `leave_out_bad`, a gradient), shape `(recording,)`.
        count: how many recordings count, scalar.
    """

    value: Float[Array, ""]
    gradient: Any
    values: Float[Array, " recording"]
    finite: Bool[Array, " recording"]
    count: Int[Array, ""]


def mean_over_recordings(
    loss: Callable[[Any, Any], Any],
    mesh: Mesh,
    *,
    group: int | None,
    leave_out_bad: bool = False,
) -> Callable[[Any, Any, Any], CohortMean]:
    """Make the function that gives the mean of a loss over a batch, and its gradient.

        value = sum_i present_i loss(params, batch_i) / sum_i present_i

    The result is the same bit for bit on any number of devices, in one process or in several, if
    the devices are of one kind. This is by construction. The batch is cut into groups of `group`
    recordings. One compiled program, for one device and one group, gives the group's summed losses
    and gradients, and no device runs any other. The group sums go to where the parameters are and
    are added as a tree of fixed shape: neighbours in pairs, then the pairs' sums in pairs, a loose
    end going up as it is. The update that follows is compiled for one device, as usual, and so is
    the same too. A program that the compiler itself cuts over devices has no such property: it
    rounds in one way for 1 device and in another for 2. What may still differ between machines is
    a sum over very many entries of one recording (seen at a million), which the runtime on a CPU
    cuts by its number of cores. Another order of the batch, or another `group`, changes results by
    rounding.

    With `group=None` the compiler cuts one program for the whole batch over the devices: one
    compilation instead of one a device, and results that agree across numbers of devices up to
    rounding only.

    Absent rows change neither value nor gradient by a bit, whatever they hold.

    The cost: every device compiles the program once; `batch / group` calls, shared out over the
    devices; in every call the parameters are copied to each device; memory for `batch / group`
    gradients where the parameters are. Take `group` as the batch size over the greatest number of
    devices you will use. Host-side: call it outside `jit`.

    Arguments:
        loss: `loss(params, recording) -> scalar`, for one recording without the leading axis; the
            recording is any PyTree. Its noise, if any, comes from a key within the recording.
        mesh: from `recording_mesh`.
        group: recordings in a group. Keep it the same to get the same bits. `None`: see above.
        leave_out_bad: take the mean over the recordings whose loss and gradient are finite; look at
            `finite` to see which were left out. Gradients are then taken one by one, which may cost
            two to three times as much. Default False: a bad recording makes the mean non-finite.

    Returns:
        `mean(params, batch, present) -> CohortMean`. `params` is any PyTree on one device,
        differentiated by its floating arrays; `batch` has a leading `recording` axis, the rows of
        this process, plain arrays; `present`, `(recording,)`, is Boolean. The result covers the
        batches of all processes. It is bound to the device where `params` are; if they start there
        by `jax.device_put(params, jax.local_devices()[0])`, the update is compiled once, not twice.

    Raises:
        TypeError: `group` is no int; on a call, traced arguments, or `loss` returns no floating
            number.
        ValueError: `group` is below 1; no mesh over recordings; on a call, the number of
            recordings is no multiple of `group` (of the number of devices, if it is `None`),
            `present` has another length, `params` are spread over devices, or `loss` returns no
            scalar.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> import numpy as np
        >>> from oscillib.cohort import mean_over_recordings, recording_mesh
        >>> loss = lambda level, x: jnp.sum((x - level) ** 2)
        >>> mean = mean_over_recordings(loss, recording_mesh(), group=1)
        >>> x, present = np.array([[1.0], [3.0], [np.nan]]), np.array([True, True, False])
        >>> out = mean(jnp.array(0.0), x, present)
        >>> print(out.value, out.gradient, out.count)
        5.0 -4.0 2

    Source: pairwise summation; from memory.
    """
    check_mesh(mesh)
    if group is not None:
        group = check_count("group", group)

    def mean(params: Any, batch: Any, present: Any) -> CohortMean:
        home = _home(params, mesh)
        starts = _starts(batch, present, group)
        batch, present = _fill(batch, present)
        if group is None:
            rows = place((batch, present), mesh)
            spread = _spread_sum(loss, leave_out_bad, mesh, replicate(params, mesh), *rows)
            own = jax.tree.map(lambda x: x.addressable_data(0), spread)
            sums, marks = jax.device_put(own, home)
        else:
            run = partial(_group_sum, loss, leave_out_bad)
            parts = _dispatch(run, params, (batch, present), own_devices(mesh), group, starts)
            sums, marks = _add_up(jax.device_put(parts, home), mesh, home)
        value, gradient = _divide(*sums)
        values, finite = marks
        return CohortMean(value, gradient, values, finite, sums[2])

    return mean


def _sums(loss: Any, leave_out_bad: bool, params: Any, rows: Any, present: Array) -> Any:
    """Return summed values, gradient and count of some recordings, and each one's value, flag."""
    moved, fixed = eqx.partition(params, eqx.is_inexact_array)

    def one(moved, row):
        return _check_scalar(loss(eqx.combine(moved, fixed), row))

    if leave_out_bad:
        # Gradients one by one, so that a bad one is seen, and is not yet part of a sum.
        values, gradients = jax.vmap(jax.value_and_grad(one), (None, 0))(moved, rows)
        good = jnp.isfinite(values) & jax.vmap(all_finite)(gradients)
        counts = present & good
        gradient = jax.tree.map(lambda g: _sum_of(counts, g), gradients)
    else:

        def total(moved):
            values = jax.vmap(one, (None, 0))(moved, rows)
            return _sum_of(present, values), values

        (_, values), gradient = jax.value_and_grad(total, has_aux=True)(moved)
        good, counts = jnp.isfinite(values), present
        gradient = jax.tree.map(lambda g: jnp.where(jnp.any(present), g, 0), gradient)
    sums = _sum_of(counts, values), gradient, jnp.sum(counts, dtype=jnp.int32)
    return sums, (jnp.where(counts, values, 0), good | ~present)


def _sum_of(chosen: Array, x: Array) -> Array:
    chosen = chosen.reshape(-1, *(1 for _ in x.shape[1:]))
    return jnp.sum(jnp.where(chosen, x, 0), axis=0, dtype=x.dtype)


# The program of one device: its shape depends on the group, and on nothing else.
_group_sum = eqx.filter_jit(_sums)


@eqx.filter_jit
def _spread_sum(
    loss: Any, leave_out_bad: bool, mesh: Mesh, params: Any, rows: Any, present: Any
) -> Any:
    """Return what `_sums` does, on every device, computed by a program over all of them."""
    out = _sums(loss, leave_out_bad, params, rows, present)
    return jax.lax.with_sharding_constraint(out, NamedSharding(mesh, PartitionSpec()))


def _dispatch(
    run: Any, params: Any, rows: Any, devices: list[Any], group: int, starts: list[int]
) -> list[Any]:
    """Run each group on its device, and return what comes back in the order of the groups."""
    arrays, fixed = eqx.partition(params, eqx.is_array)
    copies = [eqx.combine(jax.device_put(arrays, device), fixed) for device in devices]
    parts: list[Any] = [None] * len(starts)
    # Group j goes to device j modulo their number, so that all have something to do from the start.
    for j, start in enumerate(starts):
        own = jax.tree.map(lambda x, a=start: x[a : a + group], rows)
        k = j % len(devices)
        parts[j] = run(copies[k], *jax.device_put(own, devices[k]))
    return parts


def _add_up(parts: list[Any], mesh: Mesh, home: Any) -> tuple[Any, Any]:
    """Add the group sums of all processes in one order, and join the marks of the recordings."""
    sums = [part[0] for part in parts]
    marks = jax.tree.map(lambda *xs: jnp.concatenate(xs), *(part[1] for part in parts))
    # The levels of the tree that lie within the share of this process; then those across.
    while len(sums) % 2 == 0:
        sums = _level(sums)
    if process_count(mesh) > 1:
        stacked = jax.tree.map(lambda *xs: jnp.stack(xs), *sums)
        stacked, marks = gather_processes((stacked, marks), mesh, home)
        number = stacked[0].shape[0]
        sums = [jax.tree.map(lambda x, i=i: x[i], stacked) for i in range(number)]
    while len(sums) > 1:
        sums = _level(sums)
    return sums[0], marks


def _level(sums: list[Any]) -> list[Any]:
    """Add neighbours in pairs; a loose end goes up as it is."""
    pairs = zip(sums[::2], sums[1::2], strict=False)
    return [_add(a, b) for a, b in pairs] + sums[len(sums) // 2 * 2 :]


@jax.jit
def _add(a: Any, b: Any) -> Any:
    return jax.tree.map(lambda x, y: x + y, a, b)


@jax.jit
def _divide(value: Array, gradient: Any, count: Array) -> Any:
    count = jnp.maximum(count, 1)
    return jax.tree.map(lambda x: x / count.astype(x.dtype), (value, gradient))


_NOT_TRACED = (
    "`{}` must hold known values, because this function sends them to devices; got a traced array. "
    "Fix: call it outside `jit`, and compile the update after it."
)


def _home(params: Any, mesh: Mesh) -> Any:
    """Return the one device where the parameters are."""
    homes = set()
    for path, leaf in jax.tree_util.tree_leaves_with_path(params):
        if isinstance(leaf, Tracer):
            raise TypeError(_NOT_TRACED.format("params"))
        if isinstance(leaf, jax.Array):
            homes |= leaf.sharding.device_set
        if len(homes) > 1:
            raise ValueError(
                f"`params{jax.tree_util.keystr(path)}` must be on one device, as all of `params`; "
                f"they are on {len(homes)}. Fix: no `replicate` before this function; or "
                "`jax.device_put(params, jax.local_devices()[0])`."
            )
    return homes.pop() if homes else own_devices(mesh)[0]


def _fill(batch: Any, present: Any) -> tuple[Any, np.ndarray]:
    """Put a recording that is present in place of absent ones: what they hold might be NaN.

    A gradient that is multiplied by 0 later must be finite.
    """
    present = np.asarray(present)
    if not present.all():
        index = np.where(present, np.arange(present.size), np.argmax(present))
        batch = jax.tree.map(lambda x: x[index], batch)
    return batch, present


def _check_scalar(value: Any) -> Array:
    if jnp.shape(value) != ():
        raise ValueError(
            f"`loss` must return a scalar for one recording; got shape {jnp.shape(value)}. "
            "Fix: sum or average over what it returns."
        )
    if not jnp.issubdtype(jnp.result_type(value), jnp.floating):
        raise TypeError(f"`loss` must return a real floating number; got {jnp.result_type(value)}.")
    return value


def _starts(batch: Any, present: Any, group: int | None) -> list[int]:
    """Return where groups start, or raise where the batch does not fit."""
    size = batch_length("batch", batch)
    if jnp.shape(present) != (size,) or jnp.result_type(present) != jnp.bool_:
        raise ValueError(
            f"`present` must be Boolean of shape (recording,) = ({size},); got shape "
            f"{jnp.shape(present)}, {jnp.result_type(present)}. "
            f"Fix: `np.ones({size}, bool)` if all are."
        )
    for leaf in jax.tree.leaves((batch, present)):
        if isinstance(leaf, Tracer):
            raise TypeError(_NOT_TRACED.format("batch"))
        if isinstance(leaf, jax.Array) and not leaf.is_fully_addressable:
            raise ValueError(
                "`batch` must be the rows of this process; got an array spread over processes. "
                "Fix: no `place` before this function."
            )
    if group is not None and size % group:
        raise ValueError(
            f"`batch` must hold a multiple of `group`={group} recordings; got {size} in this "
            "process. Fix: another `size` in `batches`, or another `group`."
        )
    return list(range(0, size, group or size))
