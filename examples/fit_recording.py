"""Fit one recording: from a CSV file to parameters with intervals, and a forecast with bands.

    python examples/fit_recording.py --csv FILE --out DIR

Without `--csv` it fits the built-in tray of tissue slices. Every stage is a plain function; take
what you need into a notebook.
"""

import argparse
import json
from pathlib import Path
from typing import Any, NamedTuple

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import optax
from jax.flatten_util import ravel_pytree
from rhythm_model import (
    Prior,
    amplitude,
    initial_params,
    noisy_readout,
    noisy_step,
    window_step,
)
from tqdm import tqdm

from oscillib import evaluate, fitting, integrate, likelihood, losses, recordings
from oscillib.demo import tray
from oscillib.observe import waveform_readout
from oscillib.parameters import constrain, unconstrain
from oscillib.plots import plot_fit


CYCLES = 4  # a rhythm must be seen this often in the training part; slower is trend
NORMAL_90 = 1.6448536
DRAWS = 20  # parameter sets behind a forecast band


class Data(NamedTuple):
    """A recording on its grid, scaled by its training part."""

    source: str
    grid: recordings.Recording
    scaled: recordings.Recording
    scaling: recordings.Scaling
    trend: recordings.Scaling  # a parabola, for start values and windows only
    detrended: recordings.Recording  # training part, same scale, no trend
    training: int  # samples in the training part
    interval: float  # time units of the recording


class Clock(NamedTuple):
    """Start values in a time unit that makes every rate of order one, whatever the recording's."""

    start: fitting.SpectrumStart
    unit: float  # recording's time units in one radian of the median rhythm
    interval: float  # radians from sample to sample


def main(argv: list[str] | None = None) -> dict:
    args = parse(argv)
    jax.config.update("jax_enable_x64", True)
    try:
        data = prepare(args.csv, args.holdout, args.seed)
    except (OSError, ValueError) as problem:
        raise SystemExit(f"cannot fit {args.csv or 'the built-in tray'}: {problem}") from problem
    clock = start_values(data)
    initial = initial_params(clock.start)
    prior = Prior(initial)
    params, windows = fit_windows(data, clock, initial, prior, rounds=args.rounds)
    params, fit = fit_noise(data, clock, params, prior, max_steps=2 * args.rounds)
    forecast = forecast_held_out(data, clock, params, fit, args.horizon)
    report = {
        "input": describe_input(data),
        "units": describe_units(data, clock, params, fit),
        "coupling": describe_coupling(clock, params, fit),
        "windows": windows["report"],
        "fit": fit["report"],
        "forecast": forecast["report"],
    }
    args.out.mkdir(parents=True, exist_ok=True)
    (args.out / "report.json").write_text(json.dumps(report, indent=2, allow_nan=False) + "\n")
    draw(args.out / "fit.png", data, windows, forecast)
    print(table(report))
    print(f"\nWrote {args.out / 'report.json'} and {args.out / 'fit.png'}")
    return report


