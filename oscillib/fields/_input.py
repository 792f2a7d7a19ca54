"""External input sampled in time, added to a field."""

from collections.abc import Callable
from typing import Any, Literal

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape, check_values
from ..parameters import Constraint, Fixed, Free
from ._coupled import own_constraints


class Input(eqx.Module):
    """External input sampled in time: `input(t)` is its value at any time.

    With `kind="hold"` a sample holds from its own time until the next one, where the input jumps;
    with `kind="linear"` samples are joined by straight lines, which bend at each sample. Before the
    first and after the last sample the first and last values hold.

    Where the samples should lie: a step is as accurate as its order says only if no jump or bend
    falls inside it, so put the samples on the step's grid. A jump at the end of a step is also seen
    by the last stage of a Runge-Kutta step, which lowers its order to 1; `hold_input` holds the
    input through every step and so keeps the order. Linear input on the grid needs no such care.

    Arguments:
        times: shape `(sample,)`, strictly increasing, time units.
        values: shape `(sample, channel)`.
        kind: `"hold"` or `"linear"`; no default, because data say which.

    Raises:
        ValueError: shapes do not fit; times not increasing; values not finite; unknown kind; fewer
            than two samples to be joined by lines.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import Input
        >>> light = Input([0.0, 12.0], [[0.0], [6.0]], kind="linear")
        >>> light(4.0)
        Array([2.], dtype=float64)

    Source: common practice, no source.
    """

    times: Float[Array, " sample"]
    values: Float[Array, "sample channel"]
    kind: Literal["hold", "linear"] = eqx.field(static=True)

    def __init__(self, times, values, *, kind):
        """Convert both arrays and check them."""
        self.times, self.values, self.kind = as_float(times), as_float(values), kind
        if kind not in ("hold", "linear"):
            raise ValueError(f"`kind` must be 'hold' or 'linear'; got {kind!r}.")
        check_shape("times", self.times, (None,), "(sample,)")
        least = 1 if kind == "hold" else 2
        if self.times.shape[0] < least:
            raise ValueError(
                f"`times` must hold at least {least} sample(s) with kind={kind!r}; "
                f"got {self.times.shape[0]}."
            )
        check_shape("values", self.values, (self.times.shape[0], None), "(sample, channel)")
        check_same_dtype("values", self.values, "times", self.times)
        check_values("times", jnp.diff(self.times), lambda d: d > 0, "strictly increasing")
        check_values("values", self.values, np.isfinite, "finite; fill in missing samples first")

    def __call__(self, t: Array | float) -> Float[Array, " channel"]:
        """Return the input at time `t`, shape `(channel,)`.

        Derivatives exist with respect to the values; with respect to `t` and the times only where
        the kind is linear.
        """
        t = jnp.asarray(t, self.times.dtype)
        last = self.times.shape[0] - 1
        at = jnp.searchsorted(self.times, t, side="right") - 1
        if self.kind == "hold":
            return self.values[jnp.clip(at, 0, last)]
        at = jnp.clip(at, 0, last - 1)
        start, end = self.times[at], self.times[at + 1]
        part = jnp.clip((t - start) / (end - start), 0, 1)
        return self.values[at] + part * (self.values[at + 1] - self.values[at])


class ForcedParams(eqx.Module):
    """Parameters of a forced field: those of the field, the input, and where it acts.

    Arguments:
        field: parameters of the field, any PyTree.
        input: `input(t) -> (channel,)`: an `Input`, or an `eqx.Module` of your own.
        weight: shape `(node, channel)`: how strongly each node is driven by each channel, state
            units per time unit and unit of input.

    Raises:
        ValueError: `weight` has another number of axes.

    Example:
        >>> from oscillib.fields import ForcedParams, HopfParams, Input
        >>> light = Input([0.0], [[1.0]], kind="hold")
        >>> ForcedParams(HopfParams([0.1], [6.0]), light, weight=[[0.5]]).weight.shape
        (1, 1)
    """

    field: Any
    input: Any
    weight: Float[Array, "node channel"]

    def __init__(self, field: Any, input: Any, weight: Any):
        """Convert the weight."""
        self.field, self.input = field, input
        self.weight = as_float(weight)
        check_shape("weight", self.weight, (None, None), "(node, channel)")

    def constraints(self) -> "ForcedParams":
        """Return the field's own constraints (free where it has none), a fixed input, free weights.

        Example:
            >>> from oscillib.fields import ForcedParams, HopfParams, Input
            >>> light = Input([0.0], [[1.0]], kind="hold")
            >>> ForcedParams(HopfParams([0.1], [6.0]), light, [[0.5]]).constraints().weight
            Free()
        """
        inputs: list[Constraint] = [Fixed() for _ in jax.tree.leaves(self.input)]
        leaves = [*own_constraints(self.field), *inputs, Free()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def forced(field: Callable[[Any, Any, Any], Any], *, component: int = 0) -> Callable:
    """Add an external input to one component of a field.

        dy/dt = field(t, y, p) + weight @ input(t)    on the chosen component

    Arguments:
        field: `field(t, y, params) -> dy` on `(component, node)`.
        component: which component is driven; default 0.

    Returns:
        A field with `ForcedParams`.

    Raises:
        ValueError: on tracing, the weight does not fit nodes or channels, or there is no such
            component.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import ForcedParams, Input, forced
        >>> decay = forced(lambda t, y, rate: -rate * y)
        >>> params = ForcedParams(jnp.asarray(2.0), Input([0.0], [[3.0]], kind="hold"), [[1.0]])
        >>> decay(0.0, jnp.array([[1.0]]), params)
        Array([[1.]], dtype=float64)

    Source: common practice, no source.
    """

    def driven(t, y, params):
        if not 0 <= component < y.shape[0]:
            raise ValueError(
                f"`component` must lie in 0 ... {y.shape[0] - 1}, the components of `y`; "
                f"got {component}."
            )
        value = params.input(t)
        check_shape("params.weight", params.weight, (y.shape[1], value.shape[0]), "(node, channel)")
        check_same_dtype("params.weight", params.weight, "y", y)
        return field(t, y, params.field).at[component].add(params.weight @ value)

    return driven


class _Held(eqx.Module):
    """An input that does not move."""

    value: Float[Array, " channel"]

    def __call__(self, t: Any) -> Array:
        """Return the value."""
        del t
        return self.value


def hold_input(step: Callable[[Any, Any], Callable]) -> Callable[[Any, Any], Callable]:
    """Hold the input through every step, at its value in the middle of the step.

    Keeps the order of a Runge-Kutta step under held input whose jumps lie on the grid: without it
    the last stage, which looks at the end of the step, already sees the next value.

    Arguments:
        step: a step of a forced field, such as `rk4(forced(field))`.

    Returns:
        A step with `ForcedParams`. What the step prepares is prepared anew in each step.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import ForcedParams, Input, forced, hold_input
        >>> from oscillib.integrate import rk4, rollout
        >>> field = forced(lambda t, y, params: 0 * y)
        >>> params = ForcedParams(None, Input([0.0, 1.0], [[1.0], [5.0]], kind="hold"), [[1.0]])
        >>> print(rollout(hold_input(rk4(field)), params, jnp.zeros((1, 1)), 0.5, 4).ravel())
        [0.  0.5 1.  3.5 6. ]

    Source: common practice, no source.
    """

    def held(params, h):
        def advance(t, y):
            frozen = eqx.tree_at(lambda p: p.input, params, _Held(params.input(t + h / 2)))
            return step(frozen, h)(t, y)

        return advance

    return held
