"""The Jacobian of a field, its eigenvalues, and the stability margin."""

from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import check_floating
from ..integrate._runge_kutta import check_field_output
from ..integrate._types import Field, State


class Spectrum(NamedTuple):
    """Eigenvalues `rate + i frequency` of a Jacobian, fastest growth first.

    Attributes:
        rate: growth rates, shape `(size,)`, per time unit.
        frequency: angular frequencies, shape `(size,)`, rad per time unit; of a conjugate pair the
            positive one first.
    """

    rate: Float[Array, " size"]
    frequency: Float[Array, " size"]


def jacobian(
    field: Field, params: Any, y: State, *, t: Float[Array, ""] | float = 0.0
) -> Float[Array, "size size"]:
    """Return the Jacobian of a field in the state, on the flattened state.

        J[i, j] = d field_i / d y_j

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: PyTree of parameters.
        y: state, shape `(*state)`; `size` is its number of entries, taken row by row.
        t: time handed to the field; default 0.

    Returns:
        Matrix of shape `(size, size)`, per time unit.

    Raises:
        ValueError: the field returns another shape than `y`.
        TypeError: `y` is not floating; the field returns another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import jacobian
        >>> print(jacobian(lambda t, y, a: a * y**2, 3.0, jnp.array([1.0, 2.0])))
        [[ 6.  0.]
         [ 0. 12.]]

    Source: common practice, no source.
    """
    check_floating("y", y)
    y = jnp.asarray(y)
    checked = check_field_output(field)
    flat = lambda x: checked(t, x.reshape(y.shape), params).reshape(-1)
    return jax.jacfwd(flat)(y.reshape(-1))


def spectrum(field: Field, params: Any, y: State, *, t: Float[Array, ""] | float = 0.0) -> Spectrum:
    """Return the eigenvalues of the Jacobian of a field, fastest growth first.

        J r = (rate + i frequency) r

    At a fixed point these tell how small disturbances grow and turn; elsewhere they describe the
    field, not the fate of a trajectory.

    Derivatives: the first, in both modes, of eigenvalues that are simple, by left and right
    eigenvectors, `d lambda = l dJ r / (l r)`. They are infinite or NaN where eigenvectors merge,
    arbitrary among equal eigenvalues, and swap where two eigenvalues pass each other in the order.
    Second derivatives raise. Eigenvalues of matrices without symmetry exist on CPU, and on other
    devices only where JAX offers `jax.numpy.linalg.eigvals` there.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: PyTree of parameters.
        y: state, shape `(*state)`.
        t: time handed to the field; default 0.

    Returns:
        Rates and angular frequencies, each `(size,)`.

    Raises:
        ValueError: the field returns another shape than `y`.
        TypeError: `y` is not floating; the field returns another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import spectrum
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> print(spectrum(HopfNetwork(), HopfParams([-0.5], [6.0]), jnp.zeros((2, 1))).frequency)
        [ 6. -6.]

    Source: common practice, no source; derivative: Kato 1966 (from memory).
    """
    return eigenvalues(jacobian(field, params, y, t=t))


def stability_margin(
    field: Field, params: Any, y: State, *, t: Float[Array, ""] | float = 0.0
) -> Float[Array, ""]:
    """Return how fast the slowest small disturbance of a fixed point decays.

        margin = -max Re eigenvalues of J

    Positive: stable, every disturbance shrinks like `exp(-margin t)` in the end (it may grow
    first). Negative: unstable. Zero to rounding: undecided by linearisation. Along a family of
    states that differ by a symmetry (a common phase shift) one rate is always 0; take the second
    of `spectrum`.

    Differentiable once, in both modes, as `spectrum` is: a conjugate pair shares its rate, so the
    margin is smooth there; it has a kink where another pair takes the lead. Hand in
    `fixed_point(...).state` and the derivative includes how the fixed point moves.

    Arguments:
        field: `field(t, y, params) -> dy`.
        params: PyTree of parameters.
        y: fixed point, shape `(*state)`.
        t: time handed to the field; default 0.

    Returns:
        A scalar, per time unit.

    Raises:
        ValueError: the field returns another shape than `y`.
        TypeError: `y` is not floating; the field returns another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.analysis import stability_margin
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> print(stability_margin(HopfNetwork(), HopfParams([-0.5], [6.0]), jnp.zeros((2, 1))))
        0.5

    Source: common practice, no source.
    """
    return -jnp.max(spectrum(field, params, y, t=t).rate)


def eigenvalues(matrix: Float[Array, "size size"]) -> Spectrum:
    """Return eigenvalues as rates and frequencies, in decreasing order of both."""
    values = jnp.linalg.eigvals(matrix)
    rate, frequency = jnp.real(values), jnp.imag(values)
    order = jnp.lexsort((-frequency, -rate))
    return Spectrum(rate[order], frequency[order])
