"""Regular grids, sampling intervals and gaps of recordings; host-side."""

from typing import Any

import jax.numpy as jnp
import numpy as np

from .._validate import as_float, check_shape, is_concrete
from ._recording import Recording, check_times, host_arrays


def on_grid(
    recording: Recording, *, step: float | None = None, tolerance: float = 1e-3
) -> Recording:
    """Put a nearly regular recording on a regular grid, with missing rows inserted; host-side.

    The grid is `times[0] + k step`. Every sample must lie within `tolerance * step` of a grid point
    of its own (plus the rounding of its dtype) and moves there; nothing is dropped or interpolated.

    Arguments:
        recording: one recording with known values.
        step: spacing of the grid, in the unit of `times`. By default the median interval, refined
            so that the last sample falls on the grid (times rounded to a few digits have a median
            that drifts away).
        tolerance: greatest distance from the grid as a fraction of `step`, from 0 to below 0.5.

    Returns:
        A `Recording` whose times are the grid from the first sample to the last; `mask` is False in
        the rows that had no sample.

    Raises:
        TypeError: `recording` is no `Recording`, or is traced.
        ValueError: a sample lies off the grid, or two share a grid point; `step` or `tolerance` is
            out of range; a single sample without `step`.

    Example:
        >>> from oscillib.recordings import on_grid, recording
        >>> r = on_grid(recording([0.0, 0.5, 1.5], [[1.0], [2.0], [4.0]]), step=0.5)
        >>> r.times.tolist(), r.mask[:, 0].tolist()
        ([0.0, 0.5, 1.0, 1.5], [True, True, False, True])
    """
    times, values, mask = host_arrays("recording", recording)
    _check_number("tolerance", tolerance, 0 <= tolerance < 0.5, "from 0 to below 0.5")
    if step is None:
        step = _usual_step(times)
    else:
        step = float(step)
        _check_number("step", step, 0 < step < np.inf, "positive and finite")
    dtype = recording.times.dtype
    rows = _grid_rows(times, step, tolerance * step + _rounding(times, dtype))
    count = int(rows[-1]) + 1
    grid = times[0] + step * np.arange(count)
    spread_values = np.zeros((count, values.shape[1]))
    spread_mask = np.zeros((count, values.shape[1]), bool)
    spread_values[rows], spread_mask[rows] = values, mask
    grid = np.asarray(jnp.asarray(grid, dtype))
    check_times("times of the grid", grid)
    return Recording(
        jnp.asarray(grid),
        jnp.asarray(spread_values, dtype),
        jnp.asarray(spread_mask),
        recording.channels,
    )


def sampling_interval(times: Any, *, tolerance: float = 1e-6) -> float | None:
    """Return the sampling interval of regular times, or None where they are irregular; host-side.

    Times are regular if each lies within `tolerance` intervals (plus the rounding of its dtype) of
    the line from the first to the last.

    Arguments:
        times: strictly increasing times, shape `(time,)`, at least two.
        tolerance: greatest distance as a fraction of the interval, from 0 to below 0.5.

    Returns:
        The mean interval, in the unit of `times`, or None.

    Raises:
        TypeError: `times` is traced.
        ValueError: `times` has a wrong shape, fewer than two entries, or does not increase.

    Example:
        >>> from oscillib.recordings import sampling_interval
        >>> sampling_interval([0.0, 0.5, 1.0])
        0.5
        >>> print(sampling_interval([0.0, 0.5, 2.0]))
        None
    """
    if not is_concrete(times):
        raise TypeError(
            "`times` must be known, because this function runs on the host; got a traced array. "
            "Fix: call it outside `jit`, and pass the interval in."
        )
    _check_number("tolerance", tolerance, 0 <= tolerance < 0.5, "from 0 to below 0.5")
    times = np.asarray(as_float(times))
    check_shape("times", times, (None,), "(time,)")
    if times.size < 2:
        raise ValueError(
            f"`times` must have at least two entries to have an interval; got {times.size}. "
            "Fix: pass the times of the whole recording."
        )
    check_times("times", times)
    rounding = _rounding(times, times.dtype)
    times = times.astype(np.float64)
    interval = float(times[-1] - times[0]) / (times.size - 1)
    off = np.abs(times - times[0] - interval * np.arange(times.size))
    return interval if bool(np.all(off <= tolerance * interval + rounding)) else None


