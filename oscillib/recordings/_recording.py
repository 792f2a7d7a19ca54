"""A recording as arrays: sample times, values with a mask instead of NaN, names of channels."""

from collections.abc import Iterable, Sequence
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import as_float, check_count, check_same_dtype, is_concrete


class Recording(eqx.Module):
    """What was measured: one row a sample time, one column a channel, gaps marked by a mask.

    Build one with `recording`, which checks and makes the mask. A missing entry holds 0 in
    `values`, so that no NaN can leak into a gradient; always read `values` together with `mask`.

    Arguments:
        times: strictly increasing sample times, shape `(time,)`, in the user's own time unit.
        values: measured values, shape `(time, channel)`, in the user's units; 0 where missing.
        mask: True where a value was observed, shape `(time, channel)`.
        channels: names of the channels; static, so that a new name compiles anew.

    Example:
        >>> from oscillib.recordings import recording
        >>> r = recording([0.0, 1.0], [[1.0, 2.0], [float("nan"), 3.0]], channels=("a", "b"))
        >>> r.values
        Array([[1., 2.],
               [0., 3.]], dtype=float64)
        >>> r.mask[1].tolist()
        [False, True]
    """

    times: Float[Array, " time"]
    values: Float[Array, "time channel"]
    mask: Bool[Array, "time channel"]
    channels: tuple[str, ...] = eqx.field(static=True)

    @property
    def nan_values(self) -> Float[Array, "time channel"]:
        """The values with NaN where missing, as plots and tables want them; never differentiate."""
        return jnp.where(self.mask, self.values, jnp.nan)


def recording(times: Any, values: Any, *, channels: Sequence[str] | None = None) -> Recording:
    """Check measured arrays and make a `Recording`; NaN in `values` marks a missing entry.

    Shapes and dtypes are checked always, values only where they are known: inside `jit` an
    infinite value or a channel without a sample passes.

    Arguments:
        times: sample times, shape `(time,)`, finite, strictly increasing, of any spacing, in the
            user's own time unit.
        values: measured values, shape `(time, channel)`, NaN where missing. Integers become the
            default float; floats keep their dtype, which must be that of `times`.
        channels: a name for each channel; default `channel_0`, `channel_1`, ...

    Returns:
        A `Recording` with `values` and `mask` of shape `(time, channel)`.

    Raises:
        TypeError: complex, boolean, date or text entries; a masked array; two float dtypes.
        ValueError: a wrong shape or length, no sample, times that do not increase, an infinite
            value, a channel with no sample, or names that do not fit.

    Example:
        >>> from oscillib.recordings import recording
        >>> r = recording([0.0, 0.5, 2.0], [[1.0], [float("nan")], [3.0]], channels=["lfp"])
        >>> r.nan_values[:, 0]
        Array([ 1., nan,  3.], dtype=float64)
    """
    times, values = _numbers("times", times), _numbers("values", values)
    _check_shapes(times, values)
    check_same_dtype("times", times, "values", values)
    names = _check_names(channels, values.shape[1])
    check_times("times", times)
    _check_observed(values, names)
    # Known values are masked on the host, where a new length compiles nothing.
    xp = np if is_concrete(values) else jnp
    mask = ~xp.isnan(values)
    filled = xp.where(mask, values, xp.zeros_like(values))
    return Recording(jnp.asarray(times), jnp.asarray(filled), jnp.asarray(mask), names)


def take(recording: Recording, start: int, stop: int) -> Recording:
    """Return samples `start` to `stop - 1` of a recording, with all its channels.

    A channel may have no observed sample in the slice; it is kept, all missing.

    Arguments:
        recording: one recording (`vmap` over a stack of them).
        start: index of the first sample, at least 0.
        stop: index after the last sample, at most the number of samples.

    Returns:
        A `Recording` of `stop - start` samples.

    Raises:
        TypeError: `recording` is no `Recording`; `start` or `stop` is no Python int.
        ValueError: `recording` is a stack, or the slice is empty or reaches outside.

    Example:
        >>> from oscillib.recordings import recording, take
        >>> take(recording([0.0, 1.0, 2.0], [[5.0], [6.0], [7.0]]), 1, 3).times
        Array([1., 2.], dtype=float64)
    """
    check_recording("recording", recording)
    start = check_count("start", start, least=0)
    stop = check_count("stop", stop, least=0)
    n = recording.times.shape[0]
    if not start < stop <= n:
        raise ValueError(
            f"`start` and `stop` must satisfy 0 <= start < stop <= {n}, the number of samples; "
            f"got start={start}, stop={stop}. Fix: count both from the first sample."
        )
    return Recording(
        recording.times[start:stop],
        recording.values[start:stop],
        recording.mask[start:stop],
        recording.channels,
    )


def check_recording(name: str, x: Any) -> None:
    """Raise unless `x` is one recording: not bare arrays, not a stack of recordings."""
    if not isinstance(x, Recording):
        raise TypeError(
            f"`{name}` must be a Recording; got {type(x).__name__}. "
            "Fix: `recording(times, values)` makes one."
        )
    if jnp.ndim(x.values) != 2:
        raise ValueError(
            f"`{name}` must be one recording, `values` of shape (time, channel); got shape "
            f"{jnp.shape(x.values)}. Fix: for a stack, go through it with `jax.vmap` or a loop."
        )


