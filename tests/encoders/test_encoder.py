import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.encoders import (
    AttentionPool,
    Encoder,
    FreeGaussian,
    GaussianHead,
    LastPool,
    MeanPool,
    Prior,
    Recurrence,
    SampleMap,
)
from oscillib.parameters import Positive, all_finite
from oscillib.recordings import pad, recording


PRIOR = Prior({"rate": jnp.array([2.0, 0.5])}, {"rate": Positive()}, sd=0.5)


def build():
    """An encoder none of whose layers is at zero, as after training."""
    keys = jax.random.split(jax.random.key(0), 4)
    encoder = Encoder(
        SampleMap(2, 4, key=keys[0]),
        Recurrence(4, 3, key=keys[1]),
        AttentionPool(6, heads=2, width=4, key=keys[2]),
        GaussianHead(6, PRIOR.size, width=4, key=keys[3]),
    )
    rng = np.random.default_rng(0)
    return jax.tree.map(lambda w: w + jnp.asarray(0.3 * rng.normal(size=w.shape)), encoder)


def cohort(count=4, length=6):
    rng = np.random.default_rng(1)
    times = jnp.asarray(np.cumsum(rng.uniform(0.2, 0.8, size=(count, length)), axis=1))
    values = jnp.asarray(rng.normal(size=(count, length, 2)))
    mask = rng.random((count, length, 2)) < 0.6
    mask[:, [0, -1], 0] = True
    return times, values, jnp.asarray(mask)


def bits(tree):
    return [np.asarray(leaf).tobytes() for leaf in jax.tree.leaves(tree)]


@pytest.fixture(scope="module")
def run():
    """The proposal for one recording, and gradients of a function of all of it."""

    @jax.jit
    def propose(encoder, times, values, mask):
        def laws(encoder, values):
            out = encoder(times, values, mask, PRIOR)
            return (out.law.mean, out.law.factor, out.weights), out.informed

        out, pull, informed = jax.vjp(laws, encoder, values, has_aux=True)
        return out, pull(jax.tree.map(jnp.cos, out)), informed

    return propose


@pytest.fixture(scope="module")
def run_many():
    traces = []

    @jax.jit
    def propose(encoder, *data):
        traces.append(data)
        return jax.vmap(encoder, in_axes=(0, 0, 0, None))(*data, PRIOR)

    return propose, traces


def one():
    return [a[0] for a in cohort()]


def test_padding_and_what_is_missing_change_no_bit(run):
    encoder = build()
    times, values, mask = one()
    (mean, factor, weights), (slope, pull), _ = run(encoder, times, values, mask)
    padded = pad(recording(times, jnp.where(mask, values, jnp.nan)), 11)
    junk = jnp.where(padded.mask, padded.values, jnp.nan)
    for times in (padded.times, padded.times.at[6:].set(jnp.nan)):
        (mean_, factor_, weights_), (slope_, pull_), _ = run(encoder, times, junk, padded.mask)
        assert bits((mean, factor, weights)) == bits((mean_, factor_, weights_[:, :6]))
        assert not np.any(weights_[:, 6:])
        # Nor the gradients, of the weights and of the values; of what is missing they are 0.
        assert bits((slope_, pull_[:6])) == bits((slope, pull))
        assert not np.any(np.asarray(pull_)[~np.asarray(padded.mask)])
    assert np.all(np.asarray(pull)[np.asarray(mask)] != 0)


def test_nothing_observed_gives_the_prior_and_says_so(run):
    encoder = build()
    times, values, mask = one()
    (mean, factor, weights), slopes, informed = run(
        encoder, times, jnp.full_like(values, jnp.nan), jnp.zeros_like(mask)
    )
    assert not informed
    np.testing.assert_array_equal(mean, PRIOR.law.mean)
    np.testing.assert_array_equal(factor, PRIOR.law.factor)
    assert not np.any(weights)
    assert all_finite(slopes) and not any(np.any(leaf) for leaf in jax.tree.leaves(slopes))
    (mean, _, weights), _, informed = run(encoder, times, values, mask)
    assert informed and np.all(mean != PRIOR.law.mean)
    np.testing.assert_allclose(np.sum(weights, axis=1), 1, atol=1e-15)


