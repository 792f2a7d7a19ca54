"""Do the intervals of a noisy fit hold? `python benchmarks/calibration.py`.

The work: a ring of three units (bifurcation 0.2, -0.1, 0.4; 0.9, 1.0, 1.15 cycles per time unit;
unequal couplings; process noise 0.2; reading noise 0.1), only the first component of each observed,
0.1 time units a sample, 1,000 samples, simulated at a tenth of that interval. From each of 200
recordings all 14 parameters (every coupling is free, the three that are zero too) are fitted by
Fisher scoring on the filter's likelihood, from spectral start values and no knowledge of the truth.

Printed for each parameter on its unconstrained scale: how often the 90 percent interval covers the
truth, mean and standard deviation of (estimate - truth) / standard error, and the mean error in
percent for the noise levels. Then what could be to blame where these are off: the filter's
approximation (cubature in place of linearisation; twice the likelihood ratio of the truth, whose
mean is the number of parameters if the likelihood is right), or the sample size (with 4,000 samples
a bias that fades with the sample size would halve in standard errors, one of the approximation
doubles). Then whether the parametric bootstrap mends it, on a quarter of the recordings. Last,
simulation-based calibration: ranks of the truth among draws from each posterior (cubature), where
truths come from the prior; a chi-square test of uniformity.

Coverage from 200 recordings has a standard error of 2 percent. `--quick` takes 40 recordings.
"""

import argparse
import time
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import scipy.stats
from jax.flatten_util import ravel_pytree

from oscillib import fitting, likelihood
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_rollout, noisy_strang
from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import Free, OffDiagonal, Positive, constrain, unconstrain


jax.config.update("jax_enable_x64", True)

INTERVAL, FINER, SETTLE = 0.1, 10, 300
NORMAL_90 = 1.6448536
FIELD = HopfNetwork()
STEP = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)


class Ring(eqx.Module):
    """Three units, one level of process noise and one of reading noise for all."""

    growth: Any
    frequency: Any
    coupling: Any
    noise: Any
    reading: Any

    @property
    def dynamics(self):
        field = HopfParams(self.growth, self.frequency, coupling=self.coupling)
        return NoisyParams(field, jnp.broadcast_to(self.noise, (3,)))

    @property
    def readout(self):
        return ReadoutParams(jnp.ones(3))

    @property
    def reading_noise(self):
        return jnp.broadcast_to(self.reading, (3,))


RULES = Ring(Free(), Positive(), OffDiagonal(), Positive(), Positive())
TRUTH = Ring(
    jnp.array([0.2, -0.1, 0.4]),
    2 * jnp.pi * jnp.array([0.9, 1.0, 1.15]),
    jnp.array([[0.0, 0.0, 0.5], [0.3, 0.0, 0.0], [0.0, 0.7, 0.0]]),
    jnp.asarray(0.2),
    jnp.asarray(0.1),
)
NAMES = fitting.parameter_names(TRUTH, RULES)
# Prior of the simulation-based calibration: standard deviations on the unconstrained scale.
WIDTHS = jnp.array([0.2] * 3 + [0.05] * 3 + [0.2] * 6 + [0.3, 0.3])


def flat(params):
    return ravel_pytree(unconstrain(params, RULES))[0]


CENTRE, UNRAVEL = ravel_pytree(unconstrain(TRUTH, RULES))


def from_flat(x):
    return constrain(UNRAVEL(x), RULES, TRUTH)


def simulate(params, key, count):
    """Record `count` samples of a ring that has forgotten its start."""
    start, before, after, reading = jax.random.split(key, 4)
    y = jax.random.normal(start, (2, 3))
    fine, given = INTERVAL / FINER, params.dynamics
    y = noisy_rollout(STEP, given, y, fine, SETTLE * FINER, key=before)[-1]
    ys = noisy_rollout(STEP, given, y, fine, (count - 1) * FINER, key=after)[::FINER]
    return ys[:, 0] + params.reading * jax.random.normal(reading, (count, 3))


class Fit(NamedTuple):
    params: Ring
    estimate: Any  # (free,)
    curvature: Any  # (free, free)
    good: Any
    steps: Any
    likelihood_ratio: Any  # twice the log-likelihood ratio of estimate and truth


def spectral_start(values):
    count = values.shape[0]
    times = INTERVAL * np.arange(count)
    grid = fitting.default_frequencies(times)
    found = fitting.spectrum_start(
        jnp.asarray(times), values, jnp.ones(values.shape, bool), frequencies=grid
    )
    level = jnp.asarray(0.3)
    return Ring(jnp.zeros(3), found.frequency, jnp.zeros((3, 3)), level, level)


def fit(values, start, method="extended", prior=False):
    """Fisher scoring on the filter's likelihood, with or without the prior."""
    seen = jnp.ones(values.shape, bool)
    given = {"h": INTERVAL, "start": likelihood.wide_start((2, 3), 1.0), "method": method}

    def negative(params):
        out = likelihood.gaussian_filter(
            STEP, linear_readout, params, values, seen, segment=25, **given
        )
        return -out.log_likelihood

    def loss(params):
        penalty = jnp.sum(((flat(params) - CENTRE) / WIDTHS) ** 2) / 2 if prior else 0.0
        return negative(params) + penalty

    def information(params):
        seen_by = likelihood.filter_information(
            STEP, linear_readout, params, RULES, values, seen, **given
        )
        return seen_by + jnp.diag(WIDTHS**-2) if prior else seen_by

    found = fitting.refine(loss, start, RULES, curvature=information, max_steps=40, tolerance=1e-2)
    good = found.status == fitting.Status.CONVERGED
    ratio = 2 * (negative(TRUTH) - negative(found.params))
    return Fit(found.params, flat(found.params), found.curvature, good, found.steps, ratio)


