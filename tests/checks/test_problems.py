import jax
import jax.numpy as jnp
import numpy as np
import pytest
from scipy.integrate import solve_ivp

from oscillib.checks import problems
from oscillib.fields import HopfNetwork
from oscillib.integrate import adaptive_rollout, heun, rk4, rollout, strang


PROBLEMS = {problem.name: problem for problem in problems()}
NET = HopfNetwork()


def errors(problem, *steps, count=800):
    """Greatest error of each step at the end, after so many steps of one size."""
    h = (problem.times[-1] - problem.times[0]) / count

    @jax.jit
    def run(params, y, h):
        ends = [rollout(s, params, y, h, count, t0=problem.times[0])[-1] for s in steps]
        return [jnp.max(jnp.abs(end - problem.states[-1])) for end in ends]

    return run(problem.params, problem.y0, h)


@pytest.mark.long
@pytest.mark.parametrize("name", PROBLEMS)
def test_solution_has_the_digits_that_it_claims(name):
    p = PROBLEMS[name]
    field = jax.jit(p.field)
    out = solve_ivp(
        lambda t, y: np.ravel(field(t, np.reshape(y, p.y0.shape), p.params)),
        (p.times[0], p.times[-1]), np.ravel(p.y0), t_eval=np.asarray(p.times), method="DOP853",
        rtol=1e-11, atol=1e-13,
    )  # fmt: skip
    # What the integration itself leaves: an interpolated state is the worst.
    expected = p.states.reshape(len(p.times), -1)
    np.testing.assert_allclose(out.y.T, expected, rtol=0, atol=p.atol + 1e-9)


@pytest.mark.parametrize("name", PROBLEMS)
def test_shipped_steps_find_the_solution(name):
    # A step of too low an order would miss it.
    p = PROBLEMS[name]
    by_rk4, by_heun = errors(p, rk4(p.field), heun(p.field))
    assert by_rk4 < 1e-5
    assert by_rk4 < by_heun < 0.05


@pytest.mark.parametrize("name", ["orbit", "Bessel"])
def test_error_control_finds_the_solution(name):
    p = PROBLEMS[name]
    out = adaptive_rollout(p.field, p.params, p.y0, p.times, rtol=1e-10, atol=1e-12)
    assert out.success
    np.testing.assert_allclose(out.states, p.states, rtol=0, atol=1e-8)


@pytest.mark.parametrize("name", ["Hopf unit above onset", "Hopf unit at onset"])
def test_splitting_finds_the_solution(name):
    step = strang(NET.saturation_flow, NET.linear_flow)
    (error,) = errors(PROBLEMS[name], step)
    assert error < 1e-5


def test_data_are_complete():
    assert len(PROBLEMS) == len(problems()) >= 10
    for p in PROBLEMS.values():
        assert p.states.shape == (p.times.shape[0], *p.y0.shape)
        assert p.atol <= 1e-8
        assert p.source
        assert p.field(p.times[0], p.y0, p.params).shape == p.y0.shape


def test_values_keep_single_precision():
    with jax.enable_x64(False):
        assert {p.states.dtype for p in problems()} == {jnp.dtype("float32")}
