"""Every public function of the core under jit, vmap and grad, in both precisions, traced once."""

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib import fields, integrate, losses, observe, parameters
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import (
    adaptive_rollout,
    cut,
    gather,
    heun,
    join,
    rk4,
    roll_windows,
    rollout,
    segmented_scan,
    strang,
    suzuki,
)
from oscillib.losses import continuity, reconstruction
from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import (
    Fixed,
    Free,
    Interval,
    OffDiagonal,
    Positive,
    all_finite,
    constrain,
    unconstrain,
)


NET, ADDITIVE = HopfNetwork(), HopfNetwork(kind="additive")
CONSTRAINTS = {"a": Free(), "b": Positive(), "c": Interval(0.0, 2.0), "d": OffDiagonal()}
TREE = {"a": [-1.0, 1.0], "b": [0.5], "c": [0.5, 1.5], "d": [[0.0, 0.3], [0.2, 0.0]]}
TIMES = [0.0, 0.1, 0.3, 0.4, 0.7]
GAP = [[[0.1, 0.2], [0.3, -0.4]], [[-0.5, 0.6], [0.7, 0.8]]]
MASK = np.array([[True, False], [True, True]])
H, Y = 0.1, [[0.3, -0.2], [0.1, 0.4]]


def network():
    return HopfParams([0.2, -0.3], [3.0, 2.0], shear=[0.9, 0.4], coupling=[[0.0, 0.5], [0.2, 0.0]])


def sway(t, y, rate):
    """A field that compiles fast: the steps are under test here, not the oscillators."""
    return -rate * y + jnp.cos(t)


def decay(rate, h):
    return lambda y: y * jnp.exp(-rate * h)


def drift(rate, h):
    return lambda y: y + rate * h


def rolled(step):
    return lambda p, y, h: rollout(step, p, y, h, 3)


def in_windows(p, starts, times):
    out = roll_windows(rk4(sway), p, starts, cut(times, 2))
    return out.states, out.ends, out.gaps


def of_windows(starts, values):
    windows = cut(0.1 * jnp.arange(5.0, dtype=values.dtype), 2)
    out = roll_windows(rk4(sway), values[0, 0], starts, windows)
    return out.states, gather(values, windows), join(out.states, windows)


def added(start, xs):
    return segmented_scan(lambda c, x: (c + x, c * x), start, xs, segment=2)


def adaptive(rate, y, times):
    return adaptive_rollout(sway, rate, y, times, rtol=1e-4, atol=1e-4, max_steps=64).states


def with_fixed(tree):
    free = unconstrain(tree, CONSTRAINTS | {"a": Fixed()})
    return constrain(free, CONSTRAINTS | {"a": Fixed()}, tree)


# Noisy steps, which are random, and further fields and readouts have tests of their own.
CORE = {
    "fields._hopf",
    "integrate._adaptive",
    "integrate._rollout",
    "integrate._runge_kutta",
    "integrate._splitting",
    "integrate._windows",
    "losses._continuity",
    "losses._reconstruction",
    "observe._linear",
    "parameters._constraint",
    "parameters._tree",
}


# name: (public functions it covers, function of arrays, arrays)
CASES = {
    "unconstrain": (
        [unconstrain, Free, Positive, Interval, OffDiagonal],
        lambda tree: unconstrain(tree, CONSTRAINTS),
        [TREE],
    ),
    "constrain": ([constrain, Fixed], with_fixed, [TREE]),
    "all_finite": ([all_finite], lambda tree: all_finite(tree), [TREE]),
    "HopfParams": ([HopfParams], lambda a, k: HopfParams(a, a, coupling=k), [[0.2, 0.1], Y]),
    "field": ([HopfNetwork], lambda y, p: NET(0.0, y, p), [Y, network]),
    "additive field": ([HopfNetwork], lambda y, p: ADDITIVE(0.0, y, p), [Y, network]),
    "linear_matrix": ([HopfNetwork], NET.linear_matrix, [network]),
    "unit_flow": ([HopfNetwork], lambda y, p, h: NET.unit_flow(p, h)(y), [Y, network, H]),
    "saturation_flow": (
        [HopfNetwork],
        lambda y, p, h: NET.saturation_flow(p, h)(y),
        [Y, network, H],
    ),
    "linear_flow": ([HopfNetwork], lambda y, p, h: NET.linear_flow(p, h)(y), [Y, network, H]),
    "coupling_flow": ([HopfNetwork], lambda y, p, h: NET.coupling_flow(p, h)(y), [Y, network, H]),
    "heun": ([heun, rollout], rolled(heun(sway, substeps=2)), [0.5, Y, H]),
    "rk4": ([rk4, rollout], rolled(rk4(sway)), [0.5, Y, H]),
    "irregular": (
        [rollout],
        lambda p, y, h: rollout(rk4(sway), p, y, h, segment=2),
        [0.5, Y, [0.1, 0.3, 0.2]],
    ),
    "strang": ([strang], rolled(strang(decay, drift, substeps=2)), [0.5, Y, H]),
    "suzuki": ([suzuki], rolled(suzuki(decay, drift)), [0.5, Y, H]),
    "segmented_scan": ([segmented_scan], added, [0.5, [1.0, 2.0, 3.0]]),
    "adaptive_rollout": ([adaptive_rollout], adaptive, [0.5, [1.0, 2.0], [0.0, 0.1, 0.3]]),
    "windows of traced times": ([cut, roll_windows], in_windows, [0.5, [Y, Y], TIMES]),
    "windows": ([cut, roll_windows, gather, join], of_windows, [[Y, Y], [Y[0]] * 5]),
    "ReadoutParams": ([ReadoutParams], ReadoutParams, [[2.0, 3.0], [0.5, 0.1]]),
    "readout": (
        [linear_readout],
        lambda y, g, o: linear_readout(y, ReadoutParams(g, o)),
        [Y, [2.0, 3.0], [0.5, 0.1]],
    ),
    "readout by a map": (
        [linear_readout],
        lambda y, g: linear_readout(y, ReadoutParams(g)),
        [Y, [[2.0, 3.0]]],
    ),
    "reconstruction": (
        [reconstruction],
        lambda y, v, s: reconstruction(y, v, jnp.asarray(MASK), scale=s),
        [Y, GAP[0], [0.5, 2.0]],
    ),
    "continuity by weight": ([continuity], lambda g, w: continuity(g, weight=w), [GAP, 2.0]),
    "continuity by scale": ([continuity], lambda g, s: continuity(g, scale=s), [GAP, GAP[0]]),
    "continuity by precision": (
        [continuity],
        lambda g, p: continuity(g, precision=p),
        [GAP, np.diag([1.0, 2.0, 3.0, 4.0])],
    ),
}
# Slow to compile: `tests/integrate/test_adaptive.py` differentiates it.
GRADIENT_ELSEWHERE = {"adaptive_rollout"}


