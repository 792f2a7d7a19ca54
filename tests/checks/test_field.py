"""Fields that must not be refused, and faults that a first look misses."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.checks import check_field, check_gradients, check_output, check_purity, problems


KEY = jax.random.key(1)
Y = jnp.array([0.3, -0.6])
ONE = jnp.asarray(1.0)
PROBLEMS = {problem.name: problem for problem in problems()}

SOUND = {
    "plain numbers inside": (lambda t, y, p: jnp.where(y > 0, -p * y, 0.0), ONE, Y),
    "a switch and a Python float": (
        lambda t, y, p: jnp.where(p["on"], -p["k"] * y, 0.0),
        {"on": jnp.asarray(True), "k": 2.0},
        Y,
    ),
    "a short time constant": (lambda t, y, p: -y / p, jnp.asarray(1e-5), Y),
    "no parameters": (lambda t, y, p: -y, None, Y),
    "states that must be positive": (lambda t, y, p: -p * jnp.log(y), ONE, jnp.abs(Y)),
}


@pytest.mark.parametrize("name", SOUND)
def test_sound_field_is_not_refused(name):
    field, params, y0 = SOUND[name]
    check_field(field, params, y0, key=KEY, origin="positive" not in name).require()


@pytest.mark.parametrize("name", ["orbit", "predator and prey"])
def test_problem_with_a_peculiar_start_is_not_refused(name):
    # No origin; a parameter that moves nothing at the start.
    p = PROBLEMS[name]
    check_field(p.field, p.params, p.y0, key=KEY, origin=name != "orbit").require()


def test_gradients_need_64_bits_and_say_so():
    report = check_field(lambda t, y, p: -p * y, jnp.float32(1.0), Y.astype(jnp.float32), key=KEY)
    assert report.passed
    (left,) = [f for f in report.findings if f.outcome == "not checked"]
    assert left.prop == "gradients" and "64-bit" in left.message


def test_small_wrong_entry_beside_a_large_right_one_is_seen():
    @jax.custom_jvp
    def square(x):
        return x**2

    square.defjvp(lambda x, v: (x[0] ** 2, -2 * x[0] * v[0]))
    field = lambda t, y, p: jnp.stack([1e6 * p * y[0] ** 2, 1e-2 * square(p * y[1])])
    with pytest.raises(AssertionError, match=r"derivative along y: result\[1\]"):
        check_gradients(field, ONE, Y, key=KEY)


def test_derivative_lost_in_reverse_only_is_seen():
    # `where` after the root: forward mode is finite at the origin, reverse mode is not.
    size = lambda y: jnp.where(jnp.sum(y**2) > 0, jnp.sqrt(jnp.sum(y**2)), 0.0)
    with pytest.raises(AssertionError, match="derivative at the origin: by y"):
        check_gradients(lambda t, y, p: -p * y * size(y), ONE, Y, key=KEY)


def test_parameter_written_into_is_named():
    def field(t, y, p):
        p["k"] = p["k"] * 1.01
        return -p["k"] * y

    with pytest.raises(AssertionError, match=r"params: \['k'\].*\n.*writes into its argument"):
        check_purity(field, {"k": ONE}, Y)


def test_unused_must_name_parameters():
    field = lambda t, y, p: -p["k"] * y
    params = {"k": ONE, "spare": ONE}
    check_gradients(field, params, Y, key=KEY, unused=["params['spare']"])
    with pytest.raises(AssertionError, match=r"influence of params\['spare'\].*\n.*`unused`"):
        check_gradients(field, params, Y, key=KEY)
    with pytest.raises(ValueError, match=r"`unused` must name parameters, params\['k'\], .*spare"):
        check_gradients(field, params, Y, key=KEY, unused=["params.spare"])


def test_order_of_the_arguments_is_hinted_at():
    with pytest.raises(AssertionError, match=r"called with \(y, t, params\)"):
        check_output(lambda y, t, p: jnp.stack([y[1], -p * y[0]]), ONE, Y)
    with pytest.raises(AssertionError, match=r"called with \(t, params, y\)"):
        check_output(lambda t, p, y: p["k"] * y, {"k": ONE}, Y)


def test_constant_array_closed_over_is_no_fault():
    weight = np.array([1.0, 2.0])
    check_output(lambda t, y, p: -p * y * jnp.asarray(weight, y.dtype), ONE, Y)
