import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.special

from oscillib.encoders import AttentionPool, LastPool, MeanPool, attention_weights


RNG = np.random.default_rng(0)
OUTPUTS = jnp.asarray(RNG.normal(size=(5, 4)))
INSIDE = jnp.ones(5, bool)
GAPPY = jnp.array([False, True, False, True, False])


def learned(heads=2, depth=1, dtype=None):
    """An attention whose last layer has left zero."""
    pooling = AttentionPool(
        4, heads=heads, width=3, depth=depth, key=jax.random.key(0), dtype=dtype
    )
    weight = jnp.asarray(RNG.normal(size=pooling.network.layers[-1].weight.shape), dtype)
    return eqx.tree_at(lambda p: p.network.layers[-1].weight, pooling, weight)


POOLINGS = {"mean": MeanPool(), "last": LastPool(), "attention": learned()}


@pytest.fixture(scope="module")
def run():
    @jax.jit
    def both(pooling, outputs, inside):
        out, pull = jax.vjp(lambda *at: at[0](at[1], inside), pooling, outputs)
        return out, pull(jax.tree.map(jnp.cos, out))

    return both


def test_softmax_and_its_jacobian_have_the_closed_form():
    """softmax(1, 2, 3), and diag(p) - p p' as its Jacobian."""
    at = lambda s: attention_weights(s[None], jnp.ones(3, bool))[0]
    scores = jnp.array([1.0, 2.0, 3.0])
    p = np.array([0.09003057317, 0.24472847105, 0.66524095577])
    np.testing.assert_allclose(at(scores), p, atol=1e-11)
    jacobian = jax.jit(jax.jacrev(at))(scores)
    np.testing.assert_allclose(
        jacobian[0], [0.081925069065, -0.02203304452, -0.059892024545], atol=1e-11
    )
    exact = scipy.special.softmax(np.asarray(scores))
    np.testing.assert_allclose(jacobian, np.diag(exact) - np.outer(exact, exact), atol=1e-15)


def test_attention_does_not_mind_order_or_what_is_common_to_all_scores(run):
    scores = jnp.asarray(RNG.normal(size=(2, 5)))
    weights = attention_weights(scores, INSIDE)
    np.testing.assert_allclose(np.sum(weights, axis=1), 1, atol=1e-15)
    order = np.array([3, 0, 4, 2, 1])
    np.testing.assert_allclose(
        attention_weights(scores[:, order], INSIDE), weights[:, order], atol=1e-15
    )
    np.testing.assert_allclose(attention_weights(scores + 7.0, INSIDE), weights, atol=1e-14)
    turned, _ = run(POOLINGS["attention"], OUTPUTS[order], INSIDE)
    straight, _ = run(POOLINGS["attention"], OUTPUTS, INSIDE)
    np.testing.assert_allclose(turned.features, straight.features, atol=1e-14)


def test_scores_of_any_size_are_safe():
    scores = jnp.array([[-1e308, 0.0, 1e308], [-1e3, -2e3, -3e3]])
    weights = attention_weights(scores, jnp.ones(3, bool))
    np.testing.assert_array_equal(weights, [[0, 0, 1], [1, 0, 0]])


def test_mean_and_ends_are_what_they_say(run):
    outputs = np.asarray(OUTPUTS)
    mean, _ = run(MeanPool(), OUTPUTS, GAPPY)
    np.testing.assert_allclose(mean.features, outputs[[1, 3]].mean(axis=0), rtol=1e-15)
    np.testing.assert_array_equal(mean.weights, [[0, 0.5, 0, 0.5, 0]])
    last, _ = run(LastPool(), OUTPUTS, GAPPY)
    np.testing.assert_array_equal(last.features, [*outputs[3, :2], *outputs[1, 2:]])
    np.testing.assert_array_equal(last.weights, [[0, 0, 0, 1, 0], [0, 1, 0, 0, 0]])


def test_every_head_pools_its_share_of_the_features(run):
    pooling = POOLINGS["attention"]
    pooled, _ = run(pooling, OUTPUTS, INSIDE)
    scores = np.stack([np.asarray(pooling.network(x)) for x in OUTPUTS])
    weights = scipy.special.softmax(scores, axis=0)
    np.testing.assert_allclose(pooled.weights, weights.T, rtol=1e-13)
    expected = [weights[:, f % 2] @ np.asarray(OUTPUTS)[:, f] for f in range(4)]
    np.testing.assert_allclose(pooled.features, expected, rtol=1e-13)


def test_attention_starts_as_the_mean(run):
    pooling = AttentionPool(4, heads=2, width=3, key=jax.random.key(0))
    first, mean = (run(p, OUTPUTS, GAPPY)[0] for p in (pooling, MeanPool()))
    np.testing.assert_array_equal(first.features, mean.features)


@pytest.mark.parametrize("kind", POOLINGS)
@pytest.mark.parametrize("junk", [0.0, np.nan, np.inf])
def test_padding_changes_no_bit(run, kind, junk):
    (bare, bare_weights), (_, bare_slope) = run(POOLINGS[kind], OUTPUTS, INSIDE)
    padded = jnp.pad(OUTPUTS, ((2, 6), (0, 0)), constant_values=junk)
    inside = jnp.pad(INSIDE, (2, 6))
    (features, weights), (_, slope) = run(POOLINGS[kind], padded, inside)
    for long, short in (
        (features, bare),
        (weights[:, 2:7], bare_weights),
        (slope[2:7], bare_slope),
    ):
        assert np.asarray(long).tobytes() == np.asarray(short).tobytes()
    for outside in (weights.T, slope):
        assert np.all(np.asarray(outside)[~np.asarray(inside)] == 0)


@pytest.mark.parametrize("kind", POOLINGS)
def test_nothing_inside_gives_zeros_and_a_zero_gradient(run, kind):
    pooled, slopes = run(POOLINGS[kind], jnp.full((5, 4), jnp.nan), jnp.zeros(5, bool))
    for leaf in jax.tree.leaves((pooled, slopes)):
        np.testing.assert_array_equal(leaf, 0)


@pytest.mark.parametrize("kind", POOLINGS)
def test_short_floats(run, kind):
    pooling = learned(dtype=jnp.float32) if kind == "attention" else POOLINGS[kind]
    pooled, _ = run(pooling, OUTPUTS.astype(jnp.float32), GAPPY)
    assert all(leaf.dtype == jnp.float32 for leaf in pooled)


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`heads` must be at most `features`, 4; got 5"):
        AttentionPool(4, heads=5, key=jax.random.key(0))
    with pytest.raises(ValueError, match="`outputs` must have an even number of features"):
        LastPool()(OUTPUTS[:, :3], INSIDE)
    with pytest.raises(ValueError, match=r"`outputs` must have shape .* = \(any, 4\)"):
        POOLINGS["attention"](OUTPUTS[:, :3], INSIDE)
    for pooling in POOLINGS.values():
        with pytest.raises(ValueError, match=r"`inside` must have shape \(time,\) = \(5,\)"):
            pooling(OUTPUTS, INSIDE[1:])
        with pytest.raises(TypeError, match="`inside` must be boolean"):
            pooling(OUTPUTS, jnp.ones(5))
    with pytest.raises(ValueError, match=r"`scores` must have shape \(head, time\)"):
        attention_weights(OUTPUTS[0], INSIDE)
