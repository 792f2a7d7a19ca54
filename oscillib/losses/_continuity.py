"""Continuity: what gaps between windows cost."""

import math

import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype


def continuity(
    gaps: Float[Array, "joint *state"],
    *,
    weight: Float[Array, ""] | float | None = None,
    scale: Float[Array, "*state"] | None = None,
    precision: Float[Array, "*joint size size"] | None = None,
) -> Float[Array, ""]:
    """Return the quadratic penalty on the gaps between windows.

        weight:     weight / 2  sum g^2
        scale:      1/2  sum (g / scale)^2
        precision:  1/2  sum over joints of  g' precision g

    where `g` is one gap and `g'` its transpose. A precision is the inverse covariance of what the
    noise adds over one window; with it the penalty is the exponent of a Gaussian density. Give
    exactly one of the three.

    Arguments:
        gaps: end of a window minus start of the next, shape `(joint, *state)`.
        weight: a scalar, in inverse squared state units.
        scale: the size of an ordinary gap in each component, shape `(*state)`, state units.
        precision: inverse covariance on the flattened state, shape `(size, size)` where `size` is
            the number of entries of a state, or one for each joint, `(joint, size, size)`.

    Returns:
        A scalar; 0 for a single window.

    Raises:
        ValueError: none or several of the three are given, or one has another shape.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.losses import continuity
        >>> gaps = jnp.array([[3.0, 4.0]])
        >>> print(continuity(gaps, weight=2.0), continuity(gaps, scale=jnp.array([3.0, 4.0])))
        25.0 1.0

    Source: the gap is penalised quadratically; common practice, no source.
    """
    gaps = jnp.asarray(gaps)
    given = {"weight": weight, "scale": scale, "precision": precision}
    chosen = [name for name, value in given.items() if value is not None]
    if len(chosen) != 1:
        raise ValueError(
            "give exactly one of `weight`, `scale` and `precision`; "
            f"got {' and '.join(chosen) or 'none'}."
        )
    name = chosen[0]
    value = given[name]
    value = as_float(value) if hasattr(value, "dtype") else jnp.asarray(value, gaps.dtype)
    check_same_dtype(name, value, "gaps", gaps)
    if name == "weight":
        _require(name, value, (), "a scalar")
        return value / 2 * jnp.sum(gaps**2)
    if name == "scale":
        _require(name, value, gaps.shape[1:], "the shape of one state")
        return jnp.sum((gaps / value[None]) ** 2) / 2
    size = math.prod(gaps.shape[1:])
    flat = gaps.reshape(gaps.shape[0], size)
    if value.shape != (gaps.shape[0], size, size):
        _require(name, value, (size, size), "(size, size) or (joint, size, size)")
        value = jnp.broadcast_to(value, (gaps.shape[0], size, size))
    return jnp.einsum("ji,jik,jk->", flat, value, flat) / 2


def _require(name: str, value: Array, shape: tuple[int, ...], words: str) -> None:
    if value.shape != shape:
        raise ValueError(f"`{name}` must be {words}, {shape}; got shape {value.shape}.")
