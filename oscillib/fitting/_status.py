"""How a fit ended: one set of codes for every solver of this room."""

from enum import IntEnum
from typing import Any

import numpy as np


class Status(IntEnum):
    """How a fit ended; only `CONVERGED` is a success.

    The codes are small integers, so that they travel through `jit` and `vmap` as arrays:
    `result.status == Status.CONVERGED`. `describe` puts one into words.

    `RUNNING` is seen only between the steps of a solver that you drive yourself.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fitting import Status
        >>> jnp.array([0, 2]) == Status.CONVERGED
        Array([ True, False], dtype=bool)
    """

    RUNNING = -1
    CONVERGED = 0
    STEP_LIMIT = 1
    NON_FINITE = 2
    AT_BOUND = 3
    COLLAPSED = 4
    STALLED = 5
    SADDLE = 6


_WORDS = {
    Status.RUNNING: "running: no verdict yet",
    Status.CONVERGED: "converged: loss and gradient are finite and the gradient is small enough",
    Status.STEP_LIMIT: "step limit: not converged after the greatest number of steps",
    Status.NON_FINITE: "non-finite: the loss or a derivative was not finite, and no step helped",
    Status.AT_BOUND: "at a bound: a parameter ran to the edge of what its constraint allows",
    Status.COLLAPSED: "collapsed to the mean: the fit gave up the rhythm for its time average",
    Status.STALLED: "stalled: no step lowered the loss further, but the gradient is not small",
    Status.SADDLE: "saddle: the gradient is small, but the loss curves down in some direction",
}


def describe(status: Any) -> Any:
    """Put a status into words. Host-side.

    Arguments:
        status: a `Status`, or codes as an integer array of any shape.

    Returns:
        A string for a single code, nested lists of strings in the shape of an array.

    Raises:
        ValueError: a code is not one of `Status`.

    Example:
        >>> from oscillib.fitting import Status, describe
        >>> describe(Status.STEP_LIMIT)
        'step limit: not converged after the greatest number of steps'
    """
    codes = np.asarray(status)
    unknown = ~np.isin(codes, list(Status))
    if unknown.any():
        raise ValueError(
            f"`status` must hold codes of `Status`, {int(min(Status))} to {int(max(Status))}; "
            f"got {codes[unknown].flat[0]}."
        )
    return np.vectorize(lambda code: _WORDS[Status(code)], otypes=[object])(codes).tolist()
