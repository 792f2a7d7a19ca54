from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
import optax
import pytest

from oscillib.fitting import guarded


PARAMS = {"a": jnp.array([1.0, -2.0]), "none": None, "b": {"c": jnp.asarray(0.3)}}
NAN = {"a": jnp.array([1.0, jnp.nan]), "none": None, "b": {"c": jnp.asarray(1.0)}}


@pytest.fixture(autouse=True)
def standard():
    """Adam itself mixes dtypes, which strict promotion refuses."""
    with jax.numpy_dtype_promotion("standard"):
        yield


class Walk(NamedTuple):
    """What a loop did, step by step."""

    params: Any
    updates: Any
    state: Any


def walk(optimiser, params, gradients, values=None):
    """Feed given gradients (and values) to an optimiser, in one compiled scan."""
    values = jnp.zeros(len(jax.tree.leaves(gradients)[0])) if values is None else values
    return scan(optimiser, params, gradients, values)


@partial(jax.jit, static_argnums=0)
def scan(optimiser, params, gradients, values):
    def body(carry: Any, x):
        params, state = carry
        gradient, value = x
        updates, state = optimiser.update(gradient, state, params, value=value)
        params = optax.apply_updates(params, updates)
        return (params, state), Walk(params, updates, state)

    return jax.lax.scan(body, (params, optimiser.init(params)), (gradients, values))[1]


def finite(tree):
    return all(np.isfinite(leaf).all() for leaf in jax.tree.leaves(tree))


def same(a, b):
    jax.tree.map(np.testing.assert_array_equal, a, b)


def close(a, b):
    """Compare what two programs computed: each may round in its own way."""
    each = lambda x, y: np.testing.assert_allclose(x, y, rtol=20 * float(jnp.finfo(x.dtype).eps))
    jax.tree.map(each, a, b)


def stack(*trees):
    return jax.tree.map(lambda *x: jnp.stack(x), *trees)


def at(tree, k):
    return jax.tree.map(lambda x: x[k], tree)


def slopes(n, dtype=jnp.float64):
    """`n` gradients in the structure of `PARAMS`."""
    rng = np.random.default_rng(1)
    return jax.tree.map(lambda p: jnp.asarray(rng.normal(size=(n, *p.shape)), dtype), PARAMS)


def adam():
    return optax.chain(optax.clip_by_global_norm(1.0), optax.adam(0.1))


TWO: Any = 2.0  # not an int
ONE = guarded(optax.sgd(1.0), patience=1)
GUARDED = guarded(adam(), patience=3, backtrack=1.0)
# As it is, but for the extra argument that `walk` hands over.
PLAIN = optax.with_extra_args_support(adam())


def test_good_steps_are_left_alone_bit_for_bit():
    dtype = jnp.float32
    params = jax.tree.map(lambda p: p.astype(dtype), PARAMS)
    # One operation at a time, so that the compiler has no say in the rounding.
    inner = optax.chain(optax.clip_by_global_norm(1.0), optax.sgd(0.1, momentum=0.9))
    optimisers: Any = (guarded(inner), inner)
    state, memory = (optimiser.init(params) for optimiser in optimisers)
    for k in range(2):
        gradient = at(slopes(2, dtype), k)
        updates, state = optimisers[0].update(gradient, state, params)
        expected, memory = optimisers[1].update(gradient, memory, params)
        same(updates, expected)
        same(state.inner, memory)
        params = optax.apply_updates(params, updates)
        assert jax.tree.leaves(params)[0].dtype == dtype
    assert state.bad_steps == state.rollbacks == 0


def test_two_guarded_steps_of_adam_have_the_published_values():
    # Rate 0.1, decays 0.9 and 0.999, 1e-8: Kingma & Ba 2015 (from memory).
    optimiser = guarded(optax.adam(0.1))
    expected = [-0.0999999966667, 0.09999999975], [-0.0144520524047, 0.0469468169597]
    params = jnp.zeros(2)
    step, state = jax.jit(optimiser.update), optimiser.init(params)
    for gradient, update in zip(([0.3, -4.0], [-0.2, 1.0]), expected, strict=True):
        got, state = step(jnp.array(gradient), state, params)
        np.testing.assert_allclose(got, update, rtol=0, atol=1e-12)


def test_bad_steps_are_skipped_and_counted():
    gradients = slopes(9)
    kinds = jnp.array([jnp.nan, jnp.inf, -jnp.inf])
    bad = gradients | {"a": gradients["a"].at[jnp.array([2, 3, 6]), 1].set(kinds)}
    out = walk(GUARDED, PARAMS, bad)
    np.testing.assert_array_equal(out.state.bad_steps, [0, 0, 1, 2, 2, 2, 3, 3, 3])
    np.testing.assert_array_equal(out.state.consecutive, [0, 0, 1, 2, 0, 0, 1, 0, 0])
    for k in (2, 3, 6):
        assert not any(u.any() for u in jax.tree.leaves(at(out.updates, k)))
        same(at(out.state.inner, k), at(out.state.inner, k - 1))
        same(at(out.params, k), at(out.params, k - 1))
    # As if the bad gradients had never come.
    kept = np.array([0, 1, 4, 5, 7, 8])
    without = walk(PLAIN, PARAMS, at(gradients, kept))
    close(at(out.params, kept), without.params)


