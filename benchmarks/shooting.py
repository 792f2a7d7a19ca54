"""Windowed shooting against general least-squares solvers: `python benchmarks/shooting.py`.

The work: FitzHugh-Nagumo as in Ramsay et al. 2007 (401 samples on [0, 20], reading noise 0.1), cut
into 20 windows of 20 samples, and longer recordings of 50 and 100; fitted from five random starts
(a, b in [0, 2], c in [0.5, 8]). Residuals are those of a fixed penalty on the gaps, so that one and
the same residual vector goes to the block solver and to optimistix (with its default linear solver,
QR, and with Cholesky on the normal equations); scipy fits one unbroken rollout, and the windows,
over `solve_ivp`. A fit counts if its parameters come within 1e-5 of the solution of that residual.

Then the cost of one step from 10 to 1,000 windows of 20 samples, with a regression, and the time
per fit of many starts side by side. Times are the best of several runs after compilation; compile
time (lowering included) and the compiler's working memory stand beside them. `--quick` leaves out
what takes longest.
"""

import argparse
import time

import jax
import jax.numpy as jnp
import lineax
import numpy as np
import optimistix
import scipy.integrate
import scipy.optimize

from oscillib.fitting import HardContinuity, Shooting, SoftContinuity
from oscillib.integrate import cut, rk4, roll_windows, rollout


jax.config.update("jax_enable_x64", True)

TRUTH, FIRST, INTERVAL, LENGTH = np.array([0.2, 0.2, 3.0]), np.array([-1.0, 1.0]), 0.05, 20
SCALE, WEIGHT = 0.1, 1e4


def field(t, y, params):
    a, b, c = params
    return jnp.stack([c * (y[0] - y[0] ** 3 / 3 + y[1]), -(y[0] - a + b * y[1]) / c])


STEP = rk4(field)


def make_work(count, seed=0):
    """Noisy samples of `count` windows, as the unbroken solution from one start."""
    steps = count * LENGTH
    states = rollout(STEP, jnp.asarray(TRUTH), jnp.asarray(FIRST), INTERVAL, steps)
    values = states + SCALE * jax.random.normal(jax.random.key(seed), states.shape)
    return cut(INTERVAL * jnp.arange(steps + 1.0), LENGTH), values


def random_params(count):
    draw = np.random.default_rng(0).uniform
    return np.stack([draw(0, 2, count), draw(0, 2, count), draw(0.5, 8, count)], axis=1)


def best_time(f, *args, repeats=5):
    def once():
        begin = time.perf_counter()
        jax.block_until_ready(f(*args))
        return time.perf_counter() - begin

    return min(once() for _ in range(repeats))


def compiled(f, *args):
    begin = time.perf_counter()
    program = jax.jit(f).lower(*args).compile()
    return program, time.perf_counter() - begin, program.memory_analysis().temp_size_in_bytes


def block_solver(windows, values, continuity):
    def fit(params):
        problem = Shooting(
            STEP, lambda y, p: y, params, values[:-1:LENGTH], windows, values,
            scale=jnp.full(2, SCALE), continuity=continuity,
        )  # fmt: skip
        result = problem.result(problem.run(problem.init()))
        return result.params, result.objective, result.steps

    return fit


def windowed_residual(windows, values):
    index, owned = windows.index, windows.owned[..., None]

    def residual(unknowns, _):
        params, starts = unknowns
        rolled = roll_windows(STEP, params, starts, windows)
        misfit = jnp.where(owned, (rolled.states - values[index]) / SCALE, 0)
        return misfit, np.sqrt(WEIGHT) * rolled.gaps

    return residual


def optimistix_solver(windows, values, linear_solver):
    residual = windowed_residual(windows, values)
    solver = optimistix.LevenbergMarquardt(rtol=1e-8, atol=1e-8, linear_solver=linear_solver)

    def fit(params):
        found = optimistix.least_squares(
            residual, solver, (params, values[:-1:LENGTH]), max_steps=256, throw=False,
            options={"jac": "fwd"},
        )  # fmt: skip
        loss = sum(jnp.sum(r**2) for r in residual(found.value, None)) / 2
        return found.value[0], loss, found.stats["num_steps"]

    return fit


def solve_ivp(params, first, times):
    a, b, c = params

    def f(t, y):
        v, r = y
        return [c * (v - v**3 / 3 + r), -(v - a + b * r) / c]

    # Tolerances at which the parameters are as exact as with the Runge-Kutta steps.
    found = scipy.integrate.solve_ivp(f, times[[0, -1]], first, t_eval=times, rtol=1e-6, atol=1e-8)
    full = np.full((len(times), 2), 1e6)  # what a blown-up solution leaves out
    full[: found.y.shape[1]] = found.y.T
    return full


def scipy_rollout(values):
    values, times = np.asarray(values), INTERVAL * np.arange(len(values))

    def residual(x):
        return ((solve_ivp(x[:3], x[3:], times) - values) / SCALE).ravel()

    return residual, lambda params: np.concatenate([params, values[0]])


def scipy_windows(windows, values):
    values = np.asarray(values)
    times = INTERVAL * np.arange(LENGTH + 1)

    def residual(x):
        starts = x[3:].reshape(-1, 2)
        states = np.stack([solve_ivp(x[:3], s, times) for s in starts])
        misfit = np.where(windows.owned[..., None], states - values[windows.index], 0) / SCALE
        gaps = np.sqrt(WEIGHT) * (states[:-1, -1] - starts[1:])
        return np.concatenate([misfit.ravel(), gaps.ravel()])

    return residual, lambda params: np.concatenate([params, values[:-1:LENGTH].ravel()])


