"""Learned inference over cohorts, against all that could stand in its place.

    python benchmarks/cohort            # an hour on 2 cores
    python benchmarks/cohort --quick    # 4 minutes: one seed, two sizes, hardly any training

Cohorts of tissue slices (`slices.py`): six coupled noisy regions seen through a saturating response
by 32 pixels, gaps included. Training cohorts of 75 to 1,200 recordings, a fresh test cohort of 75,
three seeds. Three tables:

1. Trained on recordings by rollouts, for each pooling, in windows of eight hours or in one piece.
   Windows start from smoothed states under the current proposals.
2. Propose and refine, beside the time average, persistence, a ridge vector autoregression, a
   recurrent predictor and latent states that move by a free neural field, each of which has had
   its settings and its moment to stop chosen on a validation cohort of 75.
3. Refinement from a network's proposal and from spectral starts: time, and how many recordings
   reach the best optimum known of them. Then what the intervals are worth.

Errors are root mean squares: of parameters in prior standard deviations (growth, frequencies,
coupling, level), of the reconstructed light without reading noise, of forecast readings. Light is
in units of what saturates a pixel; its standard deviation is 0.2, that of a reading's noise 0.04.
"""

import argparse
import json
import multiprocessing
import os
import tempfile
import time

import numpy as np
import scipy.stats


NORMAL_90 = 1.6448536


def table(title, rows, columns, cell, head=""):
    """Print a table of numbers; a missing one is a dash."""
    print(f"\n{title}\n{head:30s}" + "".join(f"{c!s:>10}" for c in columns))
    for row in rows:
        cells = [cell(row, column) for column in columns]
        print(f"{row:30s}" + "".join(f"{'-' if c is None else f'{c:.4f}':>10}" for c in cells))


class Results:
    """What all seeds found, with means over seeds."""

    def __init__(self, found):
        """Keep the tasks' dictionaries by seed."""
        self.seeds = sorted({seed for _, seed in found})
        self.merged = [
            {k: v for (_, s), part in found.items() if s == seed for k, v in part.items()}
            for seed in self.seeds
        ]

    def mean(self, row, size, measure):
        """Return the mean over seeds, or None where there is no such number."""
        cells = [m.get((row, size), m.get((row, 0), {})) for m in self.merged]
        if any(measure not in c for c in cells):
            return None  # in the quick setting, or a rival that has no such number
        return float(np.mean([c[measure] for c in cells]))

    def all(self, name):
        """Return one entry of every seed."""
        return [m[name] for m in self.merged]


ROLLED = [f"{p}, {k}" for p in ("attention", "mean", "last") for k in ("windows", "whole")]
OURS = [
    "simulated", "simulated, refined", "filter", "filter, refined", "spectral start",
    "spectral, refined", "true parameters",
]  # fmt: skip
THEIRS = [
    "average", "persistence", "ridge vector autoregression", "recurrent predictor",
    "neural field, 12 states", "neural field, 18 states",
]  # fmt: skip
MEASURES = {
    "parameters": "error of parameters, prior standard deviations",
    "windows": "error of the light reconstructed in windows of 8 hours",
    "whole": "error of the light reconstructed in one piece",
    "forecast": "error of forecasts, 1 to 20 steps",
    "step 1": "error of forecasts, 1 step",
    "step 20": "error of forecasts, 20 steps",
}


def show_errors(results, sizes):
    for measure in ("parameters", "windows", "whole", "forecast"):
        cell = lambda row, size, m=measure: results.mean(row, size, m)
        table(f"Trained by rollouts: {MEASURES[measure]}", ROLLED, sizes, cell, "recordings")
    for measure, title in MEASURES.items():
        cell = lambda row, size, m=measure: results.mean(row, size, m)
        rows = OURS + (THEIRS if measure in ("forecast", "step 1", "step 20") else [])
        table(f"Propose and refine: {title}", rows, sizes, cell, "recordings")
    ratio = lambda row, size: (
        results.mean("attention, windows", size, "windows") / results.mean(row, size, "whole")
    )
    table(
        "Reconstruction in windows with attention, as a fraction of that of",
        ["last, whole"], sizes, ratio,
    )  # fmt: skip

    def beside(row, size):
        best = min(results.mean(r, size, "forecast") for r in THEIRS)
        return results.mean(row, size, "forecast") / best

    rows = ["simulated, refined", "filter, refined"]
    table("Forecast error as a fraction of the best rival's", rows, sizes, beside)