def test_a_bad_value_alone_is_a_bad_step():
    out = walk(GUARDED, PARAMS, slopes(9), jnp.zeros(9).at[1:3].set([jnp.nan, jnp.inf]))
    np.testing.assert_array_equal(out.state.bad_steps, [0, 1, 2, 2, 2, 2, 2, 2, 2])
    # Without a value only the gradient is looked at.
    optimiser = guarded(optax.sgd(0.1))
    for value, expected in ((None, 0), (jnp.inf, 1)):
        state = optimiser.init(PARAMS)
        _, state = optimiser.update(at(slopes(1), 0), state, PARAMS, value=value)
        assert state.bad_steps == expected


def test_roll_back_to_the_last_good_parameters_and_memory():
    gradients = slopes(9)
    bad = gradients | {"a": gradients["a"].at[3:8].set(jnp.nan)}
    out = walk(GUARDED, PARAMS, bad)
    np.testing.assert_array_equal(out.state.rollbacks, [0, 0, 0, 0, 0, 1, 1, 1, 1])
    # Step 2 saw finite numbers at the parameters that step 1 made, with the memory of step 1.
    same(at(out.params, 5), at(out.params, 1))
    same(at(out.state.inner, 5), at(out.state.inner, 1))
    same(at(out.params, 7), at(out.params, 1))
    # And from there on as if step 2 had never been.
    without = walk(PLAIN, PARAMS, at(gradients, np.array([0, 1, 8, 0, 0, 0])))
    close(at(out.params, 8), at(without.params, 2))


@pytest.mark.parametrize(
    "good, bad, dtype",
    [
        (1.2345, 1e20, jnp.float64),
        (1.2345, -3e38, jnp.float32),
        (-3e38, 3e38, jnp.float32),
        (1e-300, 1e300, jnp.float64),
        (0.0, 5.0, jnp.float32),
    ],
)
def test_rollback_arrives_bit_for_bit(good, bad, dtype):
    # The first update falls short by rounding; those that follow close the rest.
    optimiser = ONE
    good, bad = jnp.asarray(good, dtype), jnp.asarray(bad, dtype)
    _, state = update(optimiser, jnp.zeros((), dtype), optimiser.init(good), good)
    run = lambda s, p: update(optimiser, jnp.asarray(jnp.nan, dtype), s, p)
    params, updates = bad, 0
    while params != good:
        change, state = run(state, params)
        assert jnp.isfinite(change)
        params = jnp.asarray(optax.apply_updates(params, change))
        updates += 1
    print(f"{dtype.__name__}: from {bad} to {good} in {updates} updates")
    assert updates <= 8 and state.bad_steps == 1 and state.rollbacks == 1
    # The next one is an ordinary step again.
    change, state = run(state, params)
    assert change == 0 and state.bad_steps == 2


@partial(jax.jit, static_argnums=0)
def update(optimiser, *given):
    return optimiser.update(*given)


def test_never_lets_one_through_and_never_gives_up():
    bad = jax.tree.map(lambda p: jnp.broadcast_to(p, (300, *p.shape)), NAN)
    gradients = jax.tree.map(lambda a, b: jnp.concatenate([a, b, a]), slopes(2), bad)
    out = walk(guarded(adam(), patience=2), PARAMS, gradients)
    assert finite(out.params) and finite(out.updates)
    assert out.state.bad_steps[-1] == 300
    assert out.state.factor[-1] >= 0.5
    assert not np.array_equal(out.params["a"][-1], out.params["a"][-2])


def test_by_comparison_clipping_spreads_one_nan_and_skipping_alone_gives_up():
    # common practice, no source: a global norm with one NaN entry is NaN, and so is all it divides
    clip: Any = optax.clip_by_global_norm(1.0)
    clipped = clip.update(NAN, clip.init(PARAMS))[0]
    assert all(np.isnan(leaf).all() for leaf in jax.tree.leaves(clipped))
    gradients = stack(NAN, NAN, NAN, NAN)
    skipping = walk(optax.apply_if_finite(adam(), 2), PARAMS, gradients)
    assert finite(at(skipping.params, 1))
    assert all(np.isnan(leaf).all() for leaf in jax.tree.leaves(at(skipping.params, 2)))
    ours = walk(guarded(adam(), patience=2), PARAMS, gradients)
    assert finite(ours.params)
    same(at(ours.params, 3), PARAMS)


