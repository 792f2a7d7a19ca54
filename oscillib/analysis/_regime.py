"""Which units oscillate by themselves, how sure that is, and how fast and how far they swing."""

from enum import IntEnum
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jax.scipy.stats import norm
from jaxtyping import Array, Float, Int

from .._validate import as_float, check_same_dtype, check_shape, check_values
from ..fields import HopfParams, HopfUnitParams


class Regime(IntEnum):
    """What a unit does when left alone.

    Example:
        >>> from oscillib.analysis import Regime
        >>> Regime(1).name
        'SELF_SUSTAINED'
    """

    DAMPED = -1
    UNDECIDED = 0
    SELF_SUSTAINED = 1


class Estimate(NamedTuple):
    """A value and its standard error, each `(node,)`."""

    value: Float[Array, "*node"]
    error: Float[Array, "*node"]


class Regimes(NamedTuple):
    """What `regimes` returns; every entry `(node,)`.

    Attributes:
        regime: codes of `Regime`.
        probability: that growth is above 0.
        growth: per time unit.
        frequency: of the limit cycle where growth is above 0, otherwise of the damped turning; rad
            per time unit.
        period: `2 pi / |frequency|`, time units.
        radius: of the limit cycle, units of the state; NaN where growth is not above 0.
        decay_time: in which a damped unit falls to 1/e, time units; NaN where growth is above 0.
    """

    regime: Int[Array, "*node"]
    probability: Float[Array, "*node"]
    growth: Estimate
    frequency: Estimate
    period: Estimate
    radius: Estimate
    decay_time: Estimate


_ORDER = ("growth", "frequency", "shear", "saturation")


def regimes(
    params: HopfParams | HopfUnitParams,
    standard_error: HopfParams | HopfUnitParams,
    *,
    correlation: Float[Array, "*node 4 4"] | None = None,
    level: float = 0.95,
) -> Regimes:
    """Say of each Hopf unit whether it is damped or self-sustained, and with what uncertainty.

        P(growth > 0) = Phi(a / error of a)
        limit cycle: radius sqrt(a / b), frequency w - c a / b;    damped: decay time -1 / a

    where `a, w, c, b` are growth, frequency, shear and saturation, and Phi the normal distribution
    function. Self-sustained where the probability is at least `level`, damped where at most
    `1 - level`, undecided between. Errors of the derived values by the delta method, `D C D'`.

    Sound where the estimate of the growth is close to normal, which means long recordings; `level`
    is a statement about the growth alone, for each unit by itself. The delta method is good for
    radius and decay time only where growth is several errors from 0: not for undecided units. It
    is the unit without its coupling that is described, at its own growth `a`; in a network the
    coupling may keep a damped unit going or quench a self-sustained one (see `stability_margin`).

    Arguments:
        params: estimates, each array `(node,)`.
        standard_error: same structure, such as `fitting.laplace(...).standard_error`: 0 for what
            is known, infinite for what is not determined.
        correlation: of the errors of growth, frequency, shear and saturation, in this order, shape
            `(node, 4, 4)`; default none. Growth and saturation are often strongly correlated.
        level: probability from which a regime counts as decided; default 0.95.

    Returns:
        Regimes with estimates and errors; `describe_regimes` puts them into words.

    Raises:
        ValueError: shapes differ; an error is negative; `level` is not between 0.5 and 1.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.analysis import regimes
        >>> from oscillib.fields import HopfUnitParams
        >>> p = HopfUnitParams([0.4, 0.1], [3.0, 3.0], saturation=[1.6, 1.0])
        >>> e = HopfUnitParams([0.1, 0.2], [0.1, 0.1], saturation=[0.0, 0.0])
        >>> out = regimes(p, e)
        >>> print(out.regime, out.radius.value[0], out.radius.error[0].round(6))
        [1 0] 0.5 0.0625

    Source: delta method, common practice, no source; limit cycle: Kuramoto 1984 (from memory).
    """
    values, errors = _stack("params", params), _stack("standard_error", standard_error)
    check_shape("standard_error.growth", errors[0], values[0].shape, "(node,)")
    check_same_dtype("standard_error", errors, "params", values)
    check_values("standard_error", errors, lambda e: (e >= 0) | np.isnan(e), "not negative")
    if not 0.5 < level < 1:
        raise ValueError(f"`level` must be above 0.5 and below 1; got {level}.")
    shape, dtype = values.shape[1:], values.dtype
    if correlation is None:
        correlation = jnp.broadcast_to(jnp.eye(4, dtype=dtype), (*shape, 4, 4))
    correlation = as_float(correlation)
    check_shape("correlation", correlation, (*shape, 4, 4), "(node, 4, 4)")
    check_same_dtype("correlation", correlation, "params", values)

    derived, probability = _estimates(values, errors, correlation)
    # NaN compares as False: an estimate or error that is not finite decides nothing.
    sign = (probability >= level).astype(jnp.int32) - (probability <= 1 - level).astype(jnp.int32)
    return Regimes(sign, probability, Estimate(values[0], errors[0]), *derived)


