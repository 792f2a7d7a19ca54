"""Planted faults in vector fields, each of which must be named; and the sound field that is not.

`pytest -s tests/checks/test_mutants_field.py` prints the kill table: mutant, property, message.
"""

import itertools
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.checks import (
    Symmetry,
    check_autonomy,
    check_batch,
    check_conserved,
    check_fixed_point,
    check_gradients,
    check_output,
    check_period,
    check_purity,
    check_symmetry,
    check_traces_once,
    relabelling,
    rotation,
)


KEY = jax.random.key(0)
Y = jnp.array([[0.3, 0.1, -0.6], [0.2, -0.4, 0.5]])
PARAMS: Any = {
    "growth": jnp.array([0.2, -0.1, 0.3]),
    "frequency": jnp.array([1.0, 1.3, 0.8]),
    "coupling": jnp.array([[0.0, 0.3, 0.0], [0.1, 0.0, 0.2], [0.4, 0.0, 0.0]]),
}
REST = jnp.zeros_like(Y)
CALLS = itertools.count()


def units(y, p, square=None):
    """Return growth, rotation and saturation of each unit."""
    square = jnp.sum(y**2, axis=0) if square is None else square
    grow = p["growth"][None] - square[None]
    return grow * y + p["frequency"][None] * jnp.stack([-y[1], y[0]])


def pull(y, k):
    """Return the drive of each node by the others: sum_j K_ij (y_j - y_i)."""
    return y @ k.T - y * jnp.sum(k, axis=1)[None]


def sound(t, y, p):
    return units(y, p) + pull(y, p["coupling"])


@jax.custom_jvp
def spoilt_cube(x):
    return x**3


@spoilt_cube.defjvp
def _(primals, tangents):
    (x,), (v,) = primals, tangents
    sign = jnp.ones_like(x).at[1, 2].set(-1.0)  # one entry of the Jacobian has the wrong sign
    return x**3, 3 * x**2 * v * sign


def with_params(**changes):
    return PARAMS | changes


# name: (the check that must catch it, field, what the message must say, arguments of the check)
CLAIMS: dict[str, Any] = {
    "output": lambda f: check_output(f, PARAMS, Y),
    "purity": lambda f: check_purity(f, PARAMS, Y),
    "batch": lambda f: check_batch(f, PARAMS, Y, key=KEY),
    "traces": lambda f: check_traces_once(f, PARAMS, Y),
    "gradients": lambda f: check_gradients(f, PARAMS, Y, key=KEY),
    "rest": lambda f: check_fixed_point(f, PARAMS, REST),
    "relabelling": lambda f: check_symmetry(f, PARAMS, Y, relabelling([1, 0, 2])),
    "rotation": lambda f: check_symmetry(f, PARAMS, Y, rotation(0.7)),
    "autonomy": lambda f: check_autonomy(f, PARAMS, Y),
}