def in_batches(f, inputs, size=20):
    """Apply a function of one recording to all of them, `size` side by side."""
    return jax.jit(lambda inputs: jax.lax.map(lambda x: f(*x), inputs, batch_size=size))(inputs)


def recordings(truths, keys, count):
    return in_batches(lambda x, key: simulate(from_flat(x), key, count), (truths, keys))


def summary(estimate, error, truth, good):
    """Return coverage, and mean and standard deviation of the standardised errors."""
    z = ((estimate - truth) / error)[good]
    return np.mean(np.abs(z) < NORMAL_90, axis=0), np.mean(z, axis=0), np.std(z, axis=0)


def percent_off(estimate, good):
    """Return the mean error of both noise levels, in percent of the truth."""
    levels, truth = np.exp(estimate[good][:, -2:]), np.exp(np.asarray(CENTRE[-2:]))
    return 100 * (levels.mean(axis=0) / truth - 1)


def study(count, samples=1000, method="extended", seed=2026):
    """Fit `count` recordings of the one ring; return the fits and a summary."""
    keys = jax.random.split(jax.random.key(seed), count)
    values = recordings(jnp.tile(CENTRE, (count, 1)), keys, samples)
    fits = jax.device_get(in_batches(lambda v: fit(v, spectral_start(v), method), (values,)))
    error = np.sqrt([np.diag(np.linalg.inv(c)) for c in fits.curvature])
    return fits, summary(fits.estimate, error, np.asarray(CENTRE), fits.good)


def bootstrap_study(estimates, replicates, samples=1000):
    """Bootstrap estimates of a study; return the corrected ones and a summary."""

    def one(estimate, key):
        def refit(values, start):
            again = fit(values, start)
            return again.params, again.good

        out = fitting.bootstrap(
            lambda params, key: simulate(params, key, samples), refit, from_flat(estimate), RULES,
            key=key, count=replicates, batch=replicates,
        )  # fmt: skip
        spread = jnp.sqrt(jnp.diagonal(out.covariance) * (1 + 1 / jnp.sum(out.good)))
        return flat(out.corrected), spread, out.enough

    keys = jax.random.split(jax.random.key(7), len(estimates))
    out = in_batches(one, (jnp.asarray(estimates), keys), size=1)
    corrected, spread, enough = jax.device_get(out)
    return corrected, enough, summary(corrected, spread, np.asarray(CENTRE), enough)


def ranks(count, draws=19):
    """Rank truths drawn from the prior among draws from the posterior of each recording."""
    truth_key, data_key, draw_key = jax.random.split(jax.random.key(11), 3)
    size = (count, CENTRE.size)
    truths = CENTRE + WIDTHS * jax.random.normal(truth_key, size)
    values = recordings(truths, jax.random.split(data_key, count), 1000)
    # Fisher scoring from the centre of the prior, which is what is known of every recording.
    fits = in_batches(lambda v: fit(v, TRUTH, method="cubature", prior=True), (values,))
    factor = jnp.linalg.cholesky(jnp.linalg.inv(fits.curvature))
    normal = jax.random.normal(draw_key, (count, draws, CENTRE.size))
    posterior = fits.estimate[:, None] + jnp.einsum("rij,rdj->rdi", factor, normal)
    rank = jnp.sum(posterior < truths[:, None], axis=1)
    return np.asarray(rank), np.asarray(fits.good)


def uniformity(rank, draws=19, bins=10):
    """Return the p-value of a chi-square test for each parameter's ranks."""
    found = []
    for column in rank.T:
        seen = np.bincount(column * bins // (draws + 1), minlength=bins)
        found.append(scipy.stats.chisquare(seen).pvalue)
    return np.array(found)


def show(title, result, begun):
    coverage, mean, spread = result
    print(f"\n{title} ({time.perf_counter() - begun:.0f} s)")
    print(f"{'':16s}{'covered':>9s}{'mean z':>9s}{'sd z':>7s}")
    for row in zip(NAMES, coverage, mean, spread, strict=True):
        print("{:16s}{:9.3f}{:+9.2f}{:7.2f}".format(*row))


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    count = 40 if parser.parse_args().quick else 200
    for title, given in {
        "linearising filter, 1,000 samples": {"count": count},
        "cubature filter, 1,000 samples": {"count": count, "method": "cubature"},
        "linearising filter, 4,000 samples": {"count": count // 2, "samples": 4000},
    }.items():
        begun = time.perf_counter()
        fits, result = study(**given)
        show(title, result, begun)
        process, reading = percent_off(fits.estimate, fits.good)
        print(
            f"converged {fits.good.sum()} of {len(fits.good)} in {fits.steps.mean():.1f} steps; "
            f"noise levels off by {process:+.1f} and {reading:+.1f} percent; likelihood ratio of "
            f"the truth {fits.likelihood_ratio.mean():.2f}, {CENTRE.size} expected",
            flush=True,
        )
        if len(given) == 1:
            first = fits
    begun = time.perf_counter()
    corrected, enough, result = bootstrap_study(first.estimate[: count // 4], 20)
    show("bootstrap of 20 refits, 1,000 samples", result, begun)
    process, reading = percent_off(corrected, enough)
    print(f"noise levels off by {process:+.1f} and {reading:+.1f} percent", flush=True)
    rank, good = ranks(count)
    print(f"\nranks of {count} truths from the prior ({good.sum()} fits converged)")
    for name, p in zip(NAMES, uniformity(rank), strict=True):
        print(f"{name:16s} p = {p:.3f}")


if __name__ == "__main__":
    main()