def report(name, seconds, steps, errors, base, compile_time=None, memory=None):
    reached = sum(e < 1e-5 for e in errors)
    extra = 19 * " " if memory is None else f"{compile_time:9.1f} {memory / 1e6:9.2f}"
    print(
        f"{name:36s} {1e3 * seconds:10.2f} {steps:6.0f} {reached:3d}/{len(errors)} "
        f"{min(errors):9.1e} {extra} {seconds / (base or seconds):9.1f}x",
        flush=True,
    )


def time_program(name, program, starts, solution=None, base=None):
    """Fit from every start, report; return the median time and the solution from the truth."""
    run, compile_time, memory = compiled(program, jnp.asarray(starts[0]))
    solution = np.asarray(run(jnp.asarray(TRUTH))[0]) if solution is None else solution
    times, steps, errors = [], [], []
    for start in starts:
        params, _, taken = run(jnp.asarray(start))
        errors.append(np.abs(params - solution).max())
        steps.append(taken)
        times.append(best_time(run, jnp.asarray(start)))
    seconds = np.median(times)
    report(name, seconds, np.median(steps), errors, base, compile_time, memory)
    return seconds, solution


def time_scipy(name, case, starts, solution, base):
    residual, begin = case
    times, steps, errors = [], [], []
    for start in starts:
        began = time.perf_counter()
        found = scipy.optimize.least_squares(residual, begin(start), x_scale="jac")
        times.append(time.perf_counter() - began)
        errors.append(np.abs(found.x[:3] - solution).max())
        steps.append(found.nfev)
    report(name, np.median(times), np.median(steps), errors, base)


def compare(count, quick):
    windows, values = make_work(count)
    starts = random_params(5)
    soft = block_solver(windows, values, SoftContinuity(weight=WEIGHT, schedule=[1e-3, 1.0]))
    hard = block_solver(windows, values, HardContinuity())

    print(
        f"\none fit, {count} windows of 20 samples, {2 * count + 3} unknowns; median of five starts"
    )
    print(
        f"{'solver':36s} {'ms':>10s} {'steps':>6s} {'found':>5s} {'error':>9s} "
        f"{'compile s':>9s} {'memory MB':>9s} {'ratio':>10s}"
    )
    base, penalised = time_program("windowed shooting, same residual", soft, starts)
    unbroken = time_program("windowed shooting, hard continuity", hard, starts, base=base)[1]
    for name, linear in {
        "QR (default)": lineax.QR(),
        "Cholesky": lineax.Normal(lineax.Cholesky()),
    }.items():
        if quick and count > 20:
            continue
        general = optimistix_solver(windows, values, linear)
        time_program(f"optimistix LM, {name}", general, starts, penalised, base)
    if count == 20:
        case = scipy_rollout(values)
        time_scipy("scipy over solve_ivp, one rollout", case, starts, unbroken, base)
        if not quick:
            case = scipy_windows(windows, values)
            time_scipy("scipy over solve_ivp, windows", case, starts[:1], penalised, base)


def scaling(quick):
    counts = [10, 30, 100, 300] + ([] if quick else [1000])
    print("\ncost of one step by the number of windows, 20 samples each")
    print(f"{'windows':>8s} {'ms a step':>10s} {'steps':>6s} {'compile s':>10s} {'memory MB':>10s}")
    seconds = np.zeros(len(counts))
    for k, count in enumerate(counts):
        windows, values = make_work(count)
        start = jnp.asarray(TRUTH * 1.3)
        program, compile_time, memory = compiled(
            block_solver(windows, values, HardContinuity()), start
        )
        steps = int(program(start)[2])
        seconds[k] = best_time(program, start) / steps
        print(
            f"{count:8d} {1e3 * seconds[k]:10.3f} {steps:6d} {compile_time:10.1f} "
            f"{memory / 1e6:10.2f}",
            flush=True,
        )
    slope, intercept = np.polyfit(counts, seconds, 1)
    fitted = intercept + slope * np.asarray(counts)
    left = np.sum((seconds - fitted) ** 2) / np.sum((seconds - np.mean(seconds)) ** 2)
    power = np.polyfit(np.log(counts[-3:]), np.log(seconds[-3:]), 1)[0]
    print(
        f"regression: {1e3 * intercept:.3f} ms + {1e6 * slope:.2f} us a window, "
        f"R^2 = {1 - left:.4f}; power of the last three = {power:.2f}"
    )


def batch(quick):
    windows, values = make_work(20)
    print("\nmany starts side by side")
    print(f"{'fits':>8s} {'ms a fit':>10s} {'reached':>8s} {'compile s':>10s} {'memory MB':>10s}")
    for count in [1, 200] + ([] if quick else [1000]):
        starts = jnp.asarray(random_params(count))
        program, compile_time, memory = compiled(
            jax.vmap(block_solver(windows, values, HardContinuity())), starts
        )
        params, objective, _ = program(starts)
        reached = int((np.abs(params - params[np.nanargmin(objective)]).max(axis=1) < 1e-5).sum())
        print(
            f"{count:8d} {1e3 * best_time(program, starts, repeats=3) / count:10.2f} "
            f"{reached:8d} {compile_time:10.1f} {memory / 1e6:10.2f}",
            flush=True,
        )


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true")
    quick = parser.parse_args().quick
    for count in (20, 50, 100):
        compare(count, quick)
    scaling(quick)
    batch(quick)


if __name__ == "__main__":
    main()