def parse(argv: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--csv", type=Path, help="first column time, others channels")
    parser.add_argument("--out", type=Path, default=Path("out"), help="folder for the results")
    parser.add_argument("--holdout", type=float, default=0.25, help="fraction kept for forecasts")
    parser.add_argument("--horizon", type=int, default=None, help="steps forecast ahead")
    parser.add_argument("--seed", type=int, default=0, help="seed of the built-in tray")
    parser.add_argument("--rounds", type=int, default=12, help="rounds of 10 steps a stage")
    args = parser.parse_args(argv)
    if not 0.05 <= args.holdout <= 0.8:
        parser.error(f"--holdout must lie between 0.05 and 0.8; got {args.holdout}")
    return args


# Data ---------------------------------------------------------------------------------------------


def prepare(csv: Path | None, holdout: float, seed: int) -> Data:
    recording = recordings.read_csv(csv) if csv else tray(key=jax.random.key(seed)).recording
    grid = recordings.on_grid(recording)
    training = round(grid.times.shape[0] * (1 - holdout))
    known = recordings.take(grid, 0, training)
    # For forecasts only mean and scale are taken out: a slow trend is left to the background of the
    # noisy fit, which, unlike an extrapolated polynomial, knows how unsure it is.
    scaling = recordings.fit_scaling(known, degree=0)
    trend = recordings.fit_scaling(known, degree=2)
    return Data(
        source=str(csv) if csv else f"built-in tray, seed {seed}",
        grid=grid,
        scaled=recordings.scale(grid, scaling),
        scaling=scaling,
        trend=trend,
        detrended=detrend(known, trend, scaling),
        training=training,
        interval=float(grid.times[1] - grid.times[0]),
    )


def detrend(
    known: recordings.Recording, trend: recordings.Scaling, scaling: recordings.Scaling
) -> recordings.Recording:
    """Take the trend out of every channel, and divide as `scaling` does."""
    flat = recordings.scale(known, trend)
    values = flat.values * (trend.spread / scaling.spread)
    return recordings.recording(
        flat.times, jnp.where(flat.mask, values, jnp.nan), channels=flat.channels
    )


def start_values(data: Data) -> Clock:
    known = data.detrended
    grid = fitting.default_frequencies(known.times)
    slowest = 2 * np.pi * CYCLES / float(known.times[-1] - known.times[0])
    found = fitting.spectrum_start(
        known.times, known.values, known.mask, frequencies=grid[grid > slowest]
    )
    unit = float(1 / jnp.median(found.frequency))

    def rates(values):
        return [values.frequency, values.growth, values.half_width]

    start = eqx.tree_at(rates, found, [rate * unit for rate in rates(found)])
    return Clock(start, unit, data.interval / unit)


# Windows ------------------------------------------------------------------------------------------


def fit_windows(
    data: Data, clock: Clock, initial: Any, prior: Prior, *, rounds: int
) -> tuple[Any, dict]:
    """Fit the noise-free rhythm in windows that grow while the weight on their gaps rises."""
    known, start = data.detrended, clock.start
    times = clock.interval * jnp.arange(data.training).astype(known.times.dtype)
    period = 2 * np.pi / clock.interval
    allowed = float(jnp.min(fitting.longest_window(start.half_width))) / clock.interval
    steps = data.training - 1
    first = int(np.clip(min(period, allowed), 2, steps))
    last = int(np.clip(2 * period, first, steps))
    lengths = fitting.window_lengths(steps, first=first, last=last)
    # Before the first stage, the states are the tones of the spectrum.
    phase = start.frequency[None] * times[:, None] + start.phase[None]
    states = start.amplitude[None, None] * jnp.stack([jnp.cos(phase), jnp.sin(phase)], axis=1)

    which = prior.constraints
    free = unconstrain(initial, which)
    progress = tqdm(total=rounds * len(lengths), desc="windows", unit="round")
    for stage, length in enumerate(lengths):
        windows = integrate.cut(times, length)
        loss = window_loss(known, windows, prior, initial)
        variables = (free, states[windows.index[:, 0]])
        optimiser = optax.adam(optax.cosine_decay_schedule(0.02, 10 * rounds, alpha=0.05))
        run = ten_steps(loss, optimiser)
        memory = optimiser.init(variables)
        for weight in 10.0 ** np.linspace(stage, stage + 1, rounds):
            variables, memory, value = run(variables, memory, jnp.asarray(weight))
            progress.update()
            progress.set_postfix(window=length, weight=f"{weight:.0f}", loss=f"{value:.3f}")
        free, starts = variables
        params = constrain(free, which, initial)
        rolled = integrate.roll_windows(window_step, params.dynamics.rhythm, starts, windows)
        states = integrate.join(rolled.states, windows)
    progress.close()
    read = jax.vmap(waveform_readout, in_axes=(0, None))(states, params.readout)
    collapse = fitting.collapse(read, known.values, known.mask)
    report = {
        "lengths": list(lengths),
        "rms_gap": number(jnp.sqrt(jnp.mean(rolled.gaps**2)) if rolled.gaps.size else 0.0),
        "largest_gap": number(jnp.max(jnp.abs(rolled.gaps)) if rolled.gaps.size else 0.0),
        "finite": bool(jnp.all(rolled.finite)),
        "collapsed": [bool(c) for c in collapse.collapsed],
    }
    joints = known.times[windows.index[1:, 0]]
    return params, {"report": report, "read": read, "joints": joints}


def window_loss(known: Any, windows: Any, prior: Prior, initial: Any) -> Any:
    values = integrate.gather(known.values, windows)
    mask = integrate.gather(known.mask, windows) & windows.owned[..., None]
    count = jnp.sum(mask)

    def loss(variables, weight):
        free, starts = variables
        params = constrain(free, prior.constraints, initial)
        rolled = integrate.roll_windows(window_step, params.dynamics.rhythm, starts, windows)
        read = jax.vmap(jax.vmap(waveform_readout, in_axes=(0, None)), in_axes=(0, None))
        predicted = read(rolled.states, params.readout)
        misfit = losses.reconstruction(predicted, values, mask, scale=initial.reading_noise)
        gaps = losses.continuity(rolled.gaps, weight=weight)
        return (misfit + gaps + prior.loss(params)) / count

    return loss


def ten_steps(loss: Any, optimiser: Any) -> Any:
    """Compile ten steps of the loop at once: fewer returns to Python."""

    @jax.jit
    def run(variables, memory, *more):
        def body(carry, _):
            variables, memory = carry
            value, slope = jax.value_and_grad(loss)(variables, *more)
            updates, memory = optimiser.update(slope, memory, variables)
            return (optax.apply_updates(variables, updates), memory), value

        (variables, memory), values = jax.lax.scan(body, (variables, memory), None, length=10)
        return variables, memory, values[-1]

    return run


# Noise --------------------------------------------------------------------------------------------


def filter_start(data: Data) -> likelihood.Gaussian:
    return likelihood.wide_start((2, 2 * data.scaled.values.shape[1]), 2.0)


def fit_noise(
    data: Data, clock: Clock, params: Any, prior: Prior, *, max_steps: int
) -> tuple[Any, dict]:
    """Maximise the filter's likelihood by Fisher scoring: what the windows left over is noise."""
    known, which = recordings.take(data.scaled, 0, data.training), prior.constraints
    given = {"h": clock.interval, "start": filter_start(data)}

    def filtered(params):
        return likelihood.gaussian_filter(
            noisy_step, noisy_readout, params, known.values, known.mask, segment=16, **given
        )

    def loss(params):
        return -filtered(params).log_likelihood + prior.loss(params)

    def information(params):
        seen = likelihood.filter_information(
            noisy_step, noisy_readout, params, which, known.values, known.mask, **given
        )
        return seen + prior.information

    @jax.jit
    def step(state):
        return fitting.refine_step(loss, state, which, curvature=information, tolerance=0.05)

    state = fitting.refine_init(loss, params, which)
    progress = tqdm(range(max_steps), desc="noise", unit="step")
    for _ in progress:
        state = step(state)
        off = float(jnp.sqrt(state.decrement))
        progress.set_postfix(loss=f"{state.loss:.2f}", standard_errors_off=f"{off:.3f}")
        if state.status != fitting.Status.RUNNING:
            break
    progress.close()
    running = state.status == fitting.Status.RUNNING
    params = state.params
    uncertainty = jax.jit(
        lambda p, matrix: fitting.laplace(loss, p, which, curvature=matrix, widths=prior.widths)
    )(params, state.curvature)
    report = {
        "status": fitting.describe(fitting.Status.STEP_LIMIT if running else state.status),
        "steps": int(state.steps),
        "log_likelihood": number(prior.loss(params) - state.loss),
        "standard_errors_off": number(jnp.sqrt(state.decrement)),
        "weak_directions": list(fitting.describe_directions(uncertainty.directions, params, which)),
    }
    return params, {"report": report, "uncertainty": uncertainty, "which": which}


# Forecasts ----------------------------------------------------------------------------------------


def forecast_held_out(
    data: Data, clock: Clock, params: Any, fit: dict, horizon: int | None
) -> dict:
    """Forecast from rolling origins in the held-out part, beside three simple statistics."""
    values, mask = data.scaled.values, data.scaled.mask
    count = values.shape[0]
    held_out = count - data.training
    horizon = min(horizon or held_out // 2, held_out)
    stride = max(1, (held_out - horizon) // 200)
    origins = evaluate.rolling_origins(
        count, first=data.training - 1, horizon=horizon, stride=stride
    )

    def predict(params):
        filtered = likelihood.gaussian_filter(
            noisy_step, noisy_readout, params, values, mask,
            h=clock.interval, start=filter_start(data),
        )  # fmt: skip
        beliefs = likelihood.Gaussian(filtered.means[origins], filtered.covariances[origins])
        return likelihood.forecast(
            noisy_step, noisy_readout, params, beliefs, horizon, h=clock.interval
        )

    # The bands hold what is unknown of the parameters too: the spread of the forecasts of draws.
    # The fit goes through first, so that one compiled function does for it and the draws.
    stack = lambda one, many: jnp.concatenate([jnp.asarray(one)[None], many])
    trees = jax.tree.map(stack, params, draw_params(params, fit, DRAWS))
    forecasts = jax.jit(lambda trees: jax.lax.map(predict, trees))(trees)
    means, variances = forecasts.means[0], forecasts.variances[0]
    off = forecasts.means[1:] - means[None]
    band = NORMAL_90 * jnp.sqrt(variances + jnp.mean(off**2, axis=0))
    chosen = evaluate.choose_autoregression(
        values[: data.training], mask[: data.training],
        orders=(1, 2, 4, 8), ridges=(1e-4, 1e-2, 1.0), horizon=horizon,
    )  # fmt: skip
    regression = evaluate.forecast_autoregression(chosen.model, values, mask, origins, horizon)
    truth = evaluate.targets(values, origins, horizon)
    seen = evaluate.targets(mask, origins, horizon)

    def error(predicted):
        return [number(e) for e in evaluate.error_by_horizon(predicted, truth, seen)]

    covered = evaluate.coverage(means - band, means + band, truth, seen)
    report = {
        "steps": list(range(1, horizon + 1)),
        "origins": len(origins),
        "model": error(means),
        "time_average": error(evaluate.time_average(values, mask, origins, horizon)),
        "persistence": error(evaluate.persistence(values, mask, origins, horizon)),
        "autoregression": error(regression),
        "autoregression_order": int(chosen.order),
        "autoregression_ridge": float(chosen.ridge),
        "coverage_90": [number(c) for c in covered],
    }
    return {"report": report, "origin": int(origins[0]), "means": means[0], "band": band[0]}


def draw_params(params: Any, fit: dict, count: int) -> Any:
    """Draw parameters from the normal density about the fit; a tree with a leading axis."""
    flat, unravel = ravel_pytree(unconstrain(params, fit["which"]))
    values, vectors = jnp.linalg.eigh(fit["uncertainty"].directions.covariance)
    normal = jax.random.normal(jax.random.key(0), (count, flat.size), flat.dtype)
    draws = flat + (normal * jnp.sqrt(jnp.maximum(values, 0))[None]) @ vectors.T
    return jax.vmap(lambda x: constrain(unravel(x), fit["which"], params))(draws)


# Report -------------------------------------------------------------------------------------------


def number(x: Any) -> float | None:
    """Return a plain number for JSON, which knows no infinity and no NaN: those become null."""
    x = float(x)
    return x if np.isfinite(x) else None


def describe_input(data: Data) -> dict:
    return {
        "source": data.source,
        "samples": int(data.grid.times.shape[0]),
        "training_samples": data.training,
        "interval": data.interval,
        "channels": list(data.grid.channels),
        "missing": int(jnp.sum(~data.grid.mask)),
        "spread": [number(s) for s in data.scaling.spread],
    }


def describe_units(data: Data, clock: Clock, params: Any, fit: dict) -> list[dict]:
    """Say of every unit what it is: value and 90 percent interval of each number."""
    found = fit["uncertainty"]
    dynamics, low, high = params.dynamics, found.lower.dynamics, found.upper.dynamics
    growth = dynamics.rhythm.growth
    error = found.standard_error.dynamics.rhythm.growth
    likely = jax.scipy.stats.norm.cdf(growth / error)
    spread = data.scaling.spread
    size = amplitude(dynamics)
    ratio = jnp.exp(NORMAL_90 * log_amplitude_error(params, fit))

    def triple(value, lower, upper):
        return {"value": number(value), "lower": number(lower), "upper": number(upper)}

    units = []
    for i, channel in enumerate(data.grid.channels):
        w = dynamics.rhythm.frequency[i]
        wl, wu = low.rhythm.frequency[i], high.rhythm.frequency[i]
        refused = bool(found.refused.dynamics.rhythm.growth[i])
        units.append(
            {
                "channel": channel,
                "regime": regime(None if refused else float(likely[i])),
                "probability_self_sustained": None if refused else number(likely[i]),
                "observed_period": number(2 * np.pi * clock.unit / clock.start.frequency[i]),
                "growth": triple(*(d.rhythm.growth[i] / clock.unit for d in (dynamics, low, high))),
                "period": triple(*(2 * np.pi * clock.unit / x for x in (w, wu, wl))),
                "amplitude": triple(
                    size[i] * spread[i],
                    size[i] * spread[i] / ratio[i],
                    size[i] * spread[i] * ratio[i],
                ),
                "noise": triple(
                    *(n[i] * spread[i] for n in (dynamics.noise, low.noise, high.noise))
                ),
                "reading_noise": triple(
                    *(p.reading_noise[i] * spread[i] for p in (params, found.lower, found.upper))
                ),
            }
        )
    return units


def log_amplitude_error(params: Any, fit: dict) -> Any:
    """Carry the covariance of the free vector over to the logarithm of each amplitude."""
    flat, unravel = ravel_pytree(unconstrain(params, fit["which"]))

    def size(x):
        return jnp.log(amplitude(constrain(unravel(x), fit["which"], params).dynamics))

    slope = jax.jacfwd(size)(flat)
    covariance = fit["uncertainty"].directions.covariance
    return jnp.sqrt(jnp.einsum("ij,jk,ik->i", slope, covariance, slope))


def regime(likely: float | None) -> str:
    if likely is None:
        return "undetermined"
    if likely > 0.95:
        return "self-sustained"
    return "damped" if likely < 0.05 else "undecided"


def describe_coupling(clock: Clock, params: Any, fit: dict) -> dict:
    found = fit["uncertainty"]

    def rows(tree):
        return [[number(k / clock.unit) for k in row] for row in tree.dynamics.rhythm.coupling]

    return {"value": rows(params), "lower": rows(found.lower), "upper": rows(found.upper)}


def table(report: dict) -> str:
    def show(t):
        if t["lower"] is None or t["upper"] is None:
            return f"{t['value']:.4g} (no interval)"
        return f"{t['value']:.4g} [{t['lower']:.4g}, {t['upper']:.4g}]"

    head = f"{'unit':<28}{'seen':>8}  {'regime':<16}{'own period':<24}"
    lines = ["", head + f"{'amplitude':<24}{'noise':<24}"]
    for unit in report["units"]:
        lines.append(
            f"{unit['channel'][:27]:<28}{unit['observed_period']:>8.4g}  {unit['regime']:<16}"
            f"{show(unit['period']):<24}{show(unit['amplitude']):<24}{show(unit['noise']):<24}"
        )
    windows, forecast = report["windows"], report["forecast"]
    lines += [
        "",
        f"windows of {windows['lengths'][-1]} steps: gaps {windows['rms_gap']:.3g} rms, "
        f"{windows['largest_gap']:.3g} at most (in standard deviations of a channel)",
        "",
        "forecast error, each channel in its own standard deviation of the training part",
        "".join(
            f"{word:>12}"
            for word in (
                "steps ahead",
                "model",
                "average",
                "persistence",
                "autoregr.",
                "in 90% band",
            )
        ),
    ]
    steps = forecast["steps"]
    shown = sorted({round(x) for x in np.linspace(0, len(steps) - 1, min(len(steps), 10))})
    names = ("model", "time_average", "persistence", "autoregression", "coverage_90")
    for k in shown:
        numbers = "".join(f"{forecast[name][k]:>12.3f}" for name in names)
        lines.append(f"{steps[k]:>12}{numbers}")
    off, weak = report["fit"]["standard_errors_off"], report["fit"]["weak_directions"]
    if off is None or off > 0.5:
        far = "an unknown number of" if off is None else f"{off:.2g}"
        lines += ["", f"the fit stopped {far} standard errors from its optimum: read no interval"]
    lines += ["weak directions: " + words for words in weak[:3]]
    if len(weak) > 3:
        lines += [f"and {len(weak) - 3} more weak directions: see the report"]
    return "\n".join(lines)


def draw(path: Path, data: Data, windows: dict, forecast: dict) -> None:
    """Draw recording, fit, joints and forecast, in the user's units."""
    first = forecast["origin"] + 1
    ahead = data.grid.times[first : first + forecast["means"].shape[0]]
    known = data.grid.times[: data.training]

    def back(values, times):
        return recordings.unscale(values, times, data.scaling)

    mean, band = forecast["means"], forecast["band"]
    # The windows fitted what is left without the parabola; it is put back for the picture.
    bent = windows["read"] * (data.scaling.spread / data.trend.spread)
    fitted = recordings.unscale(bent, known, data.trend)
    plot_fit(
        path,
        data.grid,
        fitted=(known, fitted),
        joints=windows["joints"],
        forecast=(ahead, back(mean, ahead), back(mean - band, ahead), back(mean + band, ahead)),
    )


if __name__ == "__main__":
    main()
