import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.losses import continuity


RNG = np.random.default_rng(0)
GAPS = jnp.asarray(RNG.normal(size=(4, 2, 3)))
SCALE = jnp.asarray(RNG.uniform(0.5, 2, size=(2, 3)))
ROOT = RNG.normal(size=(4, 6, 6))
PRECISION = jnp.asarray(ROOT @ np.swapaxes(ROOT, 1, 2))


def test_weight():
    expected = 1.5 * np.sum(np.asarray(GAPS) ** 2)
    np.testing.assert_allclose(continuity(GAPS, weight=3.0), expected, rtol=1e-14)
    np.testing.assert_allclose(continuity(GAPS, weight=jnp.asarray(3.0)), expected, rtol=1e-14)


def test_scale():
    expected = sum(0.5 * np.sum((np.asarray(g) / np.asarray(SCALE)) ** 2) for g in GAPS)
    np.testing.assert_allclose(continuity(GAPS, scale=SCALE), expected, rtol=1e-14)


@pytest.mark.parametrize("each", [False, True])
def test_precision(each):
    precision = PRECISION if each else PRECISION[0]
    quadratic = 0.0
    for k in range(4):
        g, p = np.ravel(GAPS[k]), np.asarray(PRECISION[k if each else 0])
        quadratic += 0.5 * g @ p @ g
    np.testing.assert_allclose(continuity(GAPS, precision=precision), quadratic, rtol=1e-13)


def test_the_three_agree_where_they_mean_the_same():
    by_scale = continuity(GAPS, scale=SCALE)
    inverse = jnp.diag(1 / SCALE.ravel() ** 2)
    np.testing.assert_allclose(continuity(GAPS, precision=inverse), by_scale, rtol=1e-13)
    even = continuity(GAPS, scale=jnp.full((2, 3), 0.5))
    np.testing.assert_allclose(continuity(GAPS, weight=4.0), even, rtol=1e-14)


@pytest.mark.parametrize("size", [{"weight": 2.0}, {"scale": SCALE}, {"precision": PRECISION[0]}])
def test_no_gap_costs_nothing(size):
    assert continuity(0 * GAPS, **size) == 0
    assert continuity(GAPS[:0], **size) == 0
    np.testing.assert_array_equal(
        jax.grad(lambda g: continuity(g, **size))(0 * GAPS), jnp.zeros_like(GAPS)
    )


@pytest.mark.parametrize(
    "error, match, size",
    [
        (ValueError, "give exactly one of .*; got none", {}),
        (ValueError, "got weight and scale", {"weight": 1.0, "scale": SCALE}),
        (ValueError, r"`weight` must be a scalar, \(\); got shape \(4,\)", {"weight": jnp.ones(4)}),
        (ValueError, r"`scale` must be .*\(2, 3\); got shape \(3,\)", {"scale": SCALE[0]}),
        (
            ValueError,
            r"`precision` must be \(size, size\) or .*\(6, 6\); got shape \(3, 6, 6\)",
            {"precision": PRECISION[:3]},
        ),
        (
            TypeError,
            "`scale` is float32 but `gaps` is float64",
            {"scale": SCALE.astype(jnp.float32)},
        ),
    ],
)
def test_errors(user_errors, error, match, size):
    with pytest.raises(error, match=match):
        continuity(GAPS, **size)
