"""What the encoder sees of a sample: light turned back into regions, and how fast these rotate."""

from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import slices

from oscillib import encoders


LAG = 6  # hours: a quarter of a turn, so that a region and its past are a plane
INPUTS = 4 * slices.REGIONS + 2
_INVERSE = jnp.linalg.pinv(slices.WEIGHT)


def unmix(values: Any, mask: Any) -> tuple[Any, Any, Any]:
    """Return regions `(time, region)` and level by the inverse of the response, and where seen."""
    seen = jnp.all(mask, axis=1)
    clipped = jnp.clip(jnp.where(mask, values, 0.5), 0.02, 0.98)  # a logarithm of noise has no end
    light = jnp.log(clipped) - jnp.log1p(-clipped)
    level = jnp.sum(jnp.where(mask, light, 0)) / jnp.maximum(jnp.sum(mask), 1)
    return jnp.where(seen[:, None], (light - level) @ _INVERSE.T, 0), level, seen


def features(times: Any, values: Any, mask: Any) -> Any:
    """Return the rows `(time, INPUTS)` of one recording; 0 where anything is missing."""
    regions, level, seen = unmix(values, mask)
    past = _shift(regions, LAG)
    both = seen & _shift(seen, LAG)
    radius = jnp.where(both[:, None], regions**2 + past**2, 0)
    size = jnp.sum(radius, axis=0) / jnp.maximum(jnp.sum(both), 1)
    going = (both & _shift(both, 1))[:, None]
    turn = _shift(regions, 1) * past - _shift(past, 1) * regions
    # The mean of this is the sine of the angle a region turns in an hour, of which it is centred.
    turn = jnp.where(going, turn / jnp.maximum(size, 0.05)[None] - 0.26, 0)
    level = jnp.where(seen, level, 0)
    return jnp.concatenate(
        [regions, past, radius, 10 * turn, level[:, None], seen[:, None].astype(level.dtype)],
        axis=1,
    )


def _shift(x: Any, by: int) -> Any:
    """Return what was `by` samples ago; zeros before the beginning."""
    return jnp.concatenate([jnp.zeros_like(x[:by]), x[:-by]])


class Beside(eqx.Module):
    """A recurrence whose outputs carry the rows along, in both halves, for the pooling to see."""

    narrow: encoders.Network
    recurrence: encoders.Recurrence

    def __init__(self, hidden: int, *, key: Any):
        """Draw the weights."""
        keys = jax.random.split(key)
        self.narrow = encoders.Network(INPUTS, 16, key=keys[0])
        self.recurrence = encoders.Recurrence(16, hidden, key=keys[1])

    def __call__(self, rows: Any, inside: Any) -> Any:
        """Return shape `(time, 2 hidden + 2 INPUTS)`."""
        forward, backward = jnp.split(self.recurrence(jax.vmap(self.narrow)(rows), inside), 2, 1)
        return jnp.concatenate([forward, rows, backward, rows], axis=1)
