"""Windows: cut a time grid, roll all windows out in parallel, see the gaps, join them back."""

from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float, Int

from .._validate import as_float, check_count, check_shape, check_values, is_concrete
from ._rollout import rollout
from ._types import Step


class Windows(eqx.Module):
    """A time grid cut into windows of `length` steps; neighbours share one sample.

    Window k holds samples `k length` to `(k + 1) length`. The last window is padded where the
    recording ends first. Made by `cut`.

    Arguments:
        num_samples: samples of the recording (static).
        length: steps a window (static); a window holds `length + 1` samples.
        t0: time of each window's first sample, shape `(window,)`.
        intervals: the one sampling interval, shape `()`, or all of them where sampling is
            irregular, shape `(window, length)`.
    """

    num_samples: int = eqx.field(static=True)
    length: int = eqx.field(static=True)
    t0: Float[Array, " window"]
    intervals: Float[Array, "..."]

    @property
    def count(self) -> int:
        """Number of windows."""
        return -(-(self.num_samples - 1) // self.length)

    @property
    def index(self) -> Int[np.ndarray, "window sample"]:
        """Sample number of each place in each window; padding repeats the last sample."""
        index = np.arange(self.count)[:, None] * self.length + np.arange(self.length + 1)
        return np.minimum(index, self.num_samples - 1)

    @property
    def owned(self) -> Bool[np.ndarray, "window sample"]:
        """Where a sample counts: a shared one belongs to the window that starts with it.

        Each sample of the recording is owned exactly once; padding is not owned.
        """
        place = np.arange(self.count)[:, None] * self.length + np.arange(self.length + 1)
        owned = place < self.num_samples
        owned[:-1, -1] = False
        return owned


class WindowRollout(NamedTuple):
    """What `roll_windows` returns.

    Attributes:
        states: shape `(window, length + 1, *state)`; past the recording's end in a padded window.
        ends: last state of each window, shape `(window, *state)`.
        gaps: end of each window minus start of the next, shape `(window - 1, *state)`.
        finite: whether all states of a window are finite, shape `(window,)`.
    """

    states: Float[Array, "window sample *state"]
    ends: Float[Array, "window *state"]
    gaps: Float[Array, "joint *state"]
    finite: Bool[Array, " window"]


def cut(times: Float[Array, " time"], length: int, *, tolerance: float = 1e-6) -> Windows:
    """Cut a time grid into windows of `length` steps that overlap in one sample.

    Arguments:
        times: sample times, shape `(time,)`, strictly increasing; gaps and irregular sampling
            are kept as they are, a long interval being one step of that length.
        length: steps a window, from 1 to `time - 1`.
        tolerance: intervals that agree to this fraction count as one; default 1e-6 in float64
            (taken as four spacings of the times' own precision where that is coarser). Needs
            known times: traced ones count as irregular.

    Returns:
        The windows.

    Raises:
        ValueError: fewer than two times; unsorted, duplicate or non-finite times; a window longer
            than the recording.
        TypeError: `length` is not an int.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import cut
        >>> windows = cut(jnp.arange(8.0), 3)
        >>> windows.index
        array([[0, 1, 2, 3],
               [3, 4, 5, 6],
               [6, 7, 7, 7]])

    Source: common practice, no source (neighbouring windows share one sample).
    """
    times = as_float(times)
    check_shape("times", times, (None,), "(time,)")
    num = times.shape[0]
    if num < 2:
        raise ValueError(f"`times` must hold at least two samples; got {num}.")
    if check_count("length", length) > num - 1:
        raise ValueError(
            f"`length` must be at most {num - 1}, the steps of the recording; got {length}. "
            "Fix: shorten the window."
        )
    check_values("times", times, np.isfinite, "finite")
    # Known times are cut on the host, where no new length of a recording compiles anew.
    at = np.asarray(times) if is_concrete(times) else times
    intervals = at[1:] - at[:-1]
    check_values(
        "times", intervals, lambda d: d > 0, "strictly increasing (its differences above 0)"
    )
    starts = np.arange(0, num - 1, length)
    if _regular(times, tolerance):
        # The mean interval, not the first: rounding of late times would else add up.
        each = (np.float64(at[-1]) - np.float64(at[0])) / (num - 1)
    else:
        each = intervals[np.minimum(starts[:, None] + np.arange(length), num - 2)]
    t0, each = (jnp.asarray(x, times.dtype) for x in (at[starts], each))
    return Windows(num, int(length), t0, each)


def roll_windows(
    step: Step,
    params: Any,
    starts: Float[Array, "window *state"],
    windows: Windows,
    *,
    segment: int | None = None,
) -> WindowRollout:
    """Roll all windows out in parallel, each from a start state of its own.

    Arguments:
        step: `step(params, h) -> advance`.
        params: PyTree of parameters, shared by all windows.
        starts: start state of each window, shape `(window, *state)`.
        windows: from `cut`.
        segment: as in `rollout`; default `None`.

    Returns:
        States, ends, gaps and a flag for each window.

    Raises:
        ValueError: `starts` does not hold one state a window.
        TypeError: `starts` differs in dtype from the times.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import cut, rk4, roll_windows
        >>> windows = cut(jnp.arange(7.0), 3)
        >>> growth = rk4(lambda t, y, params: params + 0 * y)
        >>> rolled = roll_windows(growth, jnp.asarray(1.0), jnp.array([[0.0], [5.0]]), windows)
        >>> rolled.gaps  # the first window ends at 3, the second starts at 5
        Array([[-2.]], dtype=float64)
    """
    starts = jnp.asarray(starts)
    check_shape("starts", starts, (windows.count, *starts.shape[1:]), "(window, *state)")
    scalar = windows.intervals.ndim == 0

    def one(y0, t0, h):
        return rollout(
            step, params, y0, h, windows.length if scalar else None, t0=t0, segment=segment
        )

    states = jax.vmap(one, in_axes=(0, 0, None if scalar else 0))(
        starts, windows.t0, windows.intervals
    )
    ends = states[:, -1]
    finite = jnp.all(jnp.isfinite(states), axis=tuple(range(1, states.ndim)))
    return WindowRollout(states, ends, ends[:-1] - starts[1:], finite)


def gather(values: Array, windows: Windows) -> Array:
    """Lay values of a recording out by window.

    Arguments:
        values: shape `(time, ...)`.
        windows: from `cut`.

    Returns:
        Shape `(window, length + 1, ...)`; padding repeats the last sample, see `Windows.owned`.

    Raises:
        ValueError: `values` does not have one row for each sample.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import cut, gather
        >>> gather(jnp.arange(4.0), cut(jnp.arange(4.0), 2))
        Array([[0., 1., 2.],
               [2., 3., 3.]], dtype=float64)
    """
    values = jnp.asarray(values)
    check_shape("values", values, (windows.num_samples, *values.shape[1:]), "(time, ...)")
    return values[windows.index]


def join(windowed: Array, windows: Windows) -> Array:
    """Join what is laid out by window back into one series, each sample from its owner.

    Arguments:
        windowed: shape `(window, length + 1, ...)`, such as `WindowRollout.states`.
        windows: from `cut`.

    Returns:
        Shape `(time, ...)`.

    Raises:
        ValueError: `windowed` does not fit the windows.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import cut, gather, join
        >>> windows = cut(jnp.arange(4.0), 2)
        >>> join(gather(jnp.arange(4.0), windows), windows)
        Array([0., 1., 2., 3.], dtype=float64)
    """
    windowed = jnp.asarray(windowed)
    shape = (windows.count, windows.length + 1, *windowed.shape[2:])
    check_shape("windowed", windowed, shape, "(window, length + 1, ...)")
    sample = np.arange(windows.num_samples)
    owner = np.minimum(sample // windows.length, windows.count - 1)
    return windowed[owner, sample - owner * windows.length]


def _regular(times: Array, tolerance: float) -> bool:
    if not is_concrete(times):
        return False
    t = np.asarray(times, dtype=np.float64)
    mean = (t[-1] - t[0]) / (len(t) - 1)
    # Times late in a float32 recording are themselves only so exact.
    coarse = 4 * float(np.finfo(times.dtype).eps) * np.max(np.abs(t))
    return bool(np.all(np.abs(np.diff(t) - mean) <= max(tolerance * mean, coarse)))
