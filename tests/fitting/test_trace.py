from typing import Any

import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.fitting import trace_nonfinite
from oscillib.integrate import cut
from oscillib.losses import continuity
from oscillib.parameters import Positive


# 22 samples, five windows of 5 steps, of which the last one ends after a single step.
WINDOWS = cut(jnp.arange(22.0), 5)
PARAMS = {"rate": jnp.asarray(0.5), "readout": (jnp.ones(2), jnp.zeros(2))}


def decay(params, h):
    """Two components `(component, node)`; the rate takes away a part of each at every step."""
    return lambda t, y: y - h * params["rate"] * y


def read(y, params):
    gain, offset = params["readout"]
    return gain * y[:, 0] + offset


def trace(step=decay, readout=read, params=PARAMS, *, starts=None, values=None, **more):
    given: dict[str, Any] = {"scale": jnp.ones(2), "continuity": joined, **more}
    starts = jnp.ones((5, 2, 1)) if starts is None else starts
    values = jnp.zeros((22, 2)) if values is None else values
    return trace_nonfinite(step, readout, params, starts, WINDOWS, values, **given)


def joined(gaps):
    return continuity(gaps, weight=10.0)


def test_nothing_is_wrong():
    found = trace()
    assert not found.found and found.place is None and found.leaves == ()
    assert str(found) == "The loss and its gradient are finite."
    # Nor with masked NaN and infinities.
    values = jnp.zeros((22, 2)).at[3, 1].set(jnp.nan).at[21, 0].set(jnp.inf)
    assert not trace(values=values, mask=jnp.isfinite(values)).found


def test_parameter():
    gain = jnp.array([1.0, jnp.nan])
    found = trace(params=PARAMS | {"readout": (gain, jnp.zeros(2))}, constraints=PARAMS)
    assert (found.direction, found.place) == ("forward", "parameter")
    assert (found.leaf, found.index) == ("params['readout'][0]", (1,))
    assert found.terms == ("reconstruction",)
    assert str(found) == (
        "Forward: `params['readout'][0]` is nan at index (1,). Terms that are not finite: "
        "reconstruction."
    )


def test_start():
    found = trace(starts=jnp.ones((5, 2, 1)).at[3, 1, 0].set(jnp.inf))
    assert (found.place, found.window, found.sample, found.index) == ("start", 3, 15, (1, 0))
    assert found.terms == ("reconstruction", "continuity")


@pytest.mark.parametrize("dtype", [jnp.float32, jnp.float64])
def test_blow_up_at_a_known_step_of_a_known_window(dtype):
    # Negative saturation, r' = r^3: 1 / r^2 falls by 2 per time unit, from 4 to 0 in 2 time units,
    # and from 100 in 50: closed form. Steps of 0.3 pass 2 with the seventh.
    def step(params, h):
        flow = HopfNetwork().unit_flow(params, h)
        return lambda t, y: flow(y)

    zero, one = jnp.zeros(2, dtype), jnp.ones(2, dtype)
    starts = jnp.asarray([[[0.1, 0.1], [0, 0]], [[0.1, 0.5], [0, 0]]], dtype)
    found = trace_nonfinite(
        step,
        lambda y, params: y[0],
        HopfParams(zero, one, saturation=-one),
        starts,
        cut(jnp.asarray(0.3 * np.arange(21), dtype), 10),
        jnp.zeros((21, 2), dtype),
        scale=one,
        mask=jnp.ones((21, 2), bool).at[:, 0].set(False),
    )
    assert (found.direction, found.place, found.window, found.step) == ("forward", "step", 1, 7)
    assert found.sample == 17 and found.time == pytest.approx(5.1) and found.index == (0, 1)
    assert "in window 1, after step 7 (sample 17, time 5.1), the state becomes" in str(found)


def test_readout():
    # The logarithm of a state that has become negative, in one channel.
    def falling(params, h):
        return lambda t, y: y - h

    def log(y, params):
        return jnp.stack([y[0, 0], jnp.log(y[1, 0])])

    starts = jnp.full((5, 2, 1), 6.0).at[2, 1, 0].set(2.5)
    found = trace(falling, log, starts=starts)
    assert (found.direction, found.place, found.channel) == ("forward", "readout", 1)
    assert (found.window, found.step, found.sample, found.time) == (2, 3, 13, 13.0)
    assert found.terms == ("reconstruction",)


def test_value():
    found = trace(values=jnp.zeros((22, 2)).at[15, 1].set(jnp.nan))
    # A sample that two windows share belongs to the later one.
    assert (found.place, found.window, found.step, found.channel) == ("value", 3, 0, 1)
    assert found.sample == 15 and "where `mask` is True" in str(found)


@pytest.mark.parametrize("scale", [0.0, -1.0])
def test_scale(scale):
    found = trace(scale=jnp.array([1.0, scale]))
    assert (found.place, found.channel, found.window) == ("scale", 1, None)


def test_residual_that_overflows():
    found = trace(values=jnp.zeros((22, 2)).at[8, 0].set(1e200))
    assert (found.place, found.sample, found.channel) == ("loss", 8, 0)


def test_gap():
    starts = jnp.ones((5, 2, 1)).at[2, 1, 0].set(1e200)
    mask = jnp.zeros((22, 2), bool)
    found = trace(starts=starts, mask=mask)
    assert (found.place, found.window, found.index) == ("gap", 1, (1, 0))
    assert found.terms == ("continuity",)
    found = trace(continuity=lambda gaps: continuity(gaps, weight=jnp.nan))
    assert (found.place, found.terms) == ("term", ("continuity",))
    assert "even without a gap" in str(found)


def test_term():
    terms = {"prior": lambda p: jnp.log(-p["rate"]), "other": lambda p: p["rate"]}
    found = trace(terms=terms)
    assert (found.direction, found.place, found.terms) == ("forward", "term", ("prior",))
    assert "the term `prior` is not finite" in str(found)


def test_irregular_times():
    times = jnp.arange(22.0).at[21].set(30.0)
    found = trace_nonfinite(
        lambda params, h: lambda t, y: jnp.where(h > 5, jnp.inf, y),
        read,
        PARAMS,
        jnp.ones((5, 2, 1)),
        cut(times, 5),
        jnp.zeros((22, 2)),
        scale=jnp.ones(2),
    )
    assert (found.window, found.step, found.sample, found.time) == (4, 1, 21, 30.0)


@pytest.mark.parametrize(
    "more, error, match",
    [
        ({"values": jnp.zeros((21, 2))}, ValueError, "`values` must have shape"),
        ({"mask": jnp.ones((22, 1), bool)}, ValueError, "`mask` must have shape"),
        ({"mask": jnp.ones((22, 2))}, TypeError, "`mask` must be boolean"),
        ({"scale": jnp.ones(3)}, ValueError, "`scale` must have shape"),
        ({"starts": jnp.ones((4, 2, 1))}, ValueError, "`starts` must have shape"),
        (
            {"terms": {"prior": lambda p: jnp.ones(2)}},
            ValueError,
            r"terms\['prior'\]\(params\)` must have",
        ),
        ({"terms": {"continuity": lambda p: p["rate"]}}, ValueError, "names of their own"),
        ({"constraints": {"rate": Positive()}}, ValueError, "structure of `params`"),
    ],
)
def test_errors_name_what_is_wrong(user_errors, more, error, match):
    with pytest.raises(error, match=match):
        trace(**more)
