"""What becomes of small disturbances of a limit cycle."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from ..integrate import rollout
from ..integrate._types import Step
from ._limit_cycle import LimitCycle
from ._spectrum import eigenvalues


class Floquet(NamedTuple):
    """What `floquet` returns.

    Attributes:
        multipliers: factors that disturbances grow by in a period, as pairs (real, imaginary part),
            `(size, 2)`, the largest first. One is 1, to the error of the step: a shift along the
            cycle stays as it is.
        exponents: growth rates `log |multiplier| / period`, `(size,)`, per time unit.
        margin: decay rate of the slowest disturbance but that shift; positive: the cycle is stable.
            A scalar, per time unit.
    """

    multipliers: Float[Array, "size 2"]
    exponents: Float[Array, " size"]
    margin: Float[Array, ""]


def floquet(step: Step, params: Any, cycle: LimitCycle) -> Floquet:
    """Return the Floquet multipliers of a limit cycle, and its stability margin.

        multipliers: the eigenvalues of d Phi_T(y) / dy,    margin = -max log |multiplier| / T

    with `Phi_T` the flow over the period T, its derivative by forward mode, and the maximum over
    all multipliers but the one nearest to 1.

    Multipliers are exact to about `eps` times the largest entry of the monodromy matrix: smaller
    ones, and a margin above about `36 / period` (16 in float32), are rounding noise. Near a
    bifurcation, where a second multiplier is 1 to the error of the step, the two are not told
    apart.

    Differentiable once, as `spectrum` is, including how the cycle moves with the parameters.

    Arguments:
        step: the step that `cycle` was found with.
        params: the parameters that `cycle` was found with.
        cycle: what `limit_cycle` returned, converged; otherwise the result means nothing.

    Returns:
        Multipliers, exponents and margin.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.analysis import floquet, limit_cycle
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import rk4
        >>> step = rk4(HopfNetwork())
        >>> find = lambda p: limit_cycle(step, p, jnp.array([[0.7], [0.0]]), 1.1, steps=200)
        >>> margin = jax.jit(lambda p: floquet(step, p, find(p)).margin)
        >>> print(margin(HopfParams([0.5], [2 * jnp.pi])).round(6))
        1.0

    Source: Floquet 1883; Seydel, Practical Bifurcation and Stability Analysis (from memory).
    """
    steps, start = cycle.states.shape[0] - 1, cycle.states[0]
    h = cycle.period / steps
    end = lambda x: rollout(step, params, x.reshape(start.shape), h, steps)[-1].reshape(-1)
    found = eigenvalues(jax.jacfwd(end)(start.reshape(-1)))
    modulus = found.rate**2 + found.frequency**2
    # By modulus, a conjugate pair with its positive part first.
    order = jnp.lexsort((-found.frequency, -modulus))
    multipliers = jnp.stack([found.rate[order], found.frequency[order]], axis=1)
    exponents = jnp.log(modulus[order]) / (2 * cycle.period)
    along = jnp.argmin((multipliers[:, 0] - 1) ** 2 + multipliers[:, 1] ** 2)
    others = jnp.where(jnp.arange(start.size) == along, -jnp.inf, exponents)
    return Floquet(multipliers, exponents, -jnp.max(others))