def gaps(recording: Recording, *, longer_than: float) -> list[tuple[float, float]]:
    """List the stretches longer than `longer_than` in which no channel has a sample; host-side.

    Stretches before the first and after the last sample count too, as far as `times` reach. One
    channel that has a sample ends a gap.

    Arguments:
        recording: one recording with known values.
        longer_than: length a gap must exceed (by more than rounding), in the unit of `times`.

    Returns:
        `(start, stop)` of each gap, in order: the times of the samples on its two sides.

    Raises:
        TypeError: `recording` is no `Recording`, or is traced.
        ValueError: `longer_than` is not positive.

    Example:
        >>> from oscillib.recordings import gaps, recording
        >>> gaps(recording([0.0, 1.0, 5.0, 6.0], [[1.0], [2.0], [3.0], [4.0]]), longer_than=1.0)
        [(1.0, 5.0)]
    """
    times, _, mask = host_arrays("recording", recording)
    _check_number("longer_than", longer_than, 0 < longer_than < np.inf, "positive and finite")
    seen = np.any(mask, axis=1, keepdims=True).ravel()
    seen[[0, -1]] = True
    edges = times[seen]
    long = np.diff(edges) > longer_than + _rounding(times, recording.times.dtype)
    return [(float(edges[i]), float(edges[i + 1])) for i in np.flatnonzero(long)]


def _rounding(times: np.ndarray, dtype: Any) -> float:
    """Return by how much a difference of two stored times may be off: no fault of the sampling."""
    return float(jnp.finfo(dtype).eps) * float(np.max(np.abs(times)))


def _usual_step(times: np.ndarray) -> float:
    if times.size < 2:
        raise ValueError(
            "`step` must be given for a recording of a single sample, which has no interval. "
            "Fix: `step=...`, in the unit of `times`."
        )
    intervals = np.diff(times)
    # An interval that occurs: the mean of the two middle ones may fit neither.
    median = np.quantile(intervals, 0.5, method="lower")
    return float((times[-1] - times[0]) / np.round(intervals / median).sum())


def _grid_rows(times: np.ndarray, step: float, allowed: float) -> np.ndarray:
    """Return the grid row of each sample, or name the first that has none of its own."""
    rows = np.round((times - times[0]) / step).astype(int)
    off = np.abs(times - times[0] - step * rows)
    bad = np.flatnonzero(off > allowed)
    keep = "or keep the recording as it is: windows and rollout take intervals of any length"
    if bad.size:
        i = bad[0]
        raise ValueError(
            f"`recording.times` must lie on a grid of step {step:.6g} from {times[0]:.6g}, within "
            f"{allowed:.3g}; index {i}, at {times[i]:.9g}, is {off[i]:.3g} away. Fix: another "
            f"`step`, a larger `tolerance` (this one needs {off[i] / step:.2g}), {keep}."
        )
    bad = np.flatnonzero(np.diff(rows) == 0)
    if bad.size:
        i = bad[0]
        raise ValueError(
            f"`recording.times` must each have a grid point of their own; indices {i} and {i + 1}, "
            f"at {times[i]:.9g} and {times[i + 1]:.9g}, share one of step {step:.6g}. "
            f"Fix: a smaller `step`, {keep}."
        )
    return rows


def _check_number(name: str, x: float, good: bool, expected: str) -> None:
    if not good:
        raise ValueError(f"`{name}` must be {expected}; got {x}. Fix: give a number in that range.")
