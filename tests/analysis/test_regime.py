from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.stats

from oscillib.analysis import Regime, describe_regimes, regimes
from oscillib.fields import HopfParams, HopfUnitParams


def units(growth, frequency: Any = 3.0, shear: Any = 0.0, saturation: Any = 0.0):
    like = np.zeros(np.shape(growth))
    return HopfUnitParams(
        growth, like + frequency, shear=like + shear, saturation=like + saturation
    )


def test_probability_and_verdict():
    growth = np.array([0.4, 0.1, -0.1, -0.4, 0.164, 0.165])
    found = regimes(units(growth, saturation=1.0), units(np.full(6, 0.1), 0.0))
    # The normal distribution function of estimate over error: common practice, no source.
    np.testing.assert_allclose(found.probability, scipy.stats.norm.cdf(growth / 0.1), rtol=1e-12)
    assert found.regime.tolist() == [1, 0, 0, -1, 0, 1]
    strict = regimes(units(growth, saturation=1.0), units(np.full(6, 0.1), 0.0), level=0.9999)
    assert strict.regime.tolist() == [1, 0, 0, -1, 0, 0]


def test_verdicts_are_as_often_right_as_they_claim():
    # The estimate is normal around the truth: among many units at a true growth just below 0, at
    # most 5 percent may be called self-sustained (2000 draws: standard error 0.5 percent).
    estimates = np.random.default_rng(0).normal(-1e-9, 0.1, 2000)
    found = regimes(units(estimates, saturation=1.0), units(np.full(2000, 0.1), 0.0))
    wrong = np.mean(found.regime == Regime.SELF_SUSTAINED)
    assert 0.035 < wrong < 0.065


def test_limit_cycle_in_closed_form():
    # sqrt(a/b), w - c a/b: closed form.
    p = HopfParams([0.4], [3.0], shear=[0.9], saturation=[1.5])
    e = HopfParams([0.01], [0.02], shear=[0.03], saturation=[0.04])
    found = regimes(p, e)
    np.testing.assert_allclose(found.radius.value, 0.5163977794943, rtol=0, atol=1e-12)
    np.testing.assert_allclose(found.frequency.value, 2.76, rtol=1e-14)
    np.testing.assert_allclose(found.period.value, 2.276516416, rtol=0, atol=1e-9)
    slopes = np.array([-0.9 / 1.5, 1, -0.4 / 1.5, 0.9 * 0.4 / 1.5**2])
    frequency_error = np.linalg.norm(slopes * [0.01, 0.02, 0.03, 0.04])
    np.testing.assert_allclose(found.frequency.error, frequency_error, rtol=1e-12)
    np.testing.assert_allclose(
        found.period.error, 2 * np.pi / 2.76**2 * frequency_error, rtol=1e-12
    )
    assert np.isnan(found.decay_time.value) and np.isnan(found.decay_time.error)


def test_damped_unit_in_closed_form():
    found = regimes(units([-0.4], shear=0.9, saturation=1.5), units([0.05], 0.02))
    np.testing.assert_allclose(found.decay_time.value, 2.5)
    np.testing.assert_allclose(found.decay_time.error, 0.05 / 0.16)
    # Small swings turn at w itself.
    np.testing.assert_allclose(found.frequency.value, 3.0)
    np.testing.assert_allclose(found.frequency.error, 0.02)
    assert np.isnan(found.radius.value)


def test_errors_agree_with_simulation_when_estimates_are_correlated():
    rng = np.random.default_rng(1)
    mean = np.array([0.4, 3.0, 0.9, 1.5])
    error = np.array([0.01, 0.02, 0.03, 0.04])
    correlation = np.eye(4)
    correlation[0, 3] = correlation[3, 0] = 0.8
    correlation[1, 2] = correlation[2, 1] = -0.5
    a, w, c, b = rng.multivariate_normal(mean, np.outer(error, error) * correlation, 100000).T
    p, e = (
        HopfParams(v[:1], v[1:2], shear=v[2:3], saturation=v[3:]) for v in jnp.array([mean, error])
    )
    found = regimes(p, e, correlation=jnp.asarray(correlation[None]))
    # 100000 draws: 0.2 percent, and the curvature that the delta method leaves out.
    np.testing.assert_allclose(found.radius.error[0], np.std(np.sqrt(a / b)), rtol=0.01)
    np.testing.assert_allclose(found.frequency.error[0], np.std(w - c * a / b), rtol=0.01)
    alone = regimes(p, e)
    assert float(found.radius.error[0]) < 0.7 * float(alone.radius.error[0])


