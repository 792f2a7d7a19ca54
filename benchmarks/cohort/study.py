"""The tasks of the benchmark, each for one seed; they share nothing, so they run side by side."""

import time
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import proposals
import refinement
import rivals
import slices

from oscillib import encoders


class Settings(NamedTuple):
    """How large the study is."""

    sizes: tuple[int, ...]
    poolings: tuple[str, ...]
    rollout: int  # training steps
    simulated: int
    filter: int
    network: int
    refined: int  # test recordings that are refined
    several: int  # of these, from several spectral starts
    starts: int


FULL = Settings(
    sizes=(75, 150, 300, 600, 1200),
    poolings=("attention", "mean", "last"),
    rollout=200,
    simulated=2500,
    filter=200,
    network=300,
    refined=75,
    several=25,
    starts=8,
)
QUICK = Settings(
    sizes=(75, 150),
    poolings=("attention", "last"),
    rollout=40,
    simulated=300,
    filter=20,
    network=30,
    refined=10,
    several=5,
    starts=2,
)
DYNAMIC = np.array([0, 1, 2, 3, 4, 5, 6, 7, 9])  # growth, frequencies, coupling, level


class Scene(NamedTuple):
    """What a task starts from."""

    prior: encoders.Prior
    train: slices.Cohort
    check: slices.Cohort
    test: slices.Cohort
    key: Any


def scene(seed: int, settings: Settings) -> Scene:
    """Draw the largest training cohort, a validation cohort and a fresh test cohort."""
    keys = jax.random.split(jax.random.key(seed), 4)
    prior = slices.population()
    train = slices.draw(prior, settings.sizes[-1], key=keys[0])
    check, test = (slices.draw(prior, slices.CHUNK, key=k) for k in keys[1:3])
    return Scene(prior, train, check, test, keys[3])


@eqx.filter_jit
def _forecasts(prior: encoders.Prior, free: Any, values: Any, mask: Any) -> Any:
    one = lambda x: slices.forecast(prior.params(x[0]), x[1], x[2])
    return jax.lax.map(one, (free, values, mask), batch_size=5)


@eqx.filter_jit
def _reconstructions(prior: encoders.Prior, free: Any, states: Any, length: int) -> Any:
    one = lambda f, s: proposals.reconstruct(prior.params(f), s, length)[0]
    return jax.vmap(one)(free, states)


def measure(prior: encoders.Prior, free: Any, test: slices.Cohort) -> dict[str, float]:
    """Return the errors that parameters make on a test cohort.

    Parameters in prior standard deviations; light, without reading noise, rolled out in windows and
    in one piece; readings forecast 1 to 20 steps ahead, and 20 ahead.
    """
    values, mask = slices.beginning(test)
    off = np.asarray((free - test.free) / jnp.diagonal(prior.law.factor)[None])[:, DYNAMIC]
    states = proposals.states(prior, free, values, mask)
    light = test.light[:, : slices.SEEN]

    def reconstruction(length):
        return rms(_reconstructions(prior, free, states, length) - light)

    ahead = rivals.error(_forecasts(prior, free, test.values, test.mask), test)
    return {
        "parameters": rms(off),
        "windows": reconstruction(proposals.WINDOW),
        "whole": reconstruction(proposals.WHOLE),
        **forecast_errors(ahead),
    }


def forecast_errors(ahead: np.ndarray) -> dict[str, float]:
    """Return the error over all 20 steps, and at the first and the last."""
    return {"forecast": rms(ahead), "step 1": float(ahead[0]), "step 20": float(ahead[-1])}


def rms(x: Any) -> float:
    """Return the root mean square."""
    return float(np.sqrt(np.mean(np.asarray(x) ** 2)))


def rollout_task(seed: int, settings: Settings) -> dict:
    """Train on recordings by rollouts: each pooling, many windows and one."""
    prior, train, _, test, key = scene(seed, settings)
    values, mask = slices.beginning(test)
    found = {}
    for pooling in settings.poolings:
        for kind in ("windows", "whole"):
            for size in settings.sizes:
                net = proposals.train(
                    kind, pooling, prior, slices.take(train, slice(size)), settings.rollout, key=key
                )
                free = proposals.laws(net, prior, values, mask).mean
                found[f"{pooling}, {kind}", size] = measure(prior, free, test)
    return found


