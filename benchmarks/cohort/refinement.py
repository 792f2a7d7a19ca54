"""From a start to the optimum of the posterior: Fisher scoring, from a proposal or a spectrum."""

from functools import partial
from typing import Any, NamedTuple

import equinox as eqx
import features
import jax
import jax.numpy as jnp
import numpy as np
import slices

from oscillib import encoders, fitting, likelihood


TOLERANCE = 3e-2  # standard errors
STEPS = 15
TIMES = np.arange(slices.SEEN, dtype=np.float32)
FREQUENCIES = jnp.asarray(2 * np.pi / np.linspace(34.0, 17.0, 120, dtype=np.float32))


class Fit(NamedTuple):
    """An optimum; recordings come first."""

    free: Any  # (free,)
    curvature: Any  # (free, free)
    loss: Any  # negative log-posterior, up to a constant
    good: Any
    steps: Any


def _refine(prior: encoders.Prior, free: Any, values: Any, mask: Any) -> Fit:
    identity = jnp.linalg.inv(prior.law.covariance)

    def loss(params):
        return -slices.log_likelihood(params, values, mask) - prior.law.log_prob(prior.free(params))

    def curvature(params):
        seen = likelihood.filter_information(
            slices.NOISY_STEP, slices.light, params, prior.constraints, values, mask,
            h=1.0, start=slices.start_belief(),
        )  # fmt: skip
        return seen + identity

    out = fitting.refine(
        loss, prior.params(free), prior.constraints,
        curvature=curvature, max_steps=STEPS, tolerance=TOLERANCE,
    )  # fmt: skip
    good = out.status == fitting.Status.CONVERGED
    return Fit(prior.free(out.params), out.curvature, out.loss, good, out.steps)


@eqx.filter_jit
def refine(prior: encoders.Prior, free: Any, values: Any, mask: Any) -> Fit:
    """Refine every recording of a cohort from its own start, five side by side."""
    return jax.lax.map(lambda x: _refine(prior, *x), (free, values, mask), batch_size=5)


@eqx.filter_jit
def spectral_starts(prior: encoders.Prior, values: Any, mask: Any, keys: Any) -> Any:
    """Return one start a recording: light unmixed into regions, their spectra, the rest drawn.

    Frequencies and level are read off the recording. Growth, coupling and noise cannot be read off
    a spectrum of noisy coupled units, so they are drawn from what is known of the population.
    """
    return jax.vmap(partial(_spectral_start, prior))(values, mask, keys)


def _spectral_start(prior: encoders.Prior, values: Any, mask: Any, key: Any) -> Any:
    regions, level, seen = features.unmix(values, mask)
    found = fitting.spectrum_start(
        jnp.asarray(TIMES), regions, jnp.repeat(seen[:, None], slices.REGIONS, axis=1),
        frequencies=FREQUENCIES,
    )  # fmt: skip
    drawn = prior.params(prior.law.sample(key=key))
    start = eqx.tree_at(lambda s: (s.frequency, s.level), drawn, (found.frequency, level))
    return prior.free(start)
