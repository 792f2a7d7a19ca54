"""What the motion benchmark classifies by: one row a recording; a list of variants each."""

from functools import partial
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import scipy.signal
import scipy.stats

from oscillib.evaluate import fit_autoregression


def parameter_features(
    parts: list[np.ndarray], offset: Any = None, spread: Any = None
) -> list[np.ndarray]:
    """Lay parameters out, gain as log amplitude, without coupling and with it.

    `parts`, each `(recording, entry)`: growth, log frequency, coupling, and the logarithms of
    noise, gain and reading noise.
    """
    growth, frequency, coupling, log_noise, log_gain, reading = parts
    # Root mean square of an uncoupled unit as its channel shows it, in place of the gain alone;
    # r^2 follows a normal law cut at 0 (Fokker-Planck equation, e.g. Risken 1989, from memory).
    noise = np.exp(log_noise)
    ratio = growth / noise
    cut = np.exp(scipy.stats.norm.logpdf(ratio) - scipy.stats.norm.logcdf(ratio))
    amplitude = log_gain + np.log((growth + noise * cut) / 2) / 2
    out = [growth, frequency, log_noise, reading, amplitude]
    if offset is not None:  # back from the recording's own units to the sensor's
        out = [*out[:-1], amplitude + np.log(spread), offset]
    return [np.hstack(out), np.hstack([*out, coupling])]


def spectral_features(values: np.ndarray, *, zero: bool) -> list[np.ndarray]:
    """Return the log power of each channel in 5, 10 or 25 bands up to 5 Hz, and at 0 Hz."""
    power = scipy.signal.periodogram(values, 10.0, "hann", axis=1)[1][:, 1:]
    first = [np.mean(values, axis=1) ** 2] if zero else []
    out = []
    for bands in (5, 10, 25):
        average = power.reshape(len(values), bands, -1, values.shape[2]).mean(2)
        out.append(np.log(np.hstack([*first, average.reshape(len(values), -1)]) + 1e-9))
    return out


def autoregressions(values: np.ndarray, *, level: bool) -> list[np.ndarray]:
    """Return the coefficients of each recording's autoregression; mean and residual too."""
    seen, out = jnp.ones(values.shape[1:], bool), []
    for order in (1, 2, 4):
        for ridge in (0.01, 0.1):
            fit = partial(fit_autoregression, order=order, ridge=ridge)
            model = jax.vmap(lambda v, fit=fit: fit(v, seen))(jnp.asarray(values))
            parts = [np.asarray(model.coefficients).reshape(len(values), -1)]
            if level:
                residual = np.diagonal(np.asarray(model.covariance), axis1=1, axis2=2)
                parts += [np.asarray(model.mean), np.log(residual) / 2]
            out.append(np.hstack(parts))
    return out
