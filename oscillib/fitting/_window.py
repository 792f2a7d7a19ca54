"""How long a window may be, given how wrong the frequency may be."""

import math
from typing import Any

import jax.numpy as jnp
import numpy as np
from jaxtyping import Array

from .._validate import as_float, check_count, check_values


def longest_window(frequency_error: Any) -> Array:
    """Give the longest window in which a wrong frequency still slides down to the right one.

    A tone of wrong frequency, its amplitude and phase refitted in every window of length `W`,
    leaves the squared error

        1 - (sin(d W / 2) / (d W / 2))^2,    d = frequency_error

    which falls towards `d = 0` only up to its first maximum, at `W d = 2 pi` (one cycle). Beyond
    it descent leads away, to a local minimum. The rule keeps to half of that:

        W = pi / |frequency_error|,    that is  W (frequency_error / 2 pi) = 0.5 cycles.

    Arguments:
        frequency_error: how far the angular frequency may be off, any shape, rad per time unit;
            its sign has no meaning.

    Returns:
        The longest window, shape of `frequency_error`, in time units; infinite for error 0.

    Raises:
        ValueError: the error is not finite (checked where its value is known).

    Example:
        >>> from oscillib.fitting import longest_window
        >>> longest_window(2 * jnp.pi * 0.05)  # 0.05 cycles per time unit
        Array(10., dtype=float64)

    Source: common practice, no source; the maximum was measured at 0.017, 0.050 and 0.200 Hz for a
        1 Hz tone in windows of 60, 20 and 5 s.
    """
    error = as_float(frequency_error)
    check_values("frequency_error", error, np.isfinite, "finite")
    return jnp.pi / jnp.abs(error)


def window_lengths(
    num_steps: int, *, first: int, last: int | None = None, factor: float | int = 2
) -> tuple[int, ...]:
    """List growing window lengths for a fit in stages. Host-side: lengths set array shapes.

        first, factor first, factor^2 first, ...,  ending with exactly `last`

    Every stage sharpens the frequency, which allows the next, longer window (`longest_window`).

    Arguments:
        num_steps: steps in the whole record; no window is longer.
        first: steps in the first window, about what `longest_window` allows.
        last: steps in the last window, default `num_steps`.
        factor: growth from one stage to the next, above 1; 2 by default. A window of twice the
            length needs half the frequency error, and a fit sharpens it by more than that.

    Returns:
        Increasing lengths in steps.

    Raises:
        ValueError: `first <= last <= num_steps` fails, or `factor` is not above 1.
        TypeError: a length is not a Python int.

    Example:
        >>> from oscillib.fitting import window_lengths
        >>> window_lengths(1000, first=100)
        (100, 200, 400, 800, 1000)

    Source: common practice, no source.
    """
    num_steps = check_count("num_steps", num_steps)
    first = check_count("first", first)
    last = num_steps if last is None else check_count("last", last)
    if not first <= last <= num_steps:
        raise ValueError(
            "`first`, `last` and `num_steps` must satisfy first <= last <= num_steps; got "
            f"first={first}, last={last}, num_steps={num_steps}."
        )
    if not (factor > 1 and math.isfinite(factor)):
        raise ValueError(
            f"`factor` must be finite and above 1, so that windows grow; got {factor}."
        )
    lengths, n = [], first
    while n < last:
        lengths.append(n)
        # A factor close to 1 must not repeat a length.
        n = max(round(n * factor), n + 1)
    return (*lengths, last)
