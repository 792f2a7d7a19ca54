"""Do phases gather? Rayleigh's test of a uniform phase."""

from typing import NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Bool, Float

from .._validate import check_floating, check_shape
from ._origins import check_mask


class RayleighTest(NamedTuple):
    """Result of `rayleigh_test`, scalars.

    Arguments:
        resultant: length `R` of the mean phase vector, between 0 and 1.
        statistic: `n R^2`.
        p_value: probability of a statistic at least as large of uniform phases.
        defined: False where there is no verdict (the others are NaN).
    """

    resultant: Float[Array, ""]
    statistic: Float[Array, ""]
    p_value: Float[Array, ""]
    defined: Bool[Array, ""]


def rayleigh_test(
    phases: Float[Array, " sample"], mask: Bool[Array, " sample"] | None = None
) -> RayleighTest:
    """Test whether independent phases are spread uniformly over the circle.

    `R = |sum exp(i phase)| / n` over the `n` phases observed, and
    `p = exp(sqrt(1 + 4 n + 4 n^2 (1 - R^2)) - 1 - 2 n)`. Phases that gather about one value give a
    large `n R^2`; two opposite gatherings go unseen. Phases must be independent, such as one from
    each recording: successive samples of one oscillator are not. The test of the difference of two
    phases is that of their locking.

    Arguments:
        phases: in rad, shape `(sample,)`.
        mask: True where observed; the rest of `phases` is never used. Without it all were.

    Returns:
        `RayleighTest(resultant, statistic, p_value, defined)`. The p-value is an approximation for
        `n` of about 10 or more: it is then off by less than 0.003. Undefined without a phase, or
        where one that was observed is not finite.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: shapes disagree.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import rayleigh_test
        >>> out = rayleigh_test(jnp.linspace(0.0, 1.5, 12))
        >>> print(out.resultant.round(3), bool(out.p_value < 0.001))
        0.893 True

    Source:
        Mardia and Jupp 2000, Directional Statistics, section 6.3 (test); Wilkie 1983, Appl. Stat.
        32:311 (p-value, which never leaves 0 to 1); both from memory.
    """
    check_shape("phases", phases, (None,), "(sample,)")
    check_floating("phases", phases)
    mask = jnp.ones(phases.shape, dtype=bool) if mask is None else mask
    check_mask(mask, phases, "phases")
    return _test(phases, mask)


@jax.jit
def _test(phases: Array, mask: Array) -> RayleighTest:
    phases = jnp.where(mask, phases, 0)
    count = jnp.sum(mask)
    # The cosine of an infinity is NaN, so a bad phase leaves the sum not finite.
    length = [jnp.sum(jnp.where(mask, f(phases), 0)) for f in (jnp.cos, jnp.sin)]
    square = length[0] ** 2 + length[1] ** 2
    defined = (count > 0) & jnp.isfinite(square)
    n = jnp.where(defined, count.astype(phases.dtype), jnp.nan)
    # No root of 0 is differentiated: phases that cancel have slope 0.
    cancelled = square == 0
    resultant = jnp.where(cancelled, 0, jnp.sqrt(jnp.where(cancelled, 1, square))) / n
    a, b = 1 + 2 * n, 4 * square
    # exp(sqrt(a^2 - b) - a), without the difference of two large numbers; rounding can leave b
    # above a^2 in no case, as b <= 4 n^2 < a^2.
    p_value = jnp.exp(-b / (jnp.sqrt(a**2 - b) + a))
    return RayleighTest(resultant, square / n, p_value, defined)