@pytest.mark.parametrize("where", ["update", "memory", "parameters"])
def test_finite_gradients_can_still_do_harm(where):
    dtype = jnp.float32
    params = jnp.asarray(3e38 if where == "parameters" else 1.0, dtype)
    optimiser, gradient = {
        "update": (optax.sgd(1e10), 1e30),
        "memory": (optax.adam(0.1), 1e30),  # its square overflows: all later updates are zero
        "parameters": (optax.sgd(1.0), -1e38),
    }[where]
    guard = guarded(optimiser)
    change, state = guard.update(jnp.asarray(gradient, dtype), guard.init(params), params)
    assert change == 0 and state.bad_steps == 1 and finite(state.inner)


def test_a_best_loss_that_begins_infinite_is_no_harm():
    plateau: Any = optax.chain(optax.sgd(0.1), optax.contrib.reduce_on_plateau())
    out = walk(guarded(plateau), PARAMS, slopes(3), jnp.array([3.0, jnp.nan, 2.0]))
    np.testing.assert_array_equal(out.state.bad_steps, [0, 1, 1])


def descend(optimiser, start, steps):
    """Minimise `3 x - log(x) / 4`: NaN below 0, least at 1 / 12."""

    def body(carry: Any, _):
        params, state = carry
        value, slope = jax.value_and_grad(lambda x: 3 * x - jnp.log(x) / 4)(params)
        updates, state = optimiser.update(slope, state, params, value=value)
        return (optax.apply_updates(params, updates), state), value

    return jax.lax.scan(body, (start, optimiser.init(start)), length=steps)


def test_shorter_steps_lead_past_a_bad_place():
    run = jax.jit(lambda x: descend(guarded(optax.sgd(0.01)), x, 200))
    (x, state), _ = run(jnp.asarray(1.0))
    assert state.bad_steps == 0 and abs(x - 1 / 12) < 1e-6
    run = jax.jit(lambda x: descend(guarded(optax.adam(1.1), patience=1), x, 400))
    (x, state), values = run(jnp.asarray(1.0))
    print(f"x = {x}, {state.bad_steps} bad steps, {state.rollbacks} rollbacks")
    assert state.bad_steps > 0 and jnp.nanmin(values) < 3 / 12 + jnp.log(12.0) / 4 + 1e-3
    # Without a shorter step it would come to the same bad place again and again.
    run = jax.jit(lambda x: descend(guarded(optax.adam(1.1), backtrack=1.0), x, 400))
    (_, state), values = run(jnp.asarray(1.0))
    assert jnp.nanmin(values) == 3.0


def test_lanes_of_a_batch_are_guarded_each_by_itself():
    starts = jnp.array([1.0, 0.5, 0.1])
    optimiser = guarded(optax.sgd(0.3), patience=2)
    together: Any = jax.jit(jax.vmap(lambda x: descend(optimiser, x, 30)))(starts)
    alone = jax.jit(lambda x: descend(optimiser, x, 30))
    for k in range(3):
        one: Any = alone(starts[k])
        same(one[0][1], at(together[0][1], k))
        np.testing.assert_allclose(one[0][0], together[0][0][k], rtol=1e-12)
    assert len(set(together[0][1].bad_steps.tolist())) > 1
    assert finite(together[0][0])


def test_inside_a_chain_and_with_arguments_of_the_optimiser():
    # What follows the guard scales its way back too; the updates that follow it close the rest.
    chain = optax.chain(guarded(optax.sgd(1.0), patience=1), optax.scale(0.5))
    nothing = jax.tree.map(jnp.zeros_like, PARAMS)
    out = walk(chain, PARAMS, stack(at(slopes(1), 0), nothing, NAN, *[NAN] * 7))
    assert finite(out.params)
    np.testing.assert_allclose(out.params["a"][-1], out.params["a"][0])
    # A line search takes the loss itself.
    loss = lambda p: jnp.sum(p["a"] ** 2) + p["b"]["c"] ** 2
    search = guarded(optax.chain(optax.sgd(1.0), optax.scale_by_backtracking_linesearch(20)))
    value, slope = jax.value_and_grad(loss)(PARAMS)
    updates, _ = search.update(
        slope, search.init(PARAMS), PARAMS, value=value, grad=slope, value_fn=loss
    )
    assert loss(optax.apply_updates(PARAMS, updates)) < value


@pytest.mark.parametrize(
    "call, error, match",
    [
        (lambda: guarded(optax.sgd(0.1), patience=0), ValueError, "`patience` must be at least 1"),
        (lambda: guarded(optax.sgd(0.1), patience=TWO), TypeError, "`patience` must be a Python"),
        (lambda: guarded(optax.sgd(0.1), backtrack=0.0), ValueError, "`backtrack` must be above"),
        (
            lambda: guarded(optax.sgd(0.1)).update(NAN, guarded(optax.sgd(0.1)).init(PARAMS)),
            ValueError,
            "`params` must be given",
        ),
    ],
)
def test_errors_name_what_is_wrong(user_errors, call, error, match):
    with pytest.raises(error, match=match):
        call()