def show_refinement(results, sizes):
    """Print time and success of every kind of start, and of the best of several."""
    fits = {"proposal (simulated)": results.all("fit simulated")}
    fits |= {f"proposal (filter, {n})": results.all(("fit filter", n)) for n in sizes}
    spectral = results.all("spectral")
    fits["one spectral start"] = [s[0] for s in spectral]
    # Per recording, the best loss that anything has found.
    best = [np.min([np.where(f[i].good, f[i].loss, np.inf) for f in fits.values()], axis=0)
            for i in range(len(results.seeds))]  # fmt: skip
    for b, several in zip(best, spectral, strict=True):
        for fit in several:
            n = len(fit.loss)
            b[:n] = np.minimum(b[:n], np.where(fit.good, fit.loss, np.inf))
    print(f"\n{'Refinement from':30s}{'converged':>10}{'at best':>10}{'steps':>8}{'s each':>8}")

    def line(name, good, reached, steps, seconds):
        print(f"{name:30s}{good:10.3f}{reached:10.3f}{steps:8.1f}{seconds:8.3f}")

    def reached(fit, b):
        return fit.good & (fit.loss < b[: len(fit.loss)] + 0.1)

    for name, per_seed in fits.items():
        line(
            name,
            np.mean([f.good for f in per_seed]),
            np.mean([reached(f, b) for f, b in zip(per_seed, best, strict=True)]),
            np.mean([f.steps for f in per_seed]),
            np.mean([f.seconds for f in per_seed]),
        )
    starts, few = len(spectral[0]), len(spectral[0][-1].loss)
    for k in sorted({2, 4, starts} & set(range(2, starts + 1))):
        hit = [
            np.any([reached(f, b)[:few] for f in several[:k]], axis=0)
            for several, b in zip(spectral, best, strict=True)
        ]
        good = [np.any([f.good[:few] for f in several[:k]], axis=0) for several in spectral]
        seconds = np.mean([sum(f.seconds for f in several[:k]) for several in spectral])
        steps = np.mean([sum(f.steps[:few].mean() for f in several[:k]) for several in spectral])
        line(f"best of {k} spectral starts", np.mean(good), np.mean(hit), steps, seconds)


def show_calibration(results, draws=19):
    """Print coverage after refinement, and ranks of the truth under the simulated proposal."""
    truth = np.concatenate(results.all("truth"))
    fits = results.all("fit simulated")
    estimate = np.concatenate([f.free for f in fits])
    error = np.sqrt([np.diag(np.linalg.inv(c)) for f in fits for c in f.curvature])
    good = np.concatenate([f.good for f in fits])
    z = ((estimate - truth) / error)[good]
    laws = results.all("law")
    mean = np.concatenate([x.mean for x in laws])
    factor = np.concatenate([x.factor for x in laws])
    normal = np.random.default_rng(0).normal(size=(len(mean), draws, mean.shape[1]))
    sample = mean[:, None] + np.einsum("rij,rdj->rdi", factor, normal)
    rank = np.sum(sample < truth[:, None], axis=1)
    names = ["growth", *(f"frequency {i}" for i in range(6)), "coupling", "noise", "level"]
    names.append("reading noise")
    print(f"\nRefined: {good.sum()} of {len(good)} converged; 90 percent intervals and errors in")
    print("their units. Proposal from simulations: chi-square test of uniform ranks.")
    print(f"{'':16s}{'covered':>9s}{'mean z':>9s}{'sd z':>7s}{'ranks p':>9s}")
    for i, name in enumerate(names):
        seen = np.bincount(rank[:, i] * 10 // (draws + 1), minlength=10)
        p = scipy.stats.chisquare(seen).pvalue
        covered = np.mean(np.abs(z[:, i]) < NORMAL_90)
        print(f"{name:16s}{covered:9.3f}{z[:, i].mean():+9.2f}{z[:, i].std():7.2f}{p:9.3f}")
    print(f"{'all':16s}{np.mean(np.abs(z) < NORMAL_90):9.3f}")


def main():
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    parser.add_argument("--out", help="write the tables' numbers to this JSON file, too")
    parser.add_argument("--workers", type=int, default=2)
    given = parser.parse_args()
    # Each worker is one core's work: threads of several would only get into each other's way.
    os.environ["XLA_FLAGS"] = "--xla_cpu_multi_thread_eigen=false"
    os.environ["OMP_NUM_THREADS"] = "1"
    # What one worker has compiled the other need not.
    cache = tempfile.TemporaryDirectory()
    os.environ["JAX_COMPILATION_CACHE_DIR"] = cache.name
    import study

    settings = study.QUICK if given.quick else study.FULL
    seeds = (1,) if given.quick else (1, 2, 3)
    jobs = [(name, seed, settings) for seed in seeds for name in study.TASKS]
    begun, found = time.perf_counter(), {}
    with multiprocessing.get_context("spawn").Pool(given.workers) as pool:
        for name, seed, part, seconds in pool.imap_unordered(study.run, jobs, chunksize=1):
            found[name, seed] = part
            print(f"{name}, seed {seed}: {seconds:.0f} s", flush=True)
    results = Results(found)
    show_errors(results, settings.sizes)
    show_refinement(results, settings.sizes)
    show_calibration(results)
    print(f"\n{time.perf_counter() - begun:.0f} s in all")
    if given.out:
        numbers = [{str(k): v for k, v in m.items() if isinstance(v, dict)} for m in results.merged]
        with open(given.out, "w") as file:
            json.dump(numbers, file, indent=1)


if __name__ == "__main__":
    main()
