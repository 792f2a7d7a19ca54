"""Explicit Runge-Kutta steps for any vector field."""

from typing import Any

import jax
import jax.numpy as jnp
from jax import lax

from .._validate import check_count
from ._types import Field, Scalar, State, Step


def heun(field: Field, *, substeps: int = 1) -> Step:
    """Make the explicit trapezium step: order 2, two field calls.

        k1 = f(t, y),  k2 = f(t + h, y + h k1),  y' = y + h (k1 + k2) / 2

    Arguments:
        field: `field(t, y, params) -> dy` with exactly the shape and dtype of `y`.
        substeps: how many equal steps make up one `h`; default 1.

    Returns:
        A step: `step(params, h) -> advance`, `advance(t, y) -> y`.

    Raises:
        ValueError: `substeps` is below 1; on tracing, the field returns another shape.
        TypeError: `substeps` is not an int; on tracing, the field returns another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import heun
        >>> advance = heun(lambda t, y, params: -params * y)(1.0, jnp.asarray(0.1))
        >>> advance(0.0, jnp.array([1.0]))
        Array([0.905], dtype=float64)

    Source: Hairer, Norsett & Wanner, Solving ODEs I (from memory).
    """
    checked = check_field_output(field)

    def one(t: Any, y: State, h: Scalar, params: Any) -> State:
        k1 = checked(t, y, params)
        k2 = checked(t + h, y + h * k1, params)
        return y + h / 2 * (k1 + k2)

    return _repeated(one, substeps)


def rk4(field: Field, *, substeps: int = 1) -> Step:
    """Make the classical Runge-Kutta step: order 4, four field calls.

        y' = y + h (k1 + 2 k2 + 2 k3 + k4) / 6

    Arguments:
        field: `field(t, y, params) -> dy` with exactly the shape and dtype of `y`.
        substeps: how many equal steps make up one `h`; default 1.

    Returns:
        A step: `step(params, h) -> advance`, `advance(t, y) -> y`.

    Raises:
        ValueError: `substeps` is below 1; on tracing, the field returns another shape.
        TypeError: `substeps` is not an int; on tracing, the field returns another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.integrate import rk4
        >>> advance = rk4(lambda t, y, params: -params * y)(1.0, jnp.asarray(0.1))
        >>> advance(0.0, jnp.array([1.0]))
        Array([0.9048375], dtype=float64)

    Source: Hairer, Norsett & Wanner, Solving ODEs I (from memory).
    """
    checked = check_field_output(field)

    def one(t: Any, y: State, h: Scalar, params: Any) -> State:
        k1 = checked(t, y, params)
        k2 = checked(t + h / 2, y + h / 2 * k1, params)
        k3 = checked(t + h / 2, y + h / 2 * k2, params)
        k4 = checked(t + h, y + h * k3, params)
        return y + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)

    return _repeated(one, substeps)


def check_field_output(field: Field) -> Field:
    """Wrap a field so that an output of another shape or dtype than the state raises on tracing.

    A field that returns a scalar for a vector state, or has `t` and `y` swapped, would otherwise
    be broadcast without a word.
    """

    def checked(t, y, params):
        dy = field(t, y, params)
        got, expected = jax.eval_shape(lambda: dy), jax.eval_shape(lambda: y)
        if not hasattr(got, "shape") or got.shape != expected.shape:
            raise ValueError(
                "`field(t, y, params)` must return one array of the shape of `y`, "
                f"{expected.shape}; got {getattr(got, 'shape', type(dy).__name__)}. "
                "Fix: return one derivative per entry, and check the order of the arguments."
            )
        if got.dtype != expected.dtype:
            raise TypeError(
                f"`field(t, y, params)` must return the dtype of `y`, {expected.dtype}; got "
                f"{got.dtype}. Fix: build params and constants in the precision of the state."
            )
        return dy

    return checked


def _repeated(one, substeps: int) -> Step:
    substeps = check_count("substeps", substeps)

    def step(params, h):
        small = h / substeps

        def advance(t, y):
            if substeps == 1:
                return one(t, y, small, params)

            def body(y, i):
                return one(t + i * small, y, small, params), None

            # A scan rather than a Python loop: the size of the program does not grow.
            index = jnp.arange(substeps).astype(jnp.asarray(small).dtype)
            return lax.scan(body, y, index)[0]

        return advance

    return step