def test_a_batch_is_its_recordings_in_any_order(run, run_many):
    """To rounding: a product of a matrix with a batch rounds rows at its end otherwise."""
    propose, traces = run_many
    data = cohort(count=7)
    encoder, order = build(), np.array([3, 6, 0, 2, 5, 1, 4])
    straight = propose(encoder, *data)
    turned = propose(encoder, *(a[order] for a in data))
    close = lambda a, b: np.testing.assert_allclose(a, b, rtol=1e-13, atol=1e-15)
    jax.tree.map(lambda a, b: close(a[order], b), straight, turned)
    (mean, factor, weights), _, _ = run(encoder, *(a[0] for a in data))
    close(straight.law.mean[0], mean)
    close(straight.law.factor[0], factor)
    close(straight.weights[0], weights)
    # Padding changes no bit in a batch either.
    rows = ((0, 0), (0, 5), (0, 0))
    padded = (jnp.pad(data[0], rows[:2]), jnp.pad(data[1], rows), jnp.pad(data[2], rows))
    long = propose(encoder, *padded)
    assert bits(long.law) == bits(straight.law)
    assert bits(long.weights[..., :6]) == bits(straight.weights)
    # All leaves are arrays, so other weights and recordings compile nothing.
    other = propose(jax.tree.map(lambda w: 1.1 * w, encoder), data[0], data[1] + 1, data[2])
    assert np.all(other.law.mean != straight.law.mean) and len(traces) == 2


def test_any_block_can_be_exchanged():
    _, values, mask = one()
    parts = build()
    for pooling, heads in ((MeanPool(), 1), (LastPool(), 2)):
        swapped = eqx.tree_at(lambda e: e.pooling, parts, pooling)
        out = jax.jit(lambda e, v: e(None, v, mask, PRIOR))(swapped, values)
        assert out.weights.shape == (heads, 6) and np.all(out.law.mean != PRIOR.law.mean)
    own = Encoder(
        lambda times, values, mask: jnp.where(mask, values, 0),
        lambda rows, inside: rows,
        MeanPool(),
        lambda features, informed, prior: FreeGaussian(features, jnp.eye(2)),
    )
    average = own(None, values, jnp.ones_like(mask), PRIOR).law.mean
    np.testing.assert_allclose(average, np.mean(values, axis=0), rtol=1e-14)


def test_untrained_it_gives_the_prior_also_in_short_floats():
    keys = jax.random.split(jax.random.key(0), 4)
    short = jnp.float32
    encoder = Encoder(
        SampleMap(2, 4, key=keys[0], dtype=short),
        Recurrence(4, 3, cell="lstm", key=keys[1], dtype=short),
        AttentionPool(6, key=keys[2], dtype=short),
        GaussianHead(6, PRIOR.size, key=keys[3], dtype=short),
    )
    *data, prior = jax.tree.map(
        lambda x: x.astype(short) if x.dtype == jnp.float64 else x, (*one(), PRIOR)
    )
    out = jax.jit(Encoder.__call__)(encoder, *data, prior)
    assert out.law.mean.dtype == out.law.factor.dtype == out.weights.dtype == short
    np.testing.assert_array_equal(out.law.mean, prior.law.mean)
    np.testing.assert_array_equal(out.law.factor, prior.law.factor)


def test_errors_name_the_argument(user_errors):
    encoder = build()
    times, values, mask = one()
    with pytest.raises(
        ValueError, match=r"`values` must have shape \(time, channel\) = \(any, 2\)"
    ):
        encoder(times, values[:, :1], mask[:, :1], PRIOR)
    with pytest.raises(ValueError, match="`mask` must have shape"):
        encoder(times, values, mask[0], PRIOR)
    with pytest.raises(ValueError, match=r"`times` must have shape \(time,\) = \(6\)"):
        encoder(times[:-1], values, mask, PRIOR)
    with pytest.raises(TypeError, match="`x` is float32 but `the weights` is float64"):
        encoder(None, values.astype(jnp.float32), mask, PRIOR)