def arrays_of(arguments, dtype):
    filled = [a() if callable(a) else a for a in arguments]
    is_leaf = lambda x: isinstance(x, list | float | np.ndarray | jax.Array)
    convert = lambda x: jnp.asarray(x, dtype)
    return [jax.tree.map(convert, argument, is_leaf=is_leaf) for argument in filled]


def total(tree):
    leaves = [x for x in jax.tree.leaves(tree) if jnp.issubdtype(x.dtype, jnp.floating)]
    return sum((jnp.sum(x**2) for x in leaves), jnp.zeros(()).astype(leaves[0].dtype))


@pytest.mark.parametrize("name", CASES)
def test_transforms(name):
    _, function, arguments = CASES[name]
    traces = []

    @jax.jit
    def everything(batch, at):
        traces.append(at)
        out = function(*at)
        floating = any(jnp.issubdtype(x.dtype, jnp.floating) for x in jax.tree.leaves(out))
        smooth = floating and name not in GRADIENT_ELSEWHERE
        grad = jax.grad(lambda at: total(function(*at)))(at) if smooth else at
        return out, jax.vmap(function)(*batch), grad

    at = arrays_of(arguments, jnp.float64)
    other = jax.tree.map(lambda x: 1.25 * x, at)
    batch = jax.tree.map(lambda a, b: jnp.stack([a, b]), at, other)
    first, batched, grad = everything(batch, at)
    second, _, other_grad = everything(batch, other)
    # Another precision is another type, so it alone traces again.
    assert len(traces) == 1
    assert all_finite([grad, other_grad])
    for k, single in enumerate((first, second)):
        jax.tree.map(
            lambda b, s, k=k: np.testing.assert_allclose(b[k], s, rtol=1e-12, atol=1e-14),
            batched,
            single,
        )

    short = everything(*jax.tree.map(lambda x: x.astype(jnp.float32), (batch, at)))
    assert len(traces) == 2
    for precision, results in ((jnp.float64, (first, grad)), (jnp.float32, short)):
        for leaf in jax.tree.leaves(results):
            assert leaf.dtype in (precision, jnp.bool_)
    # Float32 through some ten operations.
    close = lambda a, b: np.testing.assert_allclose(a, b, rtol=2e-4, atol=2e-5)
    jax.tree.map(close, (short[0], short[2]), (first, grad))


@pytest.mark.parametrize("name", ["unit_flow", "rk4", "windows", "reconstruction", "unconstrain"])
def test_jit_changes_nothing(name):
    _, function, arguments = CASES[name]
    at = arrays_of(arguments, jnp.float64)
    close = lambda a, b: np.testing.assert_allclose(a, b, rtol=1e-13, atol=1e-15)
    jax.tree.map(close, jax.jit(function)(*at), function(*at))


def test_numbers_of_any_kind_do_not_retrace():
    traces = []

    @eqx.filter_jit
    def growth(params):
        traces.append(params)
        return params.growth

    for a in (0.1, 1, np.float64(0.3), jnp.asarray(0.4)):
        growth(HopfParams(jnp.stack([jnp.asarray(a, float)]), [a if isinstance(a, int) else 2.0]))
    assert len(traces) == 1


def test_battery_is_complete():
    covered = {f for functions, _, _ in CASES.values() for f in functions}
    # Types that are only made or returned by a covered function, and the base of constraints.
    made = {integrate.Windows, integrate.WindowRollout, integrate.AdaptiveRollout}
    made |= {parameters.Constraint}
    public = set()
    for room in (fields, integrate, losses, observe, parameters):
        for value in vars(room).values():
            if getattr(value, "__module__", "").removeprefix("oscillib.") in CORE:
                public.add(value)
    assert len(public) > 20
    missing = {f.__name__ for f in public - covered - made}
    assert not missing
