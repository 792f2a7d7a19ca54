"""What is claimed of a field: right claims pass, wrong ones are named."""

import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.checks import (
    Symmetry,
    check_conserved,
    check_fixed_point,
    check_symmetry,
    problems,
    relabelling,
    time_shift,
)
from oscillib.fields import KuramotoParams, kuramoto


ONE, Y = jnp.asarray(1.0), jnp.array([0.3, -0.6])
PROBLEMS = {problem.name: problem for problem in problems()}


def pushed(t, y, p):
    return -p * y + jnp.sin(t)


def test_shift_in_time():
    check_symmetry(pushed, ONE, Y, time_shift(2 * np.pi))
    with pytest.raises(AssertionError, match="symmetry: time shift by 3"):
        check_symmetry(pushed, ONE, Y, time_shift(3.0))


def test_shift_of_all_phases():
    # Not linear: the derivative of the map, the identity, applies to dy.
    later = Symmetry("all phases later", lambda y: y + 0.4)
    params = KuramotoParams([1.0, 2.0], [[0.0, 0.5], [0.2, 0.0]], lag=0.3)
    y = jnp.array([[0.2, 1.3]])
    check_symmetry(kuramoto, params, y, later)
    with pytest.raises(AssertionError, match="symmetry: all phases later"):
        check_symmetry(lambda t, y, p: kuramoto(t, y, p) + jnp.sin(y), params, y, later)


def test_symmetry_that_is_not_linear():
    # f(y^3) = 3 y^2 f(y) holds for f = y log|y|; for f = -y it does not.
    cube = Symmetry("cube", lambda y: y**3)
    check_symmetry(lambda t, y, p: p * y * jnp.log(jnp.abs(y)), ONE, Y, cube)
    with pytest.raises(AssertionError, match="symmetry: cube"):
        check_symmetry(lambda t, y, p: -p * y, ONE, Y, cube)


def test_relabelling_must_be_a_permutation():
    with pytest.raises(ValueError, match=r"`order` must hold each of 0 ... 1 once; got \[0, 0\]"):
        relabelling([0, 0])


@pytest.mark.parametrize("rate", [1e-6, 1.0, 1e6])
def test_rest_is_judged_at_the_scale_of_the_field(rate):
    relax = lambda t, y, p: p["rate"] * (p["level"] * 0.7 / 0.1 - y)
    params = {"rate": jnp.asarray(rate), "level": jnp.asarray(0.1)}
    check_fixed_point(relax, params, jnp.full(2, 0.7))
    with pytest.raises(AssertionError, match="claimed fixed point"):
        check_fixed_point(relax, params, jnp.array([0.7, 0.70001]))


def test_invariants():
    # Lotka-Volterra and the rigid body: textbook invariants, from memory.
    hunt, body, spring = (PROBLEMS[n] for n in ("predator and prey", "rigid body", "spring"))
    level = lambda y, p: p["die"] * (y[0] - jnp.log(y[0])) + p["grow"] * (y[1] - jnp.log(y[1]))
    check_conserved(hunt.field, hunt.params, hunt.y0, level)
    check_conserved(body.field, body.params, body.y0, lambda y, p: y[0] ** 2 + y[1] ** 2)
    with pytest.raises(AssertionError, match="claimed conserved quantity: y"):
        check_conserved(body.field, body.params, body.y0, lambda y, p: y[0] ** 2 - y[1] ** 2)
    # At its start, (1, 0), this one does not change by chance.
    with pytest.raises(AssertionError, match="claimed conserved quantity: y"):
        check_conserved(spring.field, spring.params, spring.y0, lambda y, w: y[0] ** 2)
