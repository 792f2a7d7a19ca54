"""The shapes of the functions that this room takes and returns."""

from collections.abc import Callable
from typing import Any, TypeAlias

from jaxtyping import Array, Float


State: TypeAlias = Float[Array, "*state"]
Scalar: TypeAlias = Float[Array, ""]
# field(t, y, params) -> dy
Field: TypeAlias = Callable[[Any, Any, Any], Any]
# flow(params, h) -> apply, apply(y) -> y
Flow: TypeAlias = Callable[[Any, Any], Callable[[Any], Any]]
# step(params, h) -> advance, advance(t, y) -> y
Step: TypeAlias = Callable[[Any, Any], Callable[[Any, Any], Any]]
