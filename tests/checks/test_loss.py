import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.checks import check_mask, check_minimum
from oscillib.losses import continuity, reconstruction


MASK = np.array([[True, False], [True, True], [False, True], [True, True]])
VALUES = jnp.arange(8.0).reshape(4, 2)
SCALE = jnp.array([0.5, 2.0])


def against_line(params, values, mask):
    """A line through the origin for each channel, its slopes the parameters."""
    predicted = jnp.arange(4, dtype=values.dtype)[:, None] * params["slope"][None]
    return reconstruction(predicted, values, mask, scale=params["scale"])


LINE = {"slope": jnp.array([1.0, -0.5]), "scale": SCALE}


def test_reconstruction_leaves_out_what_is_masked_in_single_precision():
    params = jax.tree.map(lambda x: x.astype(jnp.float32), LINE)
    # What masked entries hold at first does not matter either.
    values = jnp.asarray(np.where(MASK, VALUES, np.nan), jnp.float32)
    check_mask(against_line, params, values, jnp.asarray(MASK), key=jax.random.key(0))


def test_mask_that_is_turned_round_counts_what_is_masked():
    turned = lambda params, values, mask: against_line(params, values, ~mask)
    with pytest.raises(AssertionError, match=r"finite value.*NaN|masked entries do not change"):
        check_mask(turned, LINE, VALUES, MASK, key=jax.random.key(0))


def test_reconstruction_of_an_oscillation_is_least_at_the_truth():
    t = 0.1 * jnp.arange(20.0)[:, None]
    truth = {"w": jnp.asarray(2.0), "damping": jnp.asarray(0.1)}
    path = lambda params: jnp.exp(-params["damping"] * t) * jnp.cos(params["w"] * t)
    data, mask = path(truth), jnp.ones(t.shape, bool).at[3].set(False)
    loss = lambda params: reconstruction(path(params), data, mask, scale=jnp.ones(1))
    check_minimum(loss, truth, key=jax.random.key(1))


def test_continuity_is_least_where_windows_join():
    path = np.sin(0.1 * np.arange(9))[:, None]
    truth = jnp.asarray(np.stack([path[:5], path[4:]]))

    def loss(segments):
        return continuity(segments[:-1, -1] - segments[1:, 0], weight=2.0)

    # Only the ends count: no curvature along the rest, and none of it negative.
    check_minimum(loss, truth, key=jax.random.key(2))


def test_flat_along_one_parameter_is_still_a_minimum():
    loss = lambda params: (params["seen"] - 1.0) ** 2 + 0 * params["unseen"]
    truth = {"seen": jnp.asarray(1.0), "unseen": jnp.asarray(5.0)}
    check_minimum(loss, truth, key=jax.random.key(3))


def test_a_stiff_parameter_hides_nothing_in_a_sloppy_one():
    loss = lambda p: 1e8 * (p["stiff"] - 1.0) ** 2 + (p["sloppy"] - 2.1) ** 2
    truth = {"stiff": jnp.asarray(1.0), "sloppy": jnp.asarray(2.0)}
    with pytest.raises(AssertionError, match=r"gradient at the truth: params\['sloppy'\]"):
        check_minimum(loss, truth, key=jax.random.key(5))
    saddle = lambda p: 1e8 * (p["stiff"] - 1.0) ** 2 - (p["sloppy"] - 2.0) ** 2
    with pytest.raises(AssertionError, match=r"negative curvature.*sloppy"):
        check_minimum(saddle, truth, key=jax.random.key(5))


def test_the_steepest_entry_is_named():
    target = jnp.array([1.0, 2.0, 3.0])
    loss = lambda params: jnp.sum((params["a"] - target) ** 2)
    truth = {"a": target.at[1].add(0.5)}
    with pytest.raises(AssertionError, match=r"gradient at the truth[\s\S]*\['a'\][\s\S]*1"):
        check_minimum(loss, truth, key=jax.random.key(4))


def test_misuse(user_errors):
    del user_errors
    key = jax.random.key(0)
    with pytest.raises(ValueError, match="`mask` must have shape"):
        check_mask(against_line, LINE, VALUES, MASK[:2], key=key)
    with pytest.raises(TypeError, match="`mask` must be boolean"):
        check_mask(against_line, LINE, VALUES, MASK.astype(float), key=key)
    with pytest.raises(ValueError, match="observed and masked"):
        check_mask(against_line, LINE, VALUES, np.ones_like(MASK), key=key)
    with pytest.raises(ValueError, match="`loss` must return a scalar"):
        check_mask(lambda p, v, m: v, LINE, VALUES, MASK, key=key)
    with pytest.raises(ValueError, match="`loss` must return a scalar"):
        check_minimum(lambda p: p, jnp.ones(2), key=key)