def test_what_is_not_determined_and_what_is_known():
    # Infinite errors come from refused entries, zeros from what is not fitted.
    p = units([0.4, 0.4, 0.4, 0.0, -0.4], shear=0.0, saturation=1.0)
    e = units([np.inf, 0.1, 0.0, 0.0, np.nan], 0.01, saturation=[0.1, np.inf, 0.0, 0.0, 0.1])
    found = regimes(p, e)
    assert found.regime.tolist() == [0, 1, 1, 0, 0]
    np.testing.assert_allclose(found.probability[:4], [0.5, 0.9999683287581669, 1.0, 0.5])
    assert np.isnan(found.probability[4])
    np.testing.assert_allclose(found.radius.error[:3], [np.inf, np.inf, 0.0])
    # Without shear neither growth nor saturation enters the period.
    np.testing.assert_allclose(found.period.error, 2 * np.pi / 9 * 0.01, rtol=1e-12)
    words = describe_regimes(found)
    assert "amplitude not determined" in words[1]
    assert "P(growth > 0) unknown" in words[4]


def test_unit_that_does_not_turn_and_negative_saturation():
    found = regimes(units([0.4, 0.4], [0.0, 3.0], 0.0, [1.0, -1.0]), units([0.1, 0.1], 0.1))
    assert np.isinf(found.period.value[0])
    assert np.isnan(found.radius.value[1])
    assert "not determined" in describe_regimes(found)[0]


def test_words():
    p = units([0.4, -0.4, 0.1], 0.26, 0.0, 1.7)
    found = regimes(p, units([0.1, 0.1, 0.2], 0.001, 0.0, 0.0))
    assert describe_regimes(found, time_unit="h", amplitude_unit="mV") == [
        "unit 0: self-sustained (growth 0.40 +- 0.10 per h, P(growth > 0) > 0.999); "
        "period 24.166 +- 0.093 h, amplitude 0.485 +- 0.061 mV",
        "unit 1: damped (growth -0.40 +- 0.10 per h, P(growth > 0) < 0.001); "
        "period 24.166 +- 0.093 h, decay time 2.50 +- 0.62 h",
        "unit 2: undecided (growth 0.10 +- 0.20 per h, P(growth > 0) = 0.691); "
        "period 24.166 +- 0.093 h",
    ]


def test_precisions_trace_once_batch_and_gradient():
    traces = []

    def measured(growth, e):
        p = HopfUnitParams(growth, 3 + 0 * growth, shear=0 * growth + 0.5)
        found = regimes(p, e)
        return found, jnp.nansum(jnp.stack(jax.tree.leaves(found)[1:]))

    @jax.jit
    def everything(growths, e):
        traces.append(e)
        slope = jax.grad(lambda g: measured(g, e)[1])(growths[0])
        return jax.vmap(measured, in_axes=(0, None))(growths, e)[0], slope

    for dtype in (jnp.float64, jnp.float32):
        for shift in (0.0, 0.1):
            growths = jnp.asarray([[0.4, -0.4, 0.0], [0.3, 0.0, -0.2]], dtype) + shift
            error = [jnp.asarray(x, dtype) for x in ([0.1, 0.1, 0.0], [0.1] * 3)]
            e = HopfUnitParams(*error, shear=error[1], saturation=0 * error[1])
            found, slope = everything(growths.astype(dtype), e)
            assert found.regime.dtype == jnp.int32
            assert all(x.dtype == dtype for x in jax.tree.leaves(found)[1:])
            assert np.isfinite(slope).all()
            if shift == 0:
                assert found.regime.tolist() == [[1, -1, 0], [1, 0, -1]]
    assert len(traces) == 2


def test_gradient_against_central_differences():
    p, e = units([0.4], 3.0, 0.9, 1.5), units([0.1], 0.02, 0.03, 0.04)

    @jax.jit
    def total(p):
        found = regimes(p, e)
        parts = [found.probability, *found.radius, *found.period, *found.frequency]
        return sum(jnp.sum(x) for x in parts)

    slope = jax.jit(jax.grad(total))(p)
    h = 1e-6
    for name in ("growth", "frequency", "shear", "saturation"):
        moved = [
            total(
                HopfUnitParams(**{k: getattr(p, k) + (s * h if k == name else 0) for k in vars(p)})
            )
            for s in (1, -1)
        ]
        np.testing.assert_allclose(
            getattr(slope, name)[0], (moved[0] - moved[1]) / (2 * h), rtol=1e-7
        )


@pytest.mark.usefixtures("user_errors")
def test_messages():
    p, e = units([0.4], saturation=1.0), units([0.1], 0.0)
    with pytest.raises(ValueError, match=r"`level` must be above 0\.5"):
        regimes(p, e, level=0.3)
    with pytest.raises(ValueError, match="`standard_error` must be not negative"):
        regimes(p, units([-0.1], 0.0))
    with pytest.raises(ValueError, match=r"`standard_error\.growth` must have shape \(node,\)"):
        regimes(p, units([0.1, 0.1], 0.0))
    with pytest.raises(ValueError, match="`correlation` must have shape"):
        regimes(p, e, correlation=jnp.eye(4))
