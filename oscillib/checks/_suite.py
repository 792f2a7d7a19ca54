"""All checks of a field in one call."""

from collections.abc import Callable, Sequence
from typing import Any

import jax
import jax.numpy as jnp
from jaxtyping import Array

from .._validate import check_floating
from ._claim import (
    Symmetry,
    check_autonomy,
    check_conserved,
    check_fixed_point,
    check_period,
    check_symmetry,
)
from ._field import (
    Field,
    State,
    Time,
    check_batch,
    check_gradients,
    check_output,
    check_purity,
    check_traces_once,
)
from ._report import Finding, Report, run


def check_field(
    field: Field,
    params: Any,
    y0: State,
    *,
    key: Array,
    t: Time = 0.0,
    fixed_points: Sequence[State] = (),
    symmetries: Sequence[Symmetry] = (),
    conserved: Sequence[Callable[[Any, Any], Any]] = (),
    period: Any = None,
    autonomous: bool = False,
    unused: Sequence[str] = (),
    origin: bool = True,
) -> Report:
    """Check a vector field of your own: run everything that applies, and report.

    What holds for every field is always checked: output, purity, batches, traces, gradients. What
    holds for yours is checked where you claim it.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: its parameters, a tree of arrays; gradients are checked in 64-bit floats only.
        y0: a state away from rest, kinks and symmetry, shape `(*state)`; on the cycle if `period`
            is given.
        key: random key of directions and states.
        t: time, default 0.
        fixed_points: states of rest, each `(*state)`.
        symmetries: such as `relabelling([1, 0])`, `rotation(0.7)`.
        conserved: quantities that stay as they are, each `quantity(y, params) -> scalar`.
        period: of the cycle on which `y0` lies, time units; default: none claimed.
        autonomous: whether time must not matter; default False.
        unused: names of parameters that need not move anything, such as `params.gain`.
        origin: whether the field is defined at the origin, default True.

    Returns:
        A `Report`: print it, or call its `require()` in a test. An error that the field itself
        raises is a failure in it, not an exception.

    Raises:
        TypeError: `y0` is not floating.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.checks import check_field
        >>> def spring(t, y, w):
        ...     return jnp.stack([w * y[1], -w * y[0]])
        >>> energy = lambda y, w: jnp.sum(y**2)
        >>> report = check_field(spring, jnp.asarray(2.0), jnp.array([1.0, 0.5]),
        ...                      conserved=[energy], key=jax.random.key(0))
        >>> report.passed
        True

    Source: common practice, no source.
    """
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    rest = [jnp.asarray(y, y0.dtype) for y in fixed_points]
    first = run("output of the field", lambda: check_output(field, params, y0, t=t))
    findings = [first]
    name = getattr(field, "__name__", type(field).__name__)
    if first.outcome == "failed":  # nothing else means much then
        return Report(name, tuple(findings))
    one, two = jax.random.split(key)
    checks: dict[str, Callable[[], None]] = {
        "purity": lambda: check_purity(field, params, y0, t=t),
        "batch of states": lambda: check_batch(field, params, y0, key=one, t=t),
        "one trace for all values": lambda: check_traces_once(field, params, y0, t=t),
    }
    if y0.dtype == jnp.float64:
        checks["gradients"] = lambda: check_gradients(
            field, params, y0, key=two, t=t, states=rest, unused=unused, origin=origin
        )
    checks |= {
        f"fixed point {i}": lambda y=y: check_fixed_point(field, params, y, t=t)
        for i, y in enumerate(rest)
    }
    checks |= {
        f"symmetry: {s.name}": lambda s=s: check_symmetry(field, params, y0, s, t=t)
        for s in symmetries
    }
    checks |= {
        f"conserved quantity {i}": lambda q=q: check_conserved(field, params, y0, q, t=t)
        for i, q in enumerate(conserved)
    }
    if autonomous:
        checks["autonomy"] = lambda: check_autonomy(field, params, y0)
    if period is not None:
        checks["period"] = lambda: check_period(field, params, y0, period)
    findings += [run(prop, check) for prop, check in checks.items()]
    if y0.dtype != jnp.float64:
        findings.append(Finding("gradients", "not checked", "derivatives need 64-bit floats"))
    silent = {
        "fixed points": not rest, "symmetries": not symmetries, "conserved": not conserved,
        "autonomy": not autonomous, "period": period is None,
    }  # fmt: skip
    findings += [Finding(prop, "not claimed") for prop, none in silent.items() if none]
    return Report(name, tuple(findings))
