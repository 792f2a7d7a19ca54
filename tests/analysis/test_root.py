import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.analysis import RootStatus, describe_root
from oscillib.analysis._root import find_root


def root_of(residual, start, tolerance=1e-12, max_steps=60):
    x0 = jnp.atleast_1d(jnp.asarray(start))
    return find_root(residual, x0, jnp.full_like(x0, tolerance), max_steps)


def cubic(x):
    return x**3 - 8


FUNCTIONS = [cubic, lambda x: 3 * x - 6, lambda x: x**2 + 1, lambda x: jnp.exp(-x), jnp.log]

# name: (which function, start, how the search ends)
CASES = {
    "root": (0, 5.0, RootStatus.CONVERGED),
    "already there": (0, 2.0, RootStatus.CONVERGED),
    "flat start": (0, 1e-3, RootStatus.CONVERGED),
    "linear": (1, -1e6, RootStatus.CONVERGED),
    "no root": (2, 3.0, RootStatus.STALLED),
    "no slope": (0, 0.0, RootStatus.STALLED),
    "runs away": (3, 1.0, RootStatus.STEP_LIMIT),
    "not finite": (4, -1.0, RootStatus.NON_FINITE),
    "NaN start": (0, jnp.nan, RootStatus.NON_FINITE),
}


@pytest.fixture(scope="module")
def ends():
    """All cases as one batch, whose members must not disturb each other."""
    which, starts, _ = zip(*CASES.values(), strict=True)
    find = lambda k, start: root_of(lambda x: jax.lax.switch(k, FUNCTIONS, x), start)
    found = jax.jit(jax.vmap(find))(jnp.array(which), jnp.array(starts))
    return dict(zip(CASES, zip(found.x[:, 0], found.status, strict=True), strict=True))


@pytest.mark.parametrize("name", CASES)
def test_every_end_has_its_status(name, ends):
    x, status = ends[name]
    expected = CASES[name][2]
    assert int(status) == expected
    if expected == RootStatus.CONVERGED:
        np.testing.assert_allclose(x, 2.0, rtol=1e-14)


def test_steps_that_leave_the_domain_are_refused():
    # A Newton step for log from 20 lands at -40, where log is not finite.
    root = root_of(lambda x: jnp.log(x), 20.0)
    assert int(root.status) == RootStatus.CONVERGED
    np.testing.assert_allclose(root.x, 1.0, rtol=1e-14)


def test_unknowns_of_very_different_size():
    # Rosenbrock's gradient has its only root at (1, 1): Rosenbrock 1960.
    gradient = jax.grad(lambda x: 100 * (x[1] * 1e6 - x[0] ** 2) ** 2 + (1 - x[0]) ** 2)
    x0 = jnp.array([-1.2, 1e-6])
    root = find_root(gradient, x0, jnp.array([1e-10, 1e-16]), 200)
    assert int(root.status) == RootStatus.CONVERGED
    np.testing.assert_allclose(root.x, [1.0, 1e-6], rtol=1e-9)


def test_a_near_miss_is_no_root():
    # The remaining step |u^2 + 1e-12| / 2u, u = x - 2, is never below 1e-6.
    assert int(root_of(lambda x: (x - 2) ** 2 + 1e-12, 3.0).status) != RootStatus.CONVERGED


def test_derivatives_of_any_order_in_both_modes():
    # x = a^(1/3): derivatives in closed form.
    x = lambda a: root_of(lambda x: x**3 - a, 1.0).x[0]
    first = jax.grad(x)
    found = jax.jit(lambda a: (first(a), jax.jacfwd(x)(a), jax.hessian(x)(a), jax.grad(first)(a)))
    second = -2 / 9 * 8 ** (-5 / 3)
    np.testing.assert_allclose(found(8.0), [1 / 12, 1 / 12, second, second], rtol=1e-13)


def test_float32():
    root = root_of(cubic, jnp.float32(5.0), tolerance=6e-6)
    assert root.x.dtype == jnp.float32
    assert int(root.status) == RootStatus.CONVERGED
    np.testing.assert_allclose(root.x, 2.0, rtol=3e-7)


def test_words():
    words = describe_root(jnp.array([[0, 3], [4, 2]]))
    assert words[1][0].startswith("at rest") and words[0][1].startswith("stalled")
    with pytest.raises(ValueError, match=r"`status`.*got 9"):
        describe_root(9)
