"""Noise whose strength depends on the state, for diffrax's stochastic solvers."""

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from .._validate import check_same_dtype, check_shape
from ._noise import NoisyParams
from ._runge_kutta import check_field_output
from ._types import Field


if TYPE_CHECKING:
    import diffrax


def state_noise_terms(
    field: Field,
    diffusion: Callable[[Any, Any, Any], Any],
    brownian: "diffrax.AbstractBrownianPath",
) -> "diffrax.MultiTerm":
    """Return a system with state-dependent noise as terms for diffrax's stochastic solvers.

        dy = f(t, y, params.field) dt + g(t, y, params.noise) dW,   entry by entry

    What this means depends on the solver: `diffrax.Euler` (strong order 1/2) and
    `diffrax.ItoMilstein` (1) solve it in the sense of Ito, `diffrax.Heun` and
    `diffrax.StratonovichMilstein` (1) in that of Stratonovich. The two differ by the drift
    `g dg/dy / 2`. Orders hold where each `g` depends on its own entry of the state alone; others
    have strong order 1/2. For additive noise use a noisy step: those are exact on linear networks,
    and the filter takes them.

    Arguments:
        field: `field(t, y, params) -> dy`.
        diffusion: `diffusion(t, y, noise) -> g`, strength of the noise of each entry, shape and
            dtype of `y`, in units of the state per root of a time unit.
        brownian: diffrax path `W` of the shape of `y`, such as a `diffrax.VirtualBrownianTree`.

    Returns:
        A `diffrax.MultiTerm`; give a `NoisyParams` as `args` of `diffrax.diffeqsolve`.

    Raises:
        ValueError: on use, `field` or `diffusion` returns another shape than that of `y`.
        TypeError: on use, `diffusion` returns another dtype than that of `y`.

    Example:
        >>> import diffrax, jax, jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, state_noise_terms
        >>> path = diffrax.VirtualBrownianTree(0.0, 1.0, 1e-3, (2, 1), jax.random.key(0))
        >>> terms = state_noise_terms(HopfNetwork(), lambda t, y, noise: noise * y, path)
        >>> params = NoisyParams(HopfParams([0.2], [6.0]), noise=jnp.full((1, 1), 0.1))
        >>> out = diffrax.diffeqsolve(terms, diffrax.ItoMilstein(), 0.0, 1.0, 0.01,
        ...                           jnp.zeros((2, 1)), args=params)
        >>> out.ys.shape
        (1, 2, 1)

    Source: Kloeden & Platen 1992, sections 10.2, 10.3 (from memory).
    """
    import diffrax
    import lineax

    checked = check_field_output(field)

    def drift(t, y, args: NoisyParams):
        return checked(t, y, args.field)

    def noise(t, y, args: NoisyParams):
        strength = diffusion(t, y, args.noise)
        check_shape("diffusion(t, y, noise)", strength, y.shape, "that of `y`")
        check_same_dtype("diffusion(t, y, noise)", strength, "y", y)
        return lineax.DiagonalLinearOperator(strength)

    return diffrax.MultiTerm(diffrax.ODETerm(drift), diffrax.ControlTerm(noise, brownian))
