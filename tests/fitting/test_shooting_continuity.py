import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import AugmentedContinuity, HardContinuity, SoftContinuity
from oscillib.losses import continuity as continuity_loss


GAPS = jnp.array([[[0.3, -0.2], [0.1, 0.4], [-0.5, 0.2]]])  # one recording, three joints
PRECISION = jnp.array([[2.0, 0.5], [0.5, 1.0]])


@pytest.mark.parametrize(
    "given",
    [
        {"weight": jnp.asarray(3.0)},
        {"scale": jnp.array([0.1, 2.0])},
        {"precision": PRECISION},
        {"precision": jnp.stack([PRECISION, 2 * PRECISION, 3 * PRECISION])},
    ],
    ids=["weight", "scale", "precision", "precision of each joint"],
)
def test_soft_cost_is_the_loss(given):
    soft = SoftContinuity(**given)
    whitened = jnp.einsum("jab,rjb->rja", soft.factor(3, 2, GAPS.dtype), GAPS)
    pull = soft.begin(whitened, jnp.ones(()))
    expected = continuity_loss(GAPS[0], **given)
    np.testing.assert_allclose(soft.cost(pull, whitened), expected, rtol=1e-12)
    np.testing.assert_allclose(soft.yardstick(whitened, jnp.ones(())), expected, rtol=1e-12)


def test_forces_and_weight_of_the_augmented_lagrangian():
    settings = AugmentedContinuity(strength=0.5, growth=10.0)
    pull = settings.begin(GAPS, jnp.asarray(4.0))
    assert pull.weight == 2.0
    assert not settings.closed(pull, GAPS)
    assert settings.closed(pull, GAPS * 1e-12)


@pytest.mark.parametrize("settings", [AugmentedContinuity(), HardContinuity()])
def test_scale_is_the_unit_of_a_gap(settings):
    kind = type(settings)
    scaled = kind(scale=[2.0, 0.1], gap_tolerance=1e-3)
    np.testing.assert_allclose(scaled.factor(1, 2, GAPS.dtype)[0], np.diag([0.5, 10.0]))


def test_refusals(user_errors):
    with pytest.raises(ValueError, match="exactly one of"):
        SoftContinuity()
    with pytest.raises(ValueError, match="exactly one of"):
        SoftContinuity(weight=1.0, scale=[1.0])
    with pytest.raises(ValueError, match="`schedule` must be positive"):
        SoftContinuity(weight=1.0, schedule=[0.0, 1.0])
    with pytest.raises(ValueError, match="`growth` must be above 1"):
        AugmentedContinuity(growth=1.0)
    with pytest.raises(ValueError, match="`strength` must be positive"):
        HardContinuity(strength=-1.0)