def describe_regimes(
    found: Regimes, *, time_unit: str = "time unit", amplitude_unit: str = ""
) -> list[str]:
    """Put regimes into words, one sentence a unit. Host-side.

    Arguments:
        found: what `regimes` returned for units in one row, each array `(node,)`.
        time_unit: singular name of the time unit, such as `"h"`; default `"time unit"`.
        amplitude_unit: name of the unit of the state; default none.

    Returns:
        A list of `node` strings. `+-` stands before standard errors. Radius and decay time are
        given only where the regime is decided.

    Example:
        >>> from oscillib.analysis import describe_regimes, regimes
        >>> from oscillib.fields import HopfUnitParams
        >>> p, e = HopfUnitParams([-0.4], [0.26]), HopfUnitParams([0.1], [0.01], saturation=[0.0])
        >>> for part in describe_regimes(regimes(p, e), time_unit="h")[0].split("; "):
        ...     print(part)
        unit 0: damped (growth -0.40 +- 0.10 per h, P(growth > 0) < 0.001)
        period 24.17 +- 0.93 h, decay time 2.50 +- 0.62 h

    Source: common practice, no source.
    """
    found = jax.tree.map(np.asarray, found)
    check_shape("found.regime", found.regime, (None,), "(node,)")
    return [
        _sentence(i, jax.tree.map(lambda x, i=i: x[i], found), time_unit, amplitude_unit)
        for i in range(len(found.regime))
    ]


def _stack(name: str, params: HopfParams | HopfUnitParams) -> Float[Array, "4 *node"]:
    first = params.growth
    for entry in _ORDER:
        check_shape(f"{name}.{entry}", getattr(params, entry), first.shape, "(node,)")
    return jnp.stack([getattr(params, entry) for entry in _ORDER])


@jax.jit
def _estimates(values: Array, errors: Array, correlation: Array) -> tuple[list[Estimate], Array]:
    shape = values.shape[1:]
    derived, error = jax.vmap(_delta_method)(
        values.reshape(4, -1).T, errors.reshape(4, -1).T, correlation.reshape(-1, 4, 4)
    )
    pick = lambda k: Estimate(derived[:, k].reshape(shape), error[:, k].reshape(shape))
    return [pick(k) for k in range(4)], _probability_above_zero(values[0], errors[0])


def _probability_above_zero(value: Array, error: Array) -> Array:
    known = error == 0
    z = value / jnp.where(known, 1, error)
    certain = jnp.where(value > 0, 1, jnp.where(value < 0, 0, 0.5)).astype(value.dtype)
    return jnp.where(known, certain, norm.cdf(z))


def _derived(values: Float[Array, "4"]) -> Float[Array, "4"]:
    """Return frequency, period, radius and decay time of one unit; NaN what does not exist."""
    a, w, c, b = values
    cycle, damped = (a > 0) & (b > 0), a < 0
    ratio = jnp.where(cycle, a, 1) / jnp.where(cycle, b, 1)
    frequency = w - jnp.where(cycle, c * ratio, 0)
    turning = frequency != 0
    period = 2 * jnp.pi / jnp.abs(jnp.where(turning, frequency, 1))
    return jnp.stack(
        [
            frequency,
            jnp.where(turning, period, jnp.inf),
            jnp.where(cycle, jnp.sqrt(ratio), jnp.nan),
            jnp.where(damped, -1 / jnp.where(damped, a, -1), jnp.nan),
        ]
    )


def _delta_method(
    values: Float[Array, "4"], errors: Float[Array, "4"], correlation: Float[Array, "4 4"]
) -> tuple[Float[Array, "4"], Float[Array, "4"]]:
    derived, slopes = _derived(values), jax.jacfwd(_derived)(values)
    # What does not enter may be undetermined: 0 times infinity is no error.
    enters = slopes != 0
    shares = jnp.where(enters, slopes * jnp.where(enters, errors[None], 0), 0)
    open_end = jnp.any(jnp.isinf(shares), axis=1)
    shares = jnp.where(jnp.isinf(shares), 0, shares)
    variance = jnp.einsum("ki,ij,kj->k", shares, correlation, shares)
    # The root has no derivative at 0, where everything that enters is known.
    positive = variance > 0
    error = jnp.where(positive, jnp.sqrt(jnp.where(positive, variance, 1)), variance * 0)
    error = jnp.where(open_end, jnp.inf, error)
    return derived, jnp.where(jnp.isnan(derived), jnp.nan, error)


_WORDS = {
    Regime.DAMPED: "damped",
    Regime.UNDECIDED: "undecided",
    Regime.SELF_SUSTAINED: "self-sustained",
}


def _sentence(i: int, one: Any, time_unit: str, amplitude_unit: str) -> str:
    regime = Regime(int(one.regime))
    parts = [f"period {_with_error(one.period, time_unit)}"]
    if regime is Regime.SELF_SUSTAINED:
        parts.append(f"amplitude {_with_error(one.radius, amplitude_unit)}")
    if regime is Regime.DAMPED:
        parts.append(f"decay time {_with_error(one.decay_time, time_unit)}")
    growth = _with_error(one.growth, f"per {time_unit}")
    return (
        f"unit {i}: {_WORDS[regime]} (growth {growth}, "
        f"P(growth > 0) {_probability_in_words(float(one.probability))}); {', '.join(parts)}"
    )


def _probability_in_words(p: float) -> str:
    if np.isnan(p):
        return "unknown"
    if p < 0.001:
        return "< 0.001"
    return "> 0.999" if p > 0.999 else f"= {p:.3f}"


def _with_error(estimate: Estimate, unit: str) -> str:
    """Write value and error to the second digit of the error."""
    value, error = float(estimate.value), float(estimate.error)
    if not np.isfinite(value) or not np.isfinite(error):
        return "not determined"
    if error == 0:
        return f"{value:.4g} {unit}".rstrip()
    decimals = max(0, 1 - int(np.floor(np.log10(error))))
    return f"{value:.{decimals}f} +- {error:.{decimals}f} {unit}".rstrip()