MUTANTS: dict[str, tuple[str, Any, str]] = {
    "swapped t and y": ("output", lambda y, t, p: -y * p["growth"][None], "(y, t, params)"),
    "swapped y and params": (
        "output",
        lambda t, p, y: p["growth"][None] * y,
        "output of the field",
    ),
    "broadcast: one row for both": ("output", lambda t, y, p: sound(t, y, p)[:1], "(1, 3)"),
    "broadcast: a scalar": ("output", lambda t, y, p: jnp.sum(sound(t, y, p)), "shape ()"),
    "column added to rows": (
        "output",
        lambda t, y, p: sound(t, y, p)[:, None] + p["growth"][:, None],
        "(2, 3, 3)",
    ),
    "a tuple of rows": ("output", lambda t, y, p: tuple(sound(t, y, p)), "a tuple"),
    "float32 constant": (
        "output",
        lambda t, y, p: sound(t, y, p) - jnp.float32(0.1) * y,
        "float32",
    ),
    "float64 constant": ("output", lambda t, y, p: sound(t, y, p) * np.full(3, 2.0)[None], "64"),
    "result cut to float32": (
        "output",
        lambda t, y, p: sound(t, y, p).astype(jnp.float32).astype(y.dtype),
        "float32",
    ),
    "integer state": ("output", lambda t, y, p: jnp.zeros(y.shape, int), "int"),
    "Python branch on a value": (
        "purity",
        lambda t, y, p: sound(t, y, p) if y[0, 0] > 0 else -y,
        "TracerBoolConversionError",
    ),
    "numpy inside": ("purity", lambda t, y, p: jnp.asarray(np.sin(y)), "TracerArrayConversion"),
    "float() of a value": (
        "purity",
        lambda t, y, p: sound(t, y, p) * float(y[0, 1]),
        "ConcretizationTypeError",
    ),
    "hidden state": ("purity", lambda t, y, p: sound(t, y, p) + next(CALLS), "hidden state"),
    "hidden randomness": (
        "purity",
        lambda t, y, p: sound(t, y, p) + np.random.default_rng().normal(),
        "hidden randomness",
    ),
    "int() of a parameter": (
        "output",
        lambda t, y, p: sound(t, y, p) * int(p["growth"][0] * 10 + 1),
        "ConcretizationTypeError",
    ),
    "wrong sign in one entry of the Jacobian": (
        "gradients",
        lambda t, y, p: sound(t, y, p) - spoilt_cube(y),
        "derivative along y",
    ),
    "norm at the origin": (
        "gradients",
        lambda t, y, p: units(y, p, jnp.linalg.norm(y, axis=0)) + pull(y, p["coupling"]),
        "derivative at the origin",
    ),
    "square root at the origin": (
        "gradients",
        lambda t, y, p: sound(t, y, p) * jnp.sqrt(jnp.sum(y**2)),
        "derivative at the origin",
    ),
    "angle at the origin": (
        "gradients",
        lambda t, y, p: sound(t, y, p) + jnp.arctan2(y[1], y[0])[None] * y,
        "derivative at the origin",
    ),
    "masked too late": (
        "gradients",
        lambda t, y, p: jnp.where(y == 0, 0.0, sound(t, y, p) * y / jnp.abs(y)),
        "derivative at the origin",
    ),
    "growth cut off from the derivative": (
        "gradients",
        lambda t, y, p: sound(t, y, p | {"growth": jax.lax.stop_gradient(p["growth"])}),
        "params['growth']",
    ),
    "a parameter closed over": (
        "gradients",
        lambda t, y, p: sound(t, y, p | {"frequency": PARAMS["frequency"]}),
        "influence of params['frequency']",
    ),
    "coupling forgotten": ("gradients", lambda t, y, p: units(y, p), "params['coupling']"),
    "rounded": ("gradients", lambda t, y, p: jnp.round(sound(t, y, p), 3), "derivative"),
    "integer division": ("gradients", lambda t, y, p: sound(t, y, p) // 0.05, "0 everywhere"),
    "state of rest moved": ("rest", lambda t, y, p: sound(t, y, p) + 0.01, "claimed fixed point"),
    "coupling off by one": (
        "relabelling",
        lambda t, y, p: units(y, p) + pull(y, jnp.roll(p["coupling"], 1, axis=0)),
        "symmetry: relabelling",
    ),
    "neighbours by index": (
        "relabelling",
        lambda t, y, p: sound(t, y, p) + 0.1 * (jnp.roll(y, 1, axis=1) - y),
        "symmetry: relabelling",
    ),
    "first node singled out": (
        "relabelling",
        lambda t, y, p: sound(t, y, p).at[:, 0].multiply(1.1),
        "symmetry: relabelling",
    ),
    "saturation by one component": (
        "rotation",
        lambda t, y, p: units(y, p, y[0] ** 2) + pull(y, p["coupling"]),
        "symmetry: rotation",
    ),
    "one sign of the rotation": (
        "rotation",
        lambda t, y, p: sound(t, y, p) + jnp.stack([2 * y[1], jnp.zeros_like(y[1])]),
        "symmetry: rotation",
    ),
    "time where none should be": (
        "autonomy",
        lambda t, y, p: sound(t, y, p) * (1 + 1e-3 * jnp.sin(t)),
        "is `t` used?",
    ),
}


@pytest.fixture(scope="module")
def table():
    rows = []
    yield rows
    width = max(len(name) for name, *_ in rows)
    print("\n" + "\n".join(f"{a.ljust(width)}  {b:12s} {c}" for a, b, c in rows))


@pytest.mark.parametrize("name", MUTANTS)
def test_fault_is_named(name, table):
    claim, field, says = MUTANTS[name]
    with jax.numpy_dtype_promotion("standard"), jax.numpy_rank_promotion("allow"):
        with pytest.raises(AssertionError) as caught:
            CLAIMS[claim](field)
    assert says in str(caught.value)
    table.append((name, claim, str(caught.value).splitlines()[0]))


@pytest.mark.parametrize("claim", CLAIMS)
def test_sound_field_passes(claim):
    assert CLAIMS[claim](sound) is None  # a check raises, or returns nothing


def spring(t, y, w):
    return jnp.stack([w * y[1], -w * y[0]])


def transposed(t, y, p):
    return units(y, p) + pull(y, p["coupling"].T)


def test_wrong_claims_are_named():
    w, y = jnp.asarray(2.0), jnp.array([1.0, 0.5])
    check_conserved(spring, w, y, lambda y, w: jnp.sum(y**2))
    with pytest.raises(AssertionError, match="claimed conserved quantity"):
        check_conserved(spring, w, y, lambda y, w: y[0] ** 2 + 2 * y[1] ** 2)
    check_period(spring, w, y, np.pi)
    with pytest.raises(AssertionError, match="claimed period"):
        check_period(spring, w, y, 3.0)
    with pytest.raises(AssertionError, match="several turns"):
        check_period(spring, w, y, 2 * np.pi)
    # A transposed coupling keeps the symmetries; a symmetry of one's own tells the direction: a
    # node that drives nobody may be changed without a trace in the others.
    apart = Symmetry("node 1 drives nobody", lambda y: y.at[:, 1].multiply(2.0))
    lonely = with_params(coupling=PARAMS["coupling"].at[:, 1].set(0.0))
    others = lambda f: lambda t, y, p: f(t, y, p).at[:, 1].set(0.0)
    check_symmetry(others(sound), lonely, Y, apart)
    with pytest.raises(AssertionError, match="node 1 drives nobody"):
        check_symmetry(others(transposed), lonely, Y, apart)


class Static(eqx.Module):
    rate: jax.Array
    power: float = eqx.field(static=True)


def test_number_in_a_static_field_is_named():
    params = Static(jnp.asarray(1.0), 2.0)
    with pytest.raises(AssertionError, match=r"params\.power: expected an array"):
        check_traces_once(lambda t, y, p: p.rate * y**p.power, params, Y)