def host_arrays(name: str, x: Any) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return times and values in double precision and the mask, for work outside `jit`."""
    check_recording(name, x)
    if not is_concrete(x.times, x.values, x.mask):
        raise TypeError(
            f"`{name}` must hold known values, because this function runs on the host; got an "
            "array under `jit`, `vmap` or `grad`. Fix: call it before, outside the transformation."
        )
    return np.asarray(x.times, np.float64), np.asarray(x.values, np.float64), np.asarray(x.mask)


def check_times(name: str, times: Any) -> None:
    """Raise ValueError unless times are finite and strictly increasing; silent on tracers."""
    if not is_concrete(times):
        return
    times = np.asarray(times)
    bad = np.flatnonzero(~np.isfinite(times))
    if bad.size:
        raise ValueError(
            f"`{name}` must be finite; got {times[bad[0]]} at index {bad[0]}. "
            "Fix: drop the samples whose time is unknown."
        )
    bad = np.flatnonzero(times[1:] <= times[:-1])
    if not bad.size:
        return
    i = int(bad[0]) + 1
    if times[i] == times[i - 1]:
        raise ValueError(
            f"`{name}` must increase strictly; indices {i - 1} and {i} are both {times[i]} in "
            f"{times.dtype}. Fix: keep one sample a time; if they differ before rounding, "
            f"subtract the first time or set `jax_enable_x64`."
        )
    raise ValueError(
        f"`{name}` must increase strictly; index {i} is {times[i]}, after {times[i - 1]}. "
        f"Fix: sort both arrays with `order = np.argsort({name})`."
    )


def _numbers(name: str, x: Any) -> jax.Array | np.ndarray:
    """Return a floating array of the dtype JAX will give it; known values stay on the host.

    A known array would turn into a tracer if it were converted under `jit`, and escape the checks.
    """
    if isinstance(x, np.ma.MaskedArray):
        raise TypeError(
            f"`{name}` must be a plain array; got a masked one, whose mask would be lost. "
            f"Fix: `{name}.filled(np.nan)`."
        )
    if not isinstance(x, jax.Array):
        try:
            x = np.asarray(x)
        except ValueError as error:
            raise ValueError(
                f"`{name}` must be one array; its rows differ in length ({error}). "
                "Fix: give every row an entry for each channel, NaN where missing."
            ) from error
    if np.issubdtype(x.dtype, np.datetime64) or np.issubdtype(x.dtype, np.timedelta64):
        raise TypeError(
            f"`{name}` must hold real numbers; got dates ({x.dtype}). Fix: count from the first, "
            f"such as `({name} - {name}[0]) / np.timedelta64(1, 's')` for seconds."
        )
    if not (jnp.issubdtype(x.dtype, jnp.floating) or jnp.issubdtype(x.dtype, jnp.integer)):
        raise TypeError(
            f"`{name}` must hold real numbers; got dtype {x.dtype}. Fix: make each part a channel "
            f"of its own (complex), or `{name}.astype(float)` (numbers stored as something else)."
        )
    if not is_concrete(x):
        return as_float(x)
    with jax.ensure_compile_time_eval():
        return np.asarray(as_float(x))


def _check_shapes(times: Any, values: Any) -> None:
    if times.ndim != 1:
        raise ValueError(
            f"`times` must have shape (time,); got shape {times.shape}. "
            "Fix: `times.ravel()` if it is a single row or column; `vmap` over a batch."
        )
    if values.ndim != 2:
        fix = (
            "`values[:, None]` for a single channel" if values.ndim == 1 else "`vmap` over a batch"
        )
        raise ValueError(
            f"`values` must have shape (time, channel); got shape {values.shape}. Fix: {fix}."
        )
    if values.size == 0 or times.size == 0:
        raise ValueError(
            f"`values` must hold at least one sample of one channel; got shape {values.shape} "
            f"with {times.size} `times`. Fix: leave empty recordings out."
        )
    if values.shape[0] != times.size:
        turned = values.shape[1] == times.size
        fix = "`values.T`, time comes first" if turned else "give one row of `values` a time"
        raise ValueError(
            f"`values` must have a row for each of the {times.size} `times`; got shape "
            f"{values.shape}. Fix: {fix}."
        )


def _check_names(channels: Any, count: int) -> tuple[str, ...]:
    if channels is None:
        return tuple(f"channel_{i}" for i in range(count))
    listed = isinstance(channels, Iterable) and not isinstance(channels, str)
    if not listed or not all(isinstance(c, str) for c in channels):
        raise TypeError(
            f"`channels` must be a sequence of names; got {channels!r}. "
            "Fix: a tuple of strings, such as `('left', 'right')`."
        )
    names = tuple(str(c) for c in channels)
    if len(names) != count:
        raise ValueError(
            f"`channels` must have a name for each of the {count} columns of `values`; got "
            f"{len(names)}: {names}. Fix: give {count} names."
        )
    for i, name in enumerate(names):
        if not name or name != name.strip() or not name.isprintable():
            raise ValueError(
                f"`channels` must be printable names with no space at either end, so that a file "
                f"can hold them; got {name!r} at index {i}. Fix: rename it."
            )
        if name in names[:i]:
            raise ValueError(
                f"`channels` must differ from each other; got {name!r} at indices "
                f"{names.index(name)} and {i}. Fix: rename one."
            )
    return names


def _check_observed(values: Any, names: tuple[str, ...]) -> None:
    """Raise on an infinite value or a channel with no sample, where the values are known."""
    if not is_concrete(values):
        return
    bad = np.argwhere(np.isinf(values))
    if bad.size:
        i, j = (int(k) for k in bad[0])
        raise ValueError(
            f"`values` must be finite, or NaN where missing; got {values[i, j]} at index "
            f"{(i, j)} (channel {names[j]!r}). Fix: find its cause, or mark it missing with NaN."
        )
    empty = np.flatnonzero(np.isnan(values).all(axis=0))
    if empty.size:
        raise ValueError(
            f"`values` must have at least one sample in every channel; channel "
            f"{names[empty[0]]!r} is missing (NaN) at all {values.shape[0]} times. "
            "Fix: leave that channel out."
        )
