"""Fixed steps and adaptive solvers, same work, same accuracy: `python benchmarks/rollout.py`.

The work: 20 weakly coupled Hopf units at about one cycle per time unit, 100 time units, 1,000
samples. The error is the largest over all samples and entries, as a fraction of the largest
amplitude, against Dopri8 at a tolerance of 1e-12. Each fixed step is run first; then the tolerance
of every adaptive solver is sought at which its error is no larger than that, to within a factor of
1.5 or as near as its tolerance allows. Times are the best of several runs after compilation.
"""

import argparse
import time
from functools import partial

import diffrax
import jax
import jax.numpy as jnp
import numpy as np
import scipy.integrate

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import adaptive_rollout, rk4, rollout, strang, suzuki


jax.config.update("jax_enable_x64", True)

NODES, INTERVAL = 20, 0.1
NET = HopfNetwork()
UNIT, LINEAR = (NET.unit_flow, NET.coupling_flow), (NET.saturation_flow, NET.linear_flow)
FIXED = {
    "strang unit|coupling": strang(*UNIT),
    "strang saturation|linear": strang(*LINEAR),
    "suzuki unit|coupling": suzuki(*UNIT),
    "rk4, 2 substeps": rk4(NET, substeps=2),
    "rk4, 8 substeps": rk4(NET, substeps=8),
}
SOLVERS = {"diffrax Tsit5": diffrax.Tsit5(), "diffrax Dopri8": diffrax.Dopri8()}


def make_work():
    rng = np.random.default_rng(0)
    params = HopfParams(
        rng.uniform(-0.1, 0.2, NODES),
        2 * np.pi * rng.uniform(0.7, 1.3, NODES),
        coupling=0.1 * rng.random((NODES, NODES)) / NODES,
    )
    return params, jnp.asarray(0.5 * rng.normal(size=(2, NODES)))


def best_time(f, *args, repeats):
    def once():
        begin = time.perf_counter()
        jax.block_until_ready(f(*args))
        return time.perf_counter() - begin

    return min(once() for _ in range(repeats))


def compiled(f, *args):
    """Compile, and return the function, the seconds it took, and the megabytes it works in."""
    begin = time.perf_counter()
    out = jax.jit(f).lower(*args).compile()
    memory = out.memory_analysis()
    megabytes = (memory.temp_size_in_bytes + memory.output_size_in_bytes) / 1e6
    return out, time.perf_counter() - begin, megabytes


def adaptive(solver, times, params, y0, tolerance):
    out = adaptive_rollout(
        NET, params, y0, times, rtol=tolerance, atol=tolerance, solver=solver, max_steps=2**17
    )
    return out.states, out.num_steps


def scipy_rollout(params, y0, times, tolerance):
    """Run scipy's DOP853 on the same equation written in numpy."""
    a, w, c, b, k = (
        np.asarray(x)
        for x in (
            params.growth, params.frequency, params.shear, params.saturation,
            NET.coupling_matrix(params),
        )
    )  # fmt: skip

    def field(t, z):
        r2 = np.abs(z) ** 2
        return (a + 1j * w - (b + 1j * c) * r2) * z + k @ z

    start = np.asarray(y0[0]) + 1j * np.asarray(y0[1])
    out = scipy.integrate.solve_ivp(
        field, (times[0], times[-1]), start, "DOP853", times, rtol=tolerance, atol=tolerance
    )
    return np.stack([out.y.real.T, out.y.imag.T], axis=1), out.nfev


def match(error_of, target):
    """Return the loosest tolerance at which the error is below 1.5 times the target."""
    tolerance, low = 1e-2, 1e-13
    while error_of(tolerance) > 1.5 * target and tolerance > low:
        tolerance /= 2
    return tolerance


def print_row(name, error, work, compile_s, run_s, first_s):
    print(
        f"  {name:26} {error:9.1e} {work:>22} {compile_s:8.2f} s "
        f"{1e3 * run_s:9.2f} ms {run_s / first_s:7.1f} x"
    )


def compare(params, y0, times, repeats):
    """Print each fixed step beside the adaptive solvers at its accuracy."""
    reference = jax.jit(partial(adaptive, diffrax.Dopri8(), times))(params, y0, 1e-12)[0]
    reference = np.asarray(reference)
    amplitude = np.max(np.hypot(reference[:, 0], reference[:, 1]))
    error_of = lambda states: np.max(np.abs(np.asarray(states) - reference)) / amplitude
    ready = {n: compiled(partial(adaptive, s, times), params, y0, 1e-3) for n, s in SOLVERS.items()}
    host = partial(scipy_rollout, params, y0, np.asarray(times))

    for name, step in FIXED.items():
        run, compile_s, _ = compiled(
            lambda p, y, step=step: rollout(step, p, y, INTERVAL, len(times) - 1), params, y0
        )
        error = error_of(run(params, y0))
        first_s = best_time(run, params, y0, repeats=repeats)
        print(f"\n  {name:26}     error                   work    compile          run")
        print_row(name, error, "", compile_s, first_s, first_s)
        for solver, (solve, solver_s, _) in ready.items():
            tolerance = match(lambda tol, f=solve: error_of(f(params, y0, tol)[0]), error)
            states, count = solve(params, y0, tolerance)
            run_s = best_time(solve, params, y0, tolerance, repeats=repeats)
            print_row(solver, error_of(states), f"{int(count)} steps", solver_s, run_s, first_s)
        tolerance = match(lambda tol: error_of(host(tol)[0]), error)
        states, count = host(tolerance)
        run_s = best_time(host, tolerance, repeats=2)
        print_row("scipy DOP853", error_of(states), f"{count} calls", 0.0, run_s, first_s)


def gradients(params, y0, steps, repeats):
    """Print what reverse mode costs: time over that of the value, and memory by segment."""
    print(
        f"\n  gradient of {steps} steps     segment  compile       value    gradient  ratio memory"
    )
    for name in ("strang unit|coupling", "strang saturation|linear", "rk4, 2 substeps"):
        for segment in (None, round(steps**0.5), round(steps / 4)):

            def loss(p, y, step=FIXED[name], segment=segment):
                return jnp.sum(rollout(step, p, y, INTERVAL, steps, segment=segment)[-1] ** 2)

            value, _, _ = compiled(loss, params, y0)
            slope, compile_s, megabytes = compiled(jax.grad(loss), params, y0)
            value_s = best_time(value, params, y0, repeats=repeats)
            slope_s = best_time(slope, params, y0, repeats=repeats)
            print(
                f"  {name:26} {segment!s:>7} {compile_s:7.2f} s {1e3 * value_s:8.2f} ms "
                f"{1e3 * slope_s:8.2f} ms {slope_s / value_s:5.1f} {megabytes:7.2f} MB"
            )


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="a tenth of the time span, one repeat")
    quick = parser.parse_args().quick
    params, y0 = make_work()
    steps, repeats = (100, 1) if quick else (1000, 10)
    compare(params, y0, INTERVAL * jnp.arange(steps + 1.0), repeats)
    gradients(params, y0, steps, repeats)


if __name__ == "__main__":
    main()
