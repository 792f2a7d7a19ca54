import jax
import jax.numpy as jnp

from oscillib.fitting import trace_nonfinite
from oscillib.integrate import cut, rk4
from oscillib.losses import continuity
from oscillib.parameters import Fixed, Positive


WINDOWS = cut(jnp.arange(22.0), 5)
PARAMS = {"rate": jnp.asarray(0.5), "gain": jnp.ones(2)}
# The second component counts up to 0 at sample 13, after step 3 of window 2, and on.
STARTS = jnp.stack([jnp.ones(5), jnp.arange(-13.0, 12.0, 5.0)], axis=1)


def root(params, h):
    """A square root in a user's field: finite at 0, its derivative not."""

    def advance(t, y):
        return y + h * params["rate"] * jnp.stack([-jnp.sqrt(jnp.abs(y[1])), 2.0])

    return advance


def count(params, h):
    return lambda t, y: y + h * jnp.stack([-params["rate"] * y[0], jnp.ones_like(y[1])])


def read(y, params):
    return params["gain"] * y


def joined(gaps):
    return continuity(gaps, weight=10.0)


def trace(step=count, readout=read, *, params=PARAMS, starts=STARTS, mask=None, **more):
    return trace_nonfinite(
        step, readout, params, starts, WINDOWS, jnp.zeros((22, 2)), mask=mask,
        **{"scale": jnp.ones(2), **more},
    )  # fmt: skip


def test_square_root_at_zero_in_a_field():
    found = trace(root, continuity=joined)
    assert found.terms == ("reconstruction", "continuity")
    assert (found.direction, found.place) == ("backward", "step")
    assert (found.window, found.step, found.sample, found.time) == (2, 3, 13, 13.0)
    assert found.index == (1,) and found.leaf is None
    # From there it goes back to the start, and to the rate through the steps before.
    assert found.leaves == ("params['rate']", "starts")
    assert str(found).startswith(
        "Backward: in window 2, after step 3 (sample 13, time 13), the derivative of the next "
        "step is not finite."
    )
    assert "it reaches `params['rate']`, `starts`" in str(found)


def test_the_step_s_own_derivative_by_a_parameter():
    # A parameter on the edge of what a square root takes.
    def edge(params, h):
        return lambda t, y: y + h * jnp.sqrt(params["rate"] - 0.5)

    found = trace(edge)
    assert (found.direction, found.place, found.window, found.step) == ("backward", "step", 0, 4)
    assert found.leaf == "params['rate']" and found.index is None
    assert found.leaves == ("params['rate']",)


def test_in_a_runge_kutta_step():
    field = lambda t, y, params: -params["rate"] * jnp.sqrt(y)
    found = trace(rk4(field), starts=jnp.full((5, 2), 100.0).at[1, 0].set(0.0))
    assert (found.direction, found.place, found.window) == ("backward", "step", 1)
    # At rest at 0 all steps are bad; reverse mode meets the last one first.
    assert (found.step, found.index) == (4, (0,))


def test_growth_backward_that_overflows():
    # Every step multiplies a derivative by 10^80 while the state stays at 0.
    steep = lambda params, h: lambda t, y: 1e80 * y * jnp.abs(y[0] - params["gain"][0]) ** 0
    found = trace(steep, starts=jnp.zeros((5, 2)), continuity=lambda gaps: jnp.sum(gaps + 1.0))
    assert (found.direction, found.place, found.terms) == ("backward", "step", ("continuity",))
    assert "growing backward, overflows" in str(found)
    assert found.window == 0 and found.step == 1


def test_readout():
    def norm(y, params):
        return jnp.stack([y[0], jnp.sqrt(y[1] ** 2)]) * params["gain"]

    found = trace(count, norm)
    assert (found.place, found.channel, found.sample) == ("readout", 1, 13)
    assert (found.window, found.step, found.index) == (2, 3, (1,))
    assert found.terms == ("reconstruction",) and found.leaves == ("starts",)
    hidden = trace(count, norm, mask=jnp.ones((22, 2), bool).at[13, 1].set(False))
    assert (hidden.place, hidden.channel, hidden.sample) == ("readout", 1, 13)
    assert "not observed there" in str(hidden)


def test_loss():
    found = trace(scale=jnp.array([1e-160, 1.0]), starts=1e-10 * STARTS)
    assert (found.direction, found.place, found.sample, found.channel) == ("backward", "loss", 0, 0)


def test_gap():
    found = trace(continuity=lambda gaps: jnp.sum(jnp.sqrt(jnp.abs(gaps))))
    # The count has no gap, since windows are consistent.
    assert (found.direction, found.place) == ("backward", "gap")
    assert (found.window, found.index, found.terms) == (0, (1,), ("continuity",))


def test_term_and_leaf():
    params = PARAMS | {"gain": jnp.array([1.0, 0.0])}
    terms = {"size": lambda p: p["rate"], "prior": lambda p: jnp.sum(jnp.sqrt(p["gain"]))}
    found = trace(params=params, terms=terms)
    assert (found.direction, found.place, found.terms) == ("backward", "term", ("prior",))
    assert found.leaf == "params['gain']" and found.leaves == ("params['gain']",)


def test_constraint():
    class Root(Positive):
        """A bijection whose slope is infinite at 1."""

        def to_free(self, value):
            return (value - 1) ** 2

        def to_value(self, free, template):
            return 1 + jnp.sqrt(free)

    constraints = {"rate": Fixed(), "gain": Root()}
    found = trace(constraints=constraints)
    assert (found.direction, found.place) == ("backward", "constraint")
    assert found.leaves == ("params['gain']",)


def test_state_that_nothing_observes():
    # Past the recording's end: the last window holds one step of its own and four of padding.
    def late(params, h):
        return lambda t, y: jnp.where(t > 22.5, jnp.exp(800 * params["rate"] * t), 1.0) * y

    found = trace(late, continuity=joined)
    assert (found.direction, found.place, found.window, found.step) == ("backward", "step", 4, 4)
    assert "padding beyond the recording's end" in str(found)


def test_debugging_of_nan_may_be_on():
    with jax.debug_nans(True):
        assert trace(root).sample == 13
