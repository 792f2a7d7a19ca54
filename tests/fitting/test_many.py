from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import Shooting, Status, shoot_many, shoot_memory
from oscillib.integrate import cut, rk4, rollout


TIMES = jnp.linspace(0.0, 10.0, 101)
WINDOWS = cut(TIMES, 20)
SCALE = jnp.full(2, 0.1)


def fitzhugh_nagumo(t, y, params):
    # Ramsay, Hooker, Campbell & Cao 2007 (from memory)
    v, r = y
    c = params["c"]
    return jnp.stack([c * (v - v**3 / 3 + r), -(v - params["a"] + params["b"] * r) / c])


STEP = rk4(fitzhugh_nagumo, substeps=2)


def whole_state(y, params):
    return y


def draw(count, starts=1):
    """Recordings of one system with fresh reading noise, and random starts for each."""
    truth = {"a": jnp.asarray(0.2), "b": jnp.asarray(0.2), "c": jnp.asarray(3.0)}
    states = rollout(STEP, truth, jnp.array([-1.0, 1.0]), 0.1, 100)
    noise = jax.random.normal(jax.random.key(0), (count, *states.shape))
    values = states[None] + 0.1 * noise
    keys = jax.random.split(jax.random.key(1), 3)
    low, high = {"a": 0.0, "b": 0.0, "c": 1.0}, {"a": 1.0, "b": 1.0, "c": 5.0}
    params = {
        name: jax.random.uniform(key, (count, starts), minval=low[name], maxval=high[name])
        for name, key in zip("abc", keys, strict=True)
    }
    first = jnp.broadcast_to(values[:, None, :-1:20], (count, starts, 5, 2))
    return values, params, first


def fit(values, params, first, **settings):
    return shoot_many(
        STEP, whole_state, params, first, WINDOWS, values, scale=SCALE, max_steps=40, **settings
    )


def poison(values, params, first, bad):
    """Spoil `bad` of the fits, in ways that must end as the statuses returned with them."""
    chosen = np.random.default_rng(0).choice(len(values), bad, replace=False)
    nan, inf, flat, absurd = np.array_split(chosen, 4)
    values = values.at[nan, 50, 0].set(jnp.nan).at[inf, 7, 1].set(jnp.inf)
    values = values.at[flat, :, 0].set(0.3)
    params = {**params, "c": params["c"].at[absurd].set(1e9)}
    expected = np.full(bad, int(Status.NON_FINITE))
    expected[np.isin(chosen, flat)] = int(Status.COLLAPSED)
    return values, params, first, chosen, expected


def same_bits(a, b):
    a, b = np.asarray(a), np.asarray(b)
    return a.tobytes() == b.tobytes()


def check_poisoned(count, bad, chunk):
    values, params, first = draw(count)
    bad_values, bad_params, bad_first, chosen, expected = poison(values, params, first, bad)
    spoiled = fit(bad_values, bad_params, bad_first, chunk=chunk)
    np.testing.assert_array_equal(spoiled.fits.status[chosen, 0], expected)
    # The poisoned too hand back their best finite iterate, at worst the start.
    for leaf in jax.tree.leaves(spoiled.fits.params):
        assert np.isfinite(leaf).all()

    # Without them: the poisoned are left out, so that even the batch has another size.
    good = np.setdiff1d(np.arange(count), chosen)
    rest = values[good], {k: v[good] for k, v in params.items()}, first[good]
    clean = fit(*rest, chunk=chunk)
    assert (clean.fits.status == Status.CONVERGED).all()
    for a, b in zip(
        jax.tree.leaves(jax.tree.map(lambda x: x[good], spoiled.fits)),
        jax.tree.leaves(clean.fits),
        strict=True,
    ):
        assert same_bits(a, b)
    return rest, clean


@pytest.fixture(scope="module")
def eight():
    """Eight fits, one a recording, after checking that four poisoned ones leave them alone."""
    return check_poisoned(12, 4, 4)


@pytest.mark.long
def test_poisoned_fits_leave_the_others_alone(eight):
    assert eight[1].fits.status.shape == (8, 1)


@pytest.mark.long
def test_fifty_poisoned_among_a_thousand():
    check_poisoned(1000, 50, 200)


def single(values, params, first):
    one = Shooting(STEP, whole_state, params, first, WINDOWS, values, scale=SCALE, max_steps=40)
    return one.result(one.run(one.init()))


def check_same(other, together):
    np.testing.assert_array_equal(other.steps, together.fits.steps)
    for name, leaf in other.params.items():
        np.testing.assert_allclose(leaf, together.fits.params[name], rtol=1e-9)
    np.testing.assert_allclose(other.covariance, together.fits.covariance, rtol=1e-6, atol=1e-12)


@pytest.mark.long
def test_chunks_agree(eight):
    # A chunk of three does not divide the eight fits.
    arguments, together = eight
    check_same(fit(*arguments, chunk=3).fits, together)


@pytest.mark.long
def test_side_by_side_and_one_by_one_agree(eight):
    (values, params, first), together = eight
    run = jax.jit(single)
    begin = [{name: p[k, 0] for name, p in params.items()} for k in range(8)]
    one_by_one = [run(values[k], begin[k], first[k, 0]) for k in range(8)]
    check_same(jax.tree.map(lambda *x: jnp.stack(x)[:, None], *one_by_one), together)
    check_same(fit(values, params, first, chunk=1).fits, together)
    check_same(fit(values, params, first, chunk=8).fits, together)


@pytest.mark.long
def test_halving_and_agreement():
    values, params, first = draw(3, starts=4)
    # Two starts of each recording cannot be evaluated, and of the last recording none.
    params["c"] = params["c"].at[:, 1:3].set(1e9)
    values = values.at[2].set(jnp.nan)
    many = fit(values, params, first, halving=(4,), chunk=8)
    assert many.fits.status.shape == (3, 2)
    np.testing.assert_array_equal(np.sort(many.start, axis=1)[:2], [[0, 3]] * 2)
    np.testing.assert_array_equal(many.agreement.converged, [2, 2, 0])
    np.testing.assert_array_equal(many.agreement.agreeing, [2, 2, 0])
    assert (many.agreement.spread[:2] < 1e-4).all()
    assert np.isnan(many.agreement.spread[2])


@pytest.mark.long
def test_memory_estimate_is_near_what_the_compiler_allots():
    values, params, first = draw(1)
    begin = {k: v[0, 0] for k, v in params.items()}
    one = Shooting(STEP, whole_state, begin, first[0, 0], WINDOWS, values[0], scale=SCALE)
    many = jax.jit(jax.vmap(lambda s: single(s * values[0], begin, first[0, 0])))
    analysis: Any = many.lower(jnp.ones(64)).compile().memory_analysis()
    assert 1 / 2 < analysis.temp_size_in_bytes / 64 / shoot_memory(one) < 2


def test_refusals(user_errors):
    values, params, first = draw(2)
    with pytest.raises(ValueError, match="`starts` must have shape"):
        fit(values, params, first[0, 0, 0])
    with pytest.raises(ValueError, match="`halving` must hold increasing"):
        fit(values, params, first, halving=(8, 8))
    with pytest.raises(ValueError, match=r"`params\['a'\]` must have shape \(recording, start"):
        fit(values, {**params, "a": params["a"][0]}, first)
    with pytest.raises(ValueError, match="`values` must have shape"):
        fit(values[:1], params, first)