def rival_task(seed: int, settings: Settings) -> dict:
    """Forecast by simple statistics and by networks that know no equation."""
    _, train, check, test, key = scene(seed, settings)
    found = {}
    for kind in ("average", "persistence"):
        errors = forecast_errors(rivals.error(rivals.simple(test, kind), test))
        found |= {(kind, size): errors for size in settings.sizes}
    for size in settings.sizes:
        part = slices.take(train, slice(size))
        ahead = rivals.error(rivals.autoregression(part, check, test), test)
        found["ridge vector autoregression", size] = forecast_errors(ahead)
        for kind in rivals.MAKERS:
            forecasts = rivals.network(kind, part, check, test, settings.network, key)
            found[kind, size] = forecast_errors(rivals.error(forecasts, test))
    return found


class Refined(NamedTuple):
    """What refinement gave on the test cohort from one kind of start."""

    free: np.ndarray
    loss: np.ndarray
    curvature: np.ndarray
    good: np.ndarray
    steps: np.ndarray
    seconds: float  # a recording, compilation excluded


_COMPILED: set[int] = set()


def refine(prior: encoders.Prior, free: Any, values: Any, mask: Any) -> Refined:
    """Refine every recording and take the time of it."""
    given = (prior, jnp.asarray(free), values, mask)
    if len(free) not in _COMPILED:
        jax.block_until_ready(refinement.refine(*given))
        _COMPILED.add(len(free))
    begun = time.perf_counter()
    fit = jax.block_until_ready(refinement.refine(*given))
    seconds = (time.perf_counter() - begun) / len(free)
    return Refined(**jax.device_get(fit)._asdict(), seconds=seconds)


def refine_task(seed: int, settings: Settings) -> dict:
    """Propose by simulations and by the filter's evidence, refine; or refine spectral starts."""
    prior, train, _, test, key = scene(seed, settings)
    test = slices.take(test, slice(settings.refined))
    values, mask = slices.beginning(test)
    keys = jax.random.split(key, 4)
    # Simulations cost no recordings, but some time: three recordings for each step, seen in turns.
    simulated = slices.draw(prior, 3 * settings.simulated, key=keys[0])
    net = proposals.train("simulated", "attention", prior, simulated, settings.simulated, key=key)
    law = proposals.laws(net, prior, values, mask)
    fit = refine(prior, law.mean, values, mask)
    found: dict[Any, Any] = {
        "truth": np.asarray(test.free),
        "law": jax.device_get(law),
        ("simulated", 0): measure(prior, law.mean, test),
        ("simulated, refined", 0): measure(prior, jnp.asarray(fit.free), test),
        ("true parameters", 0): measure(prior, test.free, test),
        "fit simulated": fit,
    }
    for size in settings.sizes:
        net = proposals.train(
            "filter", "attention", prior, slices.take(train, slice(size)), settings.filter, key=key
        )
        law = proposals.laws(net, prior, values, mask)
        fit = refine(prior, law.mean, values, mask)
        found["filter", size] = measure(prior, law.mean, test)
        found["filter, refined", size] = measure(prior, jnp.asarray(fit.free), test)
        found["fit filter", size] = fit
    found["spectral"] = []
    for k in range(settings.starts):
        count = settings.refined if k == 0 else settings.several
        some = (values[:count], mask[:count])
        draws = jax.random.split(jax.random.fold_in(keys[1], k), count)
        start = refinement.spectral_starts(prior, some[0], some[1], draws)
        fit = refine(prior, start, some[0], some[1])
        found["spectral"].append(fit)
        if k == 0:
            found["spectral start", 0] = measure(prior, start, test)
            found["spectral, refined", 0] = measure(prior, jnp.asarray(fit.free), test)
    return found


TASKS = {"refine": refine_task, "rollout": rollout_task, "rival": rival_task}


def run(job: tuple[str, int, Settings]) -> tuple[str, int, dict, float]:
    """Run one task of one seed."""
    name, seed, settings = job
    begun = time.perf_counter()
    found = TASKS[name](seed, settings)
    return name, seed, found, time.perf_counter() - begun
