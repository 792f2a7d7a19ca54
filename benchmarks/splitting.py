"""Which splitting of a Hopf network is more accurate, where: `python benchmarks/splitting.py`.

The field is cut in two ways, and each pair of exact flows nests in two orders (outer|inner):

    saturation|linear   linear|saturation     growth, rotation and coupling of the whole network
    unit|coupling       coupling|unit         whole single units

Twenty nodes at about one cycle per time unit, 100 time units, random diffusive coupling. The error
is the largest over all samples and entries, as a fraction of the largest amplitude, against Dopri8
at a tolerance of 1e-11. `--quick` takes one step size and a fifth of the time.
"""

import argparse
import itertools
import time

import jax
import jax.numpy as jnp
import numpy as np


jax.config.update("jax_enable_x64", True)

NODES = 20
SAMPLE = 0.2
COUPLING = {"weak": 0.05, "medium": 0.5, "strong": 2.0}
SPREAD = {"narrow": 0.02, "wide": 0.3}
GROWTH = {"damped": (-1.0, -0.2), "critical": (-0.1, 0.1), "cycling": (0.5, 1.5)}
SHEAR = {"none": 0.0, "unit": 1.0}
PAIRS = {
    "saturation|linear": ("saturation_flow", "linear_flow"),
    "linear|saturation": ("linear_flow", "saturation_flow"),
    "unit|coupling": ("unit_flow", "coupling_flow"),
    "coupling|unit": ("coupling_flow", "unit_flow"),
}


def make_network(coupling, spread, growth, shear, seed=0):
    """Draw one network; the strength of the coupling is the mean of its row sums."""
    from oscillib.fields import HopfParams

    rng = np.random.default_rng(seed)
    matrix = rng.exponential(size=(NODES, NODES)) * (1 - np.eye(NODES))
    params = HopfParams(
        rng.uniform(growth[0], growth[1], NODES),
        2 * np.pi * np.abs(1 + spread * rng.normal(size=NODES)),
        shear=np.full(NODES, shear),
        coupling=matrix * coupling / matrix.sum(axis=1).mean(),
    )
    return params, jnp.asarray(0.5 * rng.normal(size=(2, NODES)))


def all_networks():
    """Return the names of all conditions, and the networks stacked."""
    names = list(itertools.product(COUPLING, SPREAD, GROWTH, SHEAR))
    drawn = [make_network(COUPLING[k], SPREAD[w], GROWTH[a], SHEAR[c]) for k, w, a, c in names]
    return names, *jax.tree.map(lambda *x: jnp.stack(x), *drawn)


def references(params, starts, times):
    import diffrax

    from oscillib.fields import HopfNetwork
    from oscillib.integrate import adaptive_rollout

    @jax.jit
    @jax.vmap
    def solve(p, y0):
        return adaptive_rollout(
            HopfNetwork(), p, y0, times,
            rtol=1e-11, atol=1e-11, solver=diffrax.Dopri8(), max_steps=10**6,
        )  # fmt: skip

    out = solve(params, starts)
    assert bool(jnp.all(out.success)), "the reference did not succeed"
    return np.asarray(out.states)


def rolled(pair, scheme, h, samples):
    """Return the compiled rollout of all networks at once, and how it is called."""
    from oscillib import integrate
    from oscillib.fields import HopfNetwork

    outer, inner = (getattr(HopfNetwork(), name) for name in PAIRS[pair])
    step = getattr(integrate, scheme)(outer, inner, substeps=round(SAMPLE / h))
    return lambda p, y0: integrate.rollout(step, p, y0, SAMPLE, samples)


def relative_error(states, reference):
    amplitude = np.max(np.hypot(reference[:, :, 0], reference[:, :, 1]), axis=(1, 2))
    return np.max(np.abs(states - reference), axis=(1, 2, 3)) / amplitude


def print_errors(names, errors):
    print("coupling spread growth    shear  " + " ".join(f"{p:>17}" for p in PAIRS) + "  best")
    for k, name in enumerate(names):
        row = [errors[p][k] for p in PAIRS]
        best = list(PAIRS)[int(np.argmin(row))]
        cells = " ".join(f"{e:17.1e}" for e in row)
        print("{:8} {:6} {:9} {:5}".format(*name) + f" {cells}  {best}")


def print_summary(names, errors):
    """Print for each condition the typical (geometric mean) error and how often each pair wins."""
    table = np.array([errors[p] for p in PAIRS])
    winner = np.argmin(table, axis=0)
    groups = [("all", lambda n: True)]
    for axis, values in enumerate((COUPLING, SPREAD, GROWTH, SHEAR)):
        label = ("coupling", "spread", "growth", "shear")[axis]
        groups += [(f"{label} {v}", lambda n, axis=axis, v=v: n[axis] == v) for v in values]
    print(f"{'typical error (wins)':24}" + " ".join(f"{p:>17}" for p in PAIRS))
    for label, member in groups:
        chosen = np.array([member(n) for n in names])
        cells = [
            f"{np.exp(np.mean(np.log(table[i, chosen]))):11.1e} ({np.sum(winner[chosen] == i):3d})"
            for i in range(len(PAIRS))
        ]
        print(f"{label:24}" + " ".join(cells))


def print_times(params, starts):
    """Time 1,000 steps of one network: compilation, value, and value with gradient."""
    p, y0 = jax.tree.map(lambda x: x[0], (params, starts))
    print(f"\n{'1,000 steps of 0.2':29} compile s   run ms   gradient ms")
    for scheme, pair in itertools.product(("strang", "suzuki"), PAIRS):
        roll = rolled(pair, scheme, SAMPLE, 1000)
        value = jax.jit(roll)
        slope = jax.jit(jax.grad(lambda p, y0, roll=roll: jnp.sum(roll(p, y0) ** 2)))
        begin = time.perf_counter()
        jax.block_until_ready(value(p, y0))
        compiled = time.perf_counter() - begin
        jax.block_until_ready(slope(p, y0))
        ms = [1e3 * best_time(f, p, y0) for f in (value, slope)]
        print(f"{scheme:10} {pair:18} {compiled:9.2f} {ms[0]:8.2f} {ms[1]:12.2f}")


def best_time(f, *args, repeats=7):
    def once():
        begin = time.perf_counter()
        jax.block_until_ready(f(*args))
        return time.perf_counter() - begin

    return min(once() for _ in range(repeats))


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="one step size, a fifth of the time")
    quick = parser.parse_args().quick
    samples = round((20 if quick else 100) / SAMPLE)
    names, params, starts = all_networks()
    reference = references(params, starts, SAMPLE * jnp.arange(samples + 1.0))
    for scheme, h in itertools.product(("strang", "suzuki"), (0.1,) if quick else (0.2, 0.1, 0.05)):
        errors = {}
        for pair in PAIRS:
            states = jax.jit(jax.vmap(rolled(pair, scheme, h, samples)))(params, starts)
            errors[pair] = relative_error(np.asarray(states), reference)
        print(f"\n{scheme}, step {h}")
        if h == 0.1:
            print_errors(names, errors)
        print_summary(names, errors)
    print_times(params, starts)


if __name__ == "__main__":
    main()
