"""Exact flows: identity, composition, and the equation that they solve."""

from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import as_float, check_floating, check_same_dtype, check_shape
from ._failure import assert_close, fail


# Roundings allowed of a flow, relative to the state: a matrix exponential takes some tens.
_ROUNDINGS = 1e4


def check_flow(
    flow: Callable[[Any, Any], Callable[[Any], Any]],
    params: Any,
    y0: Float[Array, "*state"],
    h: Float[Array, ""] | float,
    part: Callable[[Any, Any, Any], Any],
    *,
    backwards: bool = True,
    rtol: float | None = None,
) -> None:
    """Check that a flow is the exact solution of a part of a field.

        flow(0) = identity,   flow(h/2) flow(h/2) = flow(h),   flow(-h) flow(h) = identity,
        d/ds flow(s)(y0) = part(flow(s)(y0))    at s = 0 and s = h

    Arguments:
        flow: `flow(params, h) -> apply`, `apply(y) -> y`.
        params: PyTree of parameters of both.
        y0: a state, shape `(*state)`. Not a fixed point: nothing moves there.
        h: length of the flow, a scalar, time units.
        part: `part(t, y, params) -> dy`, the part of the field that the flow solves; autonomous.
        backwards: check the flow backwards in time too; default True. Set False where it does not
            exist.
        rtol: error allowed, relative to the largest entry; default 1e4 roundings.

    Raises:
        AssertionError: one of these does not hold; the flow returns another shape or dtype.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_flow
        >>> decay = lambda params, h: lambda y: jnp.exp(-params * h) * y
        >>> check_flow(decay, jnp.asarray(2.0), jnp.ones(1), 0.5, lambda t, y, params: -params * y)

    Source: defining properties of a flow, Hairer, Lubich & Wanner 2006 (from memory).
    """
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    h = as_float(h) if hasattr(h, "dtype") else jnp.asarray(h, y0.dtype)
    check_shape("h", h, (), "()")
    check_same_dtype("h", h, "y0", y0)
    out = jax.eval_shape(lambda k, y: flow(params, k)(y), h, y0)
    _same_as_state("shape and dtype of the flow", "flow(params, h)(y)", out, y0)
    slope = jax.eval_shape(lambda k, y: part(k, y, params), h, y0)
    _same_as_state("shape and dtype of the part", "part(t, y, params)", slope, y0)
    rtol = _ROUNDINGS * float(jnp.finfo(y0.dtype).eps) if rtol is None else rtol
    results = _results(flow, part, params, y0, h)
    whole = results["whole"]
    starting, arriving = results["starting"], results["arriving"]
    opposite = _opposite(*starting)
    for prop, got, expected, hint in (
        ("flow(0) is the identity", results["zero"], y0, "the flow moves in no time"),
        (
            "derivative of the flow at h = 0",
            *starting,
            "the flow has the wrong sign" if opposite else "is `part` all of what the flow solves?",
        ),
        (
            "flow(h/2) twice is flow(h)",
            results["twice"],
            whole,
            "an approximate step is no flow, nor is one of a part that depends on time",
        ),
        ("derivative of the flow at h", *arriving, "the flow is not exact at `h`"),
        (
            "flow(-h) undoes flow(h)",
            results["back"] if backwards else y0,
            y0,
            "set `backwards=False` if the flow does not exist backwards in time",
        ),
    ):
        size = float(np.max(np.abs(np.asarray(expected, float)), initial=0.0)) or 1.0
        assert_close(prop, got, expected, rtol=0.0, atol=rtol * size, hint=hint)


@eqx.filter_jit
def _results(flow: Any, part: Any, params: Any, y0: Array, h: Array) -> dict[str, Any]:
    by_length = lambda s: flow(params, s)(y0)
    one = jnp.ones_like(h)
    whole, arriving = jax.jvp(by_length, (h,), (one,))
    zero, starting = jax.jvp(by_length, (jnp.zeros_like(h),), (one,))
    half = flow(params, h / 2)
    return {
        "zero": zero,
        "whole": whole,
        "twice": half(half(y0)),
        "back": flow(params, -h)(whole),
        "starting": (starting, part(jnp.zeros_like(h), y0, params)),
        "arriving": (arriving, part(h, whole, params)),
    }


def _opposite(got: Array, expected: Array) -> bool:
    a, b = np.asarray(got, float), np.asarray(expected, float)
    return bool(np.any(b != 0)) and np.allclose(a, -b, rtol=1e-3)


def _same_as_state(prop: str, leaf: str, out: Any, y0: Array) -> None:
    got = f"{getattr(out, 'shape', type(out).__name__)} {getattr(out, 'dtype', '')}"
    if got != f"{y0.shape} {y0.dtype}":
        fail(
            prop,
            leaf=leaf,
            index=None,
            expected=f"{y0.shape} {y0.dtype}, as the state",
            got=got,
            hint="build state, parameters and constants in one precision; broadcast nothing",
        )
