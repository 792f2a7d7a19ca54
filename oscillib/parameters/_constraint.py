"""Bijections between a constrained parameter and the unconstrained leaf that an optimiser moves."""

import dataclasses
from abc import ABC, abstractmethod
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float


class Constraint(ABC):
    """What values a parameter array may take; an opaque leaf of a tree of constraints.

    `to_free` maps an allowed value to an unconstrained array, `to_value` maps back. A constraint
    acts on the whole array, so the two may differ in shape. One of your own needs these two methods
    and nothing else.
    """

    @abstractmethod
    def to_free(self, value: Array) -> Array | None:
        """Map an allowed value to the unconstrained array."""

    @abstractmethod
    def to_value(self, free: Any, template: Array) -> Array:
        """Map the unconstrained array back; `template` is a value with the right shape."""


@dataclasses.dataclass(frozen=True)
class Free(Constraint):
    """Any real value: the identity.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import Free
        >>> Free().to_free(jnp.array([-1.0]))
        Array([-1.], dtype=float64)
    """

    def to_free(self, value: Array) -> Array:
        """Return `value`."""
        return value

    def to_value(self, free: Any, template: Array) -> Array:
        """Return `free`."""
        return free


@dataclasses.dataclass(frozen=True)
class Fixed(Constraint):
    """Not fitted: the free leaf is `None` and the template's value comes back.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import Fixed
        >>> print(Fixed().to_free(jnp.array([2.0])))
        None
    """

    def to_free(self, value: Array) -> None:
        """Return `None`: there is nothing to fit."""
        del value

    def to_value(self, free: Any, template: Array) -> Array:
        """Return `template`."""
        del free
        return template


@dataclasses.dataclass(frozen=True)
class Positive(Constraint):
    """Greater than zero: `value = exp(free)`.

    A step of the free leaf is a relative change of the value, whatever its unit.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import Positive
        >>> Positive().to_free(jnp.array([1.0]))
        Array([0.], dtype=float64)
    """

    def to_free(self, value: Array) -> Array:
        """Return `log(value)`."""
        return jnp.log(value)

    def to_value(self, free: Any, template: Array) -> Array:
        """Return `exp(free)`."""
        return jnp.exp(free)


@dataclasses.dataclass(frozen=True)
class Interval(Constraint):
    """Strictly between `lower` and `upper`: `value = lower + (upper - lower) sigmoid(free)`.

    Arguments:
        lower: least value, in the parameter's unit.
        upper: greatest value; above `lower`.

    Raises:
        ValueError: `upper` is not above `lower`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import Interval
        >>> Interval(0.0, 4.0).to_free(jnp.array([2.0]))
        Array([0.], dtype=float64)
    """

    lower: float
    upper: float

    def __post_init__(self):
        """Refuse an empty interval."""
        if not self.lower < self.upper:
            raise ValueError(
                f"`upper` must be above `lower`; got lower={self.lower}, upper={self.upper}."
            )
        # A numpy scalar would carry its own precision into the parameter's.
        object.__setattr__(self, "lower", float(self.lower))
        object.__setattr__(self, "upper", float(self.upper))

    def to_free(self, value: Array) -> Array:
        """Return the logit of the position within the interval."""
        return jnp.log(value - self.lower) - jnp.log(self.upper - value)

    def to_value(self, free: Any, template: Array) -> Array:
        """Return the point of the interval at `sigmoid(free)`."""
        return self.lower + (self.upper - self.lower) * jax.nn.sigmoid(free)


@dataclasses.dataclass(frozen=True)
class OffDiagonal(Constraint):
    """A square matrix of which only the entries off the diagonal are fitted.

    The diagonal of a diffusive coupling matrix has no effect, so fitting it would leave flat
    directions; it stays as the template has it. The free array has shape `(node * (node - 1),)`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.parameters import OffDiagonal
        >>> OffDiagonal().to_free(jnp.array([[0.0, 2.0], [3.0, 0.0]]))
        Array([2., 3.], dtype=float64)
    """

    def to_free(self, value: Float[Array, "node node"]) -> Float[Array, " edge"]:
        """Return the entries off the diagonal, row by row."""
        return value[_off_diagonal(value.shape[0])]

    def to_value(self, free: Any, template: Array) -> Array:
        """Return `template` with `free` off the diagonal."""
        return template.at[_off_diagonal(template.shape[0])].set(free)


def _off_diagonal(n: int):
    return np.nonzero(~np.eye(n, dtype=bool))
