"""What an autoregression oscillates at: its modes and its spectrum."""

from typing import NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Float

from .._validate import check_floating, check_same_dtype, check_shape, is_concrete
from ._autoregression import Autoregression


class AutoregressionModes(NamedTuple):
    """Result of `autoregression_modes`: modes in order of falling modulus, `order * channel`.

    Arguments:
        modulus: factor by which the mode shrinks in one sample, shape `(mode,)`.
        angle: by which it turns in one sample, in rad, between `-pi` and `pi`, shape `(mode,)`.
        period: `2 pi / |angle|` in samples, infinite for a mode that does not turn, `(mode,)`.
        stable: True if every modulus is below 1; scalar. False where the model is not finite.
    """

    modulus: np.ndarray
    angle: np.ndarray
    period: np.ndarray
    stable: bool


def autoregression_modes(model: Autoregression) -> AutoregressionModes:
    """Find damping and period of the modes of an autoregression. Host-side.

    They are the eigenvalues `modulus exp(i angle)` of the companion matrix, whose first rows are
    `coefficients` side by side: what is left of a disturbance after `t` samples is a sum of
    `modulus^t cos(angle t + phase)`. A stable model forgets; of one that is not, forecasts run off.

    Arguments:
        model: a fitted autoregression.

    Returns:
        `AutoregressionModes(modulus, angle, period, stable)`; an oscillation gives a pair with
        angles of both signs. NaN where the model is not finite.

    Raises:
        TypeError: called under `jit`, `vmap` or `grad`: eigenvalues of a general matrix exist on
            the host alone.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import Autoregression, autoregression_modes
        >>> lags = jnp.array([[[1.318]], [[-0.634]]])
        >>> modes = autoregression_modes(Autoregression([0.0], lags, jnp.eye(1), [0.0]))
        >>> print(modes.modulus.round(4), modes.period.round(2), modes.stable)
        [0.7962 0.7962] [10.54 10.54] True

    Source:
        Lütkepohl 2005, New Introduction to Multiple Time Series Analysis, section 2.1.1.
    """
    if not is_concrete(model.coefficients):
        raise TypeError(
            "`model` must hold known numbers, as eigenvalues are found on the host; got a tracer. "
            "Fix: return the model from the transformed function and call this outside."
        )
    coefficients = np.asarray(model.coefficients, dtype=np.float64)
    order, channels, _ = coefficients.shape
    companion = np.eye(order * channels, k=-channels)
    companion[:channels] = coefficients.transpose(1, 0, 2).reshape(channels, -1)
    roots = np.full(order * channels, np.nan, dtype=complex)
    if np.all(np.isfinite(companion)):
        roots = np.linalg.eigvals(companion)
        roots = roots[np.argsort(-np.abs(roots), kind="stable")]
    modulus, angle = np.abs(roots), np.angle(roots)
    still = angle == 0
    period = np.where(still, np.inf, 2 * np.pi / np.where(still, 1.0, np.abs(angle)))
    return AutoregressionModes(modulus, angle, period, bool(np.all(modulus < 1)))


def autoregression_spectrum(
    model: Autoregression, frequencies: Float[Array, " frequency"]
) -> Float[Array, "frequency channel"]:
    """Compute the power of each channel that an autoregression predicts at given frequencies.

    `S(f)[i] = (H covariance H*)[i, i]`, `H = (1 - sum_k coefficients[k - 1] exp(-2 pi i f k))^-1`:
    two-sided, so that the integral over `f` from -1/2 to 1/2 is the variance. A damped mode peaks
    near, not at, its own frequency.

    Arguments:
        model: a fitted, stable autoregression.
        frequencies: in cycles per sample, shape `(frequency,)`.

    Returns:
        Power per cycle per sample, in squared units of the samples, shape `(frequency, channel)`.

    Raises:
        TypeError: a dtype is wrong.
        ValueError: the shape is wrong.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.evaluate import Autoregression, autoregression_spectrum
        >>> model = Autoregression([0.0], jnp.full((1, 1, 1), 0.5), jnp.eye(1), [0.0])
        >>> autoregression_spectrum(model, jnp.array([0.0, 0.5])).round(4)[:, 0]
        Array([4.    , 0.4444], dtype=float64)

    Source:
        Brockwell and Davis 1991, Time Series: Theory and Methods, section 11.8 (from memory).
    """
    check_shape("frequencies", frequencies, (None,), "(frequency,)")
    check_floating("frequencies", frequencies)
    check_same_dtype("frequencies", frequencies, "model.coefficients", model.coefficients)
    return _power(model, frequencies)


@jax.jit
def _power(model: Autoregression, frequencies: Array) -> Array:
    order, channels, _ = model.coefficients.shape
    lags = jnp.arange(1, order + 1).astype(frequencies.dtype)
    angle = 2 * jnp.pi * frequencies[:, None] * lags[None, :]
    unit = jnp.eye(channels, dtype=frequencies.dtype)[None]
    sums = lambda weight: jnp.einsum("fk,kij->fij", weight, model.coefficients, precision="highest")
    inverse = jnp.linalg.inv(jax.lax.complex(unit - sums(jnp.cos(angle)), sums(jnp.sin(angle))))
    # The imaginary part of a diagonal entry vanishes, as the covariance is symmetric.
    parts = jnp.stack([inverse.real, inverse.imag])
    return jnp.einsum("pfij,jk,pfik->fi", parts, model.covariance, parts, precision="highest")
