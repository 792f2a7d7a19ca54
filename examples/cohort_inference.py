"""Did treatment damp the cells or uncouple them? A whole tray of slices: propose, refine, certify.

    python examples/cohort_inference.py --out DIR

An encoder is trained on simulated slices, in an explicit loop that a killed run takes up again. It
proposes parameters for each recording in one pass; a few steps of Fisher scoring on the filter's
likelihood refine them; what is left over, and here the known truth, certifies them. Only then are
treated and untreated slices compared: nothing before knows which is which.
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
import scipy.stats
import slice_model as model
from group_comparison import LEVEL, change, compare, group_mean, interval, words
from tqdm import tqdm

from oscillib import cohort, encoders, evaluate, fitting, losses, recordings
from oscillib.demo import Tray, tray
from oscillib.plots import plot_attention, plot_groups


REGIONS = 3
ROUND = 25  # training steps from checkpoint to checkpoint
BATCH, DRAWS = 8, 8  # recordings in a step, and simulated slices with the gaps of each
NORMAL_90 = 1.6448536
ASKED = ("coupling", "growth")
LAGS = 12  # samples over which residuals must be white
GROUPS = ("untreated", "treated")


class Slices(NamedTuple):
    """Recordings of one tray, slice by slice, each in its own units; `slice` comes first."""

    names: list[str]
    treated: np.ndarray  # (slice,); looked at by the comparison alone
    grids: list[recordings.Recording]
    scalings: list[recordings.Scaling]  # the way back to counts
    values: np.ndarray  # (slice, time, region), 0 where missing
    mask: np.ndarray
    times: np.ndarray  # (time,), hours
    truth: model.Slice  # every leaf with a leading axis


class Refined(NamedTuple):
    """What refinement found; `slice` comes first everywhere."""

    free: Any  # (slice, free)
    covariance: Any  # (slice, free, free), on the unconstrained scale
    status: Any
    steps: Any
    off: Any  # standard errors from the optimum
    residuals: Any  # (slice, time, region), whitened
    bias: Any  # (slice, free): mean error of refits of simulated recordings


def main(argv: list[str] | None = None) -> dict:
    args = parse(argv)
    jax.config.update("jax_enable_x64", True)
    args.out.mkdir(parents=True, exist_ok=True)
    data = prepare(args.slices, args.effect, args.seed)
    # The network works in 32 bits, refinement in 64.
    rough, prior = (model.beliefs(REGIONS, dtype) for dtype in (jnp.float32, jnp.float64))
    network, training = train(data, rough, args)
    proposals = propose(network, rough, data)
    starts = np.asarray(proposals.law.mean, float)
    key = jax.random.fold_in(jax.random.key(args.seed), 2)
    refined = refine(prior, data, starts, args.refits, key=key)
    report = {
        "input": {
            "slices": len(data.names),
            "samples": len(data.times),
            "interval": float(data.times[1]),
            "missing": int(np.sum(~data.mask)),
            "effect": args.effect,
            "seed": args.seed,
        },
        "training": training,
        "slices": describe_slices(data, prior, refined),
        "certificate": certify(data, prior, proposals, refined),
        "answer": answer(data, prior, refined, args.refits),
    }
    (args.out / "report.json").write_text(json.dumps(report, indent=2, allow_nan=False) + "\n")
    draw(args.out, data, proposals, report)
    print(table(report))
    print(f"\nWrote report.json, attention.png and cohort.png to {args.out}")
    return report


def parse(argv: list[str] | None) -> argparse.Namespace:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--out", type=Path, default=Path("out/cohort"), help="folder for results")
    parser.add_argument("--slices", type=int, default=24, help="every second one is treated")
    parser.add_argument("--effect", choices=("uncoupled", "damped"), default="uncoupled")
    parser.add_argument("--seed", type=int, default=0, help="of the tray and of the network")
    parser.add_argument("--rounds", type=int, default=40, help=f"of {ROUND} training steps")
    parser.add_argument("--refits", type=int, default=4, help="to find the bias, for every slice")
    args = parser.parse_args(argv)
    if args.slices < 4:
        parser.error(f"--slices must be at least 4, two in each group; got {args.slices}")
    for name in ("rounds", "refits"):
        if getattr(args, name) < 1:
            parser.error(f"--{name} must be at least 1; got {getattr(args, name)}")
    return args


# Data ---------------------------------------------------------------------------------------------


def prepare(slices: int, effect: Any, seed: int) -> Slices:
    """Cut the tray into slices, and take fading and scale off each."""
    made = tray(key=jax.random.key(seed), slices=slices, regions=REGIONS, effect=effect)
    whole = recordings.on_grid(made.recording)
    columns = [slice(REGIONS * i, REGIONS * (i + 1)) for i in range(slices)]
    grids = [
        recordings.recording(whole.times, whole.nan_values[:, own], channels=whole.channels[own])
        for own in columns
    ]
    scalings = [recordings.fit_scaling(grid, degree=model.TREND) for grid in grids]
    scaled = [recordings.scale(*both) for both in zip(grids, scalings, strict=True)]
    return Slices(
        names=[f"slice {i + 1}" for i in range(slices)],
        treated=np.array(made.treated[::REGIONS]),
        grids=grids,
        scalings=scalings,
        values=np.array([r.values for r in scaled]),
        mask=np.array([r.mask for r in scaled]),
        times=np.asarray(whole.times),
        truth=true_slices(made, np.array([s.spread for s in scalings])),
    )


def true_slices(made: Tray, spread: np.ndarray) -> model.Slice:
    """Return the truth behind every slice, in the units in which it is fitted."""
    field, rows = made.params.field, (-1, REGIONS)
    of_region = lambda x: np.asarray(x).reshape(rows)
    first = np.arange(0, field.growth.shape[0], REGIONS)
    truth = model.Slice(
        growth=of_region(field.growth)[:, 0],
        coupling=np.asarray(field.coupling)[first, first + 1],
        noise=of_region(made.params.noise)[:, 0],
        reading=of_region(made.reading_noise / made.readout.gain)[:, 0],
        frequency=of_region(field.frequency),
        level=np.ones_like(spread),
    )
    expected = jax.vmap(lambda p: p.gain)(jax.tree.map(jnp.asarray, truth))
    level = of_region(made.readout.gain) / spread / np.asarray(expected)
    return eqx.tree_at(lambda p: p.level, truth, level)


# Propose ------------------------------------------------------------------------------------------


def train(data: Slices, prior: encoders.Prior, args: Any) -> tuple[Any, dict]:
    """Train the encoder on simulated slices that have the gaps of the recorded ones.

    The loop goes on from the checkpoint in the folder of results, if there is one, and ends where
    an uninterrupted one would have, to the bit.
    """
    times = jnp.asarray(data.times, prior.law.mean.dtype)
    path, steps = args.out / "training.npz", ROUND * args.rounds
    size = min(BATCH, len(data.mask))

    def loss(network, both):  # of one recording: the mean over slices simulated in its place
        mask, key = both

        def one(key):
            pair = model.simulated(prior, times, mask, key)
            law = model.propose(network, prior, pair.values, pair.mask).law
            return losses.posterior_loss(law, pair.free)

        return jnp.mean(jax.vmap(one)(jax.random.split(key, DRAWS)))

    optimiser = optax.chain(
        optax.clip_by_global_norm(10.0), optax.adam(optax.cosine_decay_schedule(3e-3, steps))
    )
    mean = cohort.mean_over_recordings(loss, cohort.recording_mesh(), group=size)

    @jax.jit
    def update(network, memory, gradient):
        change, memory = optimiser.update(gradient, memory)
        return optax.apply_updates(network, change), memory

    @jax.jit
    def keys_of(key, step, indices):
        key = jax.random.fold_in(key, step)
        return jax.vmap(jax.random.fold_in, (None, 0))(key, indices)

    key, begin = jax.random.split(jax.random.fold_in(jax.random.key(args.seed), 1))
    network = model.encoder(prior, REGIONS, key=begin)
    network = jax.device_put(network, jax.local_devices()[0])
    memory, step, position, recent = optimiser.init(network), 0, cohort.Position(), jnp.zeros(ROUND)
    try:
        if path.exists():
            saved = cohort.load_checkpoint(path, (network, memory, recent), key=key)
            (network, memory, recent), step, key, position, _ = saved
        stream = cohort.batches(
            list(data.mask), size=size, seed=args.seed, last="pad", position=position
        )
    except ValueError as problem:
        raise SystemExit(f"{problem}\nAnother run left it: choose another --out.") from problem
    begun = step
    progress = tqdm(total=steps, initial=min(step, steps), desc="propose", unit="step")
    while step < steps:
        batch = next(stream)
        both = batch.recordings, keys_of(key, step, batch.indices)
        out = mean(network, both, batch.present)
        network, memory = update(network, memory, out.gradient)
        recent = recent.at[step % ROUND].set(out.value)
        step += 1
        progress.update()
        if step % ROUND == 0 or step == steps:
            progress.set_postfix(loss=f"{float(jnp.mean(recent)):.3f}")
            cohort.save_checkpoint(
                path, (network, memory, recent), step=step, key=key, position=batch.position
            )
    progress.close()
    return network, {"steps": step, "resumed_at": begun, "loss": number(jnp.mean(recent))}


def propose(network: Any, prior: encoders.Prior, data: Slices) -> encoders.Proposal:
    """Pass every recording through the network once."""
    one = lambda values, mask: model.propose(network, prior, values, mask)
    return jax.jit(jax.vmap(one))(jnp.asarray(data.values), jnp.asarray(data.mask))


# Refine -------------------------------------------------------------------------------------------


def refine(
    prior: encoders.Prior, data: Slices, starts: np.ndarray, refits: int, *, key: Any
) -> Refined:
    """Climb the posterior of each recording from its proposal by Fisher scoring.

    What pulls back looks stronger in a short recording than it is, and the prior draws towards its
    middle. So recordings are simulated with what was found, and fitted in turn: the mean error of
    these refits is the bias that the comparison of groups takes off.
    """
    precision, times = jnp.linalg.inv(prior.law.covariance), jnp.asarray(data.times)
    h = float(times[1] - times[0])

    @jax.jit
    def fit(start, values, mask):
        def loss(params):
            out = model.filtered(params, values, mask, h)
            return -out.log_likelihood - prior.law.log_prob(prior.free(params))

        def curvature(params):
            return precision + model.information(params, values, mask, h)

        found = fitting.refine(
            loss, prior.params(start), model.RULES,
            curvature=curvature, max_steps=30, tolerance=0.02,
        )  # fmt: skip
        return Refined(
            prior.free(found.params),
            jnp.linalg.inv(found.curvature),
            found.status,
            found.steps,
            jnp.sqrt(found.decrement),
            model.filtered(found.params, values, mask, h).residuals,
            jnp.full_like(start, jnp.nan),
        )

    @jax.jit
    def again(free, mask, key):
        return model.record(prior, prior.params(free), times, mask, key)

    def one(i):
        mask = jnp.asarray(data.mask[i])
        found = fit(jnp.asarray(starts[i]), jnp.asarray(data.values[i]), mask)
        errors = []
        for each in jax.random.split(jax.random.fold_in(key, i), refits):
            free, values = again(found.free, mask, each)
            refit = fit(free, values, mask)
            if converged(refit):
                errors.append(refit.free - free)
        bias = np.mean(errors, axis=0) if errors else found.bias
        return jax.device_get(found)._replace(bias=bias)

    found = [one(i) for i in tqdm(range(len(data.names)), desc="refine", unit="slice")]
    return Refined(*(np.array(parts) for parts in zip(*found, strict=True)))


def intervals(prior: encoders.Prior, refined: Refined) -> tuple[Any, Any, Any]:
    """Return value, lower and upper end of 90 percent intervals, as trees with a leading axis."""
    error = np.sqrt(np.diagonal(refined.covariance, axis1=1, axis2=2))
    back = jax.vmap(prior.params)
    ends = (refined.free + side * NORMAL_90 * error for side in (0, -1, 1))
    return tuple(jax.device_get(back(jnp.asarray(end))) for end in ends)  # pyright: ignore


# Certify ------------------------------------------------------------------------------------------


def whiteness(data: Slices, refined: Refined) -> np.ndarray:
    """Return a p-value a slice: small if the residuals of the filter hold a rhythm or a drift."""
    test = jax.vmap(lambda r, m: evaluate.portmanteau(r, m, lags=LAGS).statistic)
    # Channels are white on their own and do not know of each other: their statistics add up.
    statistic = np.sum(test(jnp.asarray(refined.residuals), jnp.asarray(data.mask)), axis=1)
    return scipy.stats.chi2.sf(statistic, LAGS * REGIONS)


def converged(refined: Refined) -> Any:
    return refined.status == int(fitting.Status.CONVERGED)


def certify(data: Slices, prior: encoders.Prior, proposals: Any, refined: Refined) -> dict:
    """Compare with the truth, which is known here, on the unconstrained scale."""
    truth = np.asarray(jax.vmap(prior.free)(jax.tree.map(jnp.asarray, data.truth)))
    laws = jax.device_get(proposals.law)
    spread = np.sqrt(np.sum(np.asarray(laws.factor, float) ** 2, axis=2))
    error = np.sqrt(np.diagonal(refined.covariance, axis1=1, axis2=2))
    names = fitting.parameter_names(prior.template, model.RULES)
    good = converged(refined)
    mean = lambda x: np.mean(x[good], axis=0) if good.any() else np.full(x.shape[1], np.nan)
    inside = lambda middle, width: mean(np.abs(middle - truth) < NORMAL_90 * width)
    each = lambda numbers: {n: number(x) for n, x in zip(names, numbers, strict=True)}
    covered = {"proposal": inside(laws.mean, spread), "refined": inside(refined.free, error)}
    off = {"proposal": laws.mean - truth, "refined": refined.free - truth}
    white = whiteness(data, refined)
    return {
        "not_converged": [n for n, ok in zip(data.names, good, strict=True) if not ok],
        "not_white": [n for n, p in zip(data.names, white, strict=True) if not p >= 0.01],
        "coverage_90": {k: {"all": number(np.mean(v)), **each(v)} for k, v in covered.items()},
        "rms_error": {k: each(np.sqrt(mean(v**2))) for k, v in off.items()},
        "mean_error": {k: each(mean(v)) for k, v in [*off.items(), ("refits", refined.bias)]},
    }


# Answer -------------------------------------------------------------------------------------------


def answer(data: Slices, prior: encoders.Prior, refined: Refined, refits: int) -> dict:
    """Say what treatment changed: differences of group means, with intervals."""
    names = fitting.parameter_names(prior.template, model.RULES)
    means, out = {}, {}
    for name in ASKED:
        i = names.index(name)
        value = refined.free[:, i] - refined.bias[:, i]
        variance = refined.covariance[:, i, i] * (1 + 1 / refits)
        usable = converged(refined) & np.isfinite(value)
        for group, here in zip(GROUPS, (~data.treated, data.treated), strict=True):
            means[name, group] = group_mean(value[usable & here], variance[usable & here])
    changes = {name: compare(means[name, "treated"], means[name, "untreated"]) for name in ASKED}
    for name in ASKED:
        groups = {group: means[name, group] for group in GROUPS}
        out[name] = {
            "change": change(changes[name]),
            "difference": triple(*changes[name]),
            **{
                group: {**triple(*interval(m)), "slices": m.count, "spread": number(m.spread)}
                for group, m in groups.items()
            },
        }
    text = words(changes["coupling"], changes["growth"], interval(means["growth", "treated"]))
    return {"level": LEVEL, **out, "words": text}


# Report -------------------------------------------------------------------------------------------


def number(x: Any) -> float | None:
    """Return a plain number for JSON, which knows no infinity and no NaN: those become null."""
    x = float(x)
    return x if np.isfinite(x) else None


def triple(value: Any, lower: Any, upper: Any) -> dict:
    return {"value": number(value), "lower": number(lower), "upper": number(upper)}


def describe_slices(data: Slices, prior: encoders.Prior, refined: Refined) -> list[dict]:
    """List every slice: how its fit ended, and each number with its 90 percent interval."""
    fitted, white = intervals(prior, refined), whiteness(data, refined)
    group = np.where(data.treated, "treated", "untreated")

    def entry(i):
        value, low, high = (jax.tree.map(lambda x: x[i], tree) for tree in fitted)
        one = lambda get: triple(get(value), get(low), get(high))
        turn = lambda p: 2 * np.pi / p.frequency
        periods = [triple(*e) for e in zip(turn(value), turn(high), turn(low), strict=True)]
        return {
            "slice": data.names[i],
            "group": str(group[i]),
            "status": fitting.describe(refined.status[i]),
            "steps": int(refined.steps[i]),
            "standard_errors_off": number(refined.off[i]),
            "white": number(white[i]),
            **{k: one(lambda p, k=k: getattr(p, k)) for k in ("growth", "coupling", "noise")},
            "reading_noise": one(lambda p: p.reading),
            "period": periods,
            "gain": (value.gain * np.asarray(data.scalings[i].spread)).tolist(),
        }

    return [entry(i) for i in range(len(data.names))]


def table(report: dict) -> str:
    show = lambda t: f"{t['value']:+.3f} [{t['lower']:+.3f}, {t['upper']:+.3f}]"
    sure, count = report["certificate"], len(report["slices"])
    lines = ["", f"{'slice':<11}{'group':<12}{'growth per hour':<26}{'coupling per hour':<26}fit"]
    for s in report["slices"]:
        numbers = "".join(
            f"{'unknown' if None in s[k].values() else show(s[k]):<26}"
            for k in ("growth", "coupling")
        )
        marks = [s["status"].split(":")[0]]
        marks += ["residuals not white"] * (s["slice"] in sure["not_white"])
        lines.append(f"{s['slice']:<11}{s['group']:<12}{numbers}{', '.join(marks)}")
    lines += [
        "",
        f"of {count} slices {len(sure['not_converged'])} did not converge, and "
        f"{len(sure['not_white'])} left residuals that are not white",
    ]
    if len(sure["not_converged"]) < count:
        inside, off = sure["coverage_90"], sure["rms_error"]
        lines += [
            f"truth inside the 90 % intervals: {inside['proposal']['all']:.0%} as proposed, "
            f"{inside['refined']['all']:.0%} refined",
            *(
                f"rms error of {k}: {off['proposal'][k]:.4f} as proposed, "
                f"{off['refined'][k]:.4f} refined, per hour"
                for k in ASKED
            ),
        ]
    return "\n".join([*lines, "", report["answer"]["words"]])


def draw(out: Path, data: Slices, proposals: encoders.Proposal, report: dict) -> None:
    """Draw where the network looked in two slices of each group, and all slices by group."""
    chosen = [*np.flatnonzero(~data.treated)[:2], *np.flatnonzero(data.treated)[:2]]
    rows = proposals.weights.shape[2]
    middles = data.times[0] + (np.arange(rows) + 0.5) * model.STACK * data.times[1]
    plot_attention(
        out / "attention.png",
        [data.grids[i] for i in chosen],
        [np.asarray(proposals.weights[i]) for i in chosen],
        times=[middles] * len(chosen),
        titles=[f"{data.names[i]}, {GROUPS[int(data.treated[i])]}" for i in chosen],
    )
    ends = lambda t: [np.nan if t[k] is None else t[k] for k in ("value", "lower", "upper")]
    plot_groups(
        out / "cohort.png",
        {f"{k}, per hour": np.array([ends(s[k]) for s in report["slices"]]) for k in ASKED},
        groups=[s["group"] for s in report["slices"]],
        means={f"{k}, per hour": {g: ends(report["answer"][k][g]) for g in GROUPS} for k in ASKED},
    )


if __name__ == "__main__":
    main()
