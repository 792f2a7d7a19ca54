"""Readouts: shape, precision, and derivative."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import check_count, check_floating
from ._derivative import check_derivatives
from ._failure import assert_close, fail
from ._loss import generator
from ._tree import cast


def check_readout(
    readout: Callable[[Any, Any], Float[Array, " channel"]],
    y: Float[Array, "*state"],
    params: Any,
    channels: int,
    *,
    key: Array,
) -> None:
    """Check a readout: one number a channel, in the precision of the state, differentiable.

        readout(y, params) has shape (channel,), finite, of the dtype of y

    in float32 and, where it is switched on, in float64 (state and parameters are converted); the
    same value alone, under `jit`, and under `vmap` over states; derivatives in state and parameters
    by `check_derivatives`, where 64-bit floats are switched on.

    Arguments:
        readout: `readout(y, params) -> (channel,)`.
        y: one state, shape `(*state)`.
        params: PyTree of parameters.
        channels: number of channels that it must return.
        key: random key of the directions of derivatives, and of other states.

    Raises:
        AssertionError: one of these does not hold.
        ValueError: `channels` is below 1.
        TypeError: `channels` is not an int; `y` is not floating.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.checks import check_readout
        >>> from oscillib.observe import ReadoutParams, linear_readout
        >>> params = ReadoutParams(gain=[[1.0, 0.5]], offset=[0.1])
        >>> check_readout(linear_readout, jnp.ones((2, 2)), params, 1, key=jax.random.key(0))
    """
    check_floating("y", y)
    y, channels = jnp.asarray(y), check_count("channels", channels)
    # Without `jax_enable_x64` the second precision is the first.
    for dtype in dict.fromkeys([jnp.dtype(jnp.float32), jnp.zeros(()).dtype]):
        _check_output(readout, cast(y, dtype), cast(params, dtype), channels, dtype)
    moved = 1 + 0.1 * generator(key).normal(size=(4, *y.shape))
    moved[0] = 1
    states = jnp.asarray(np.asarray(y) * moved, y.dtype)
    alone = np.stack([np.asarray(readout(one, params)) for one in states[:2]])
    bad = np.argwhere(~np.isfinite(alone[0]))
    if len(bad):
        index = tuple(int(i) for i in bad[0])
        fail(
            "finite readout",
            leaf="readout(y, params)",
            index=index,
            expected="a finite number in every channel",
            got=alone[0][index],
            hint="look for a division, logarithm or root of zero",
        )
    rtol = 100 * float(jnp.finfo(y.dtype).eps)
    atol = rtol * float(np.max(np.abs(alone)))
    together = np.asarray(_together(readout, states, params))[:2]
    hint = "keep no state between calls, and treat a state as a whole, not by its leading axis"
    assert_close(
        "readout under jit and vmap equals a loop", together, alone, rtol=rtol, atol=atol, hint=hint
    )
    if jnp.zeros(()).dtype == jnp.float64:
        point = (cast(y, jnp.float64), cast(params, jnp.float64))
        compiled = eqx.filter_jit(readout)
        check_derivatives(compiled, *point, key=key, names=("y", "params"))


@eqx.filter_jit
def _together(readout: Any, states: Array, params: Any) -> Array:
    return jax.vmap(lambda y: readout(y, params))(states)


def _check_output(readout: Any, y: Array, params: Any, channels: int, dtype: Any) -> None:
    expected = f"({channels},) {dtype}, shape (channel,) in the precision of the state"
    try:
        out = jax.eval_shape(lambda y: readout(y, params), y)
    except (TypeError, ValueError) as error:
        fail(
            f"readout in {dtype}",
            leaf="readout(y, params)",
            index=None,
            expected=expected,
            got=f"{type(error).__name__}: {str(error).strip().splitlines()[0]}",
            hint="build constants in the dtype of the state; does the state fit the parameters?",
        )
    shape, got = getattr(out, "shape", type(out).__name__), getattr(out, "dtype", "")
    if shape != (channels,):
        fail(
            "shape of the readout",
            leaf="readout(y, params)",
            index=None,
            expected=expected,
            got=f"{shape} {got}",
            hint="return one number for every channel of one state; broadcast and drop nothing",
        )
    if got != dtype:
        fail(
            "dtype of the readout",
            leaf="readout(y, params)",
            index=None,
            expected=expected,
            got=f"{shape} {got}",
            hint="build constants in the dtype of the state, such as `jnp.asarray(2, y.dtype)`",
        )
