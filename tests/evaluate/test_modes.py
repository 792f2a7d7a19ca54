import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import (
    Autoregression,
    autoregression_modes,
    autoregression_spectrum,
    forecast_autoregression,
)


# Box & Jenkins's fit to the sunspots 1770-1869 (coefficients from memory).
SUNSPOTS = Autoregression([0.0], jnp.array([[[1.318]], [[-0.634]]]), jnp.eye(1), [0.0])
COUPLED = Autoregression(
    jnp.zeros(2),
    jnp.array([[[0.5, 0.2], [-0.3, 0.6]], [[-0.2, 0.0], [0.1, -0.3]]]),
    jnp.array([[1.0, 0.4], [0.4, 2.0]]),
    jnp.zeros(2),
)


def test_damping_and_period_of_the_sunspots():
    # sqrt(-f2) and 2 pi / acos(f1 / (2 sqrt(-f2))); closed form.
    modes = autoregression_modes(SUNSPOTS)
    np.testing.assert_allclose(modes.modulus, 0.7962411695, rtol=0, atol=1e-9)
    np.testing.assert_allclose(modes.period, 10.543868299, rtol=0, atol=1e-8)
    np.testing.assert_allclose(np.sort(modes.angle), 2 * np.pi / modes.period * [-1, 1])
    assert modes.stable


def test_peak_of_the_spectrum_of_the_sunspots():
    # The peak lies at 2 pi / acos(-f1 (1 - f2) / (4 f2)); closed form. Here: where the slope by
    # automatic differentiation changes sign.
    power = lambda f: autoregression_spectrum(SUNSPOTS, f[None])[0, 0]
    slope, (low, high) = jax.jit(jax.grad(power)), (1 / 14, 1 / 9)
    assert slope(low) > 0 > slope(high)
    for _ in range(40):
        middle = (low + high) / 2
        low, high = (middle, high) if slope(middle) > 0 else (low, middle)
    assert abs(2 / (low + high) - 11.294652325) < 1e-7  # stated: 1e-5


def test_modulus_of_the_german_economy(german_model):
    # Largest companion eigenvalue of the VAR(2) of Luetkepohl 2005, section 3.2.3; closed form,
    # and the roots of statsmodels.
    modes = autoregression_modes(german_model)
    assert abs(modes.modulus[0] - 0.5704688922) < 1e-9
    assert modes.modulus.shape == (6,) and np.all(np.diff(modes.modulus) <= 0) and modes.stable


def test_disturbances_follow_the_modes():
    # A forecast from any lags is a sum of modes, so the modes' polynomial annihilates it.
    roots = autoregression_modes(COUPLED)
    roots = roots.modulus * np.exp(1j * roots.angle)
    start = jnp.asarray(np.random.default_rng(0).normal(size=(2, 2)))
    path = forecast_autoregression(COUPLED, start, start == start, jnp.array([1]), 12)[0]
    polynomial = np.real(np.poly(roots))
    for j in range(2):
        rest = np.convolve(np.asarray(path[:, j]), polynomial, mode="valid")
        np.testing.assert_allclose(rest, 0, atol=1e-14)


def test_spectrum_integrates_to_the_variance():
    # Wiener-Khinchin. The mean over a regular grid of a smooth period is exact. The variance of
    # the sunspots' model is 4.7859431005 by its closed form.
    grid = jnp.arange(400) / 400 - 0.5
    mean = jnp.mean(autoregression_spectrum(SUNSPOTS, grid), axis=0)
    np.testing.assert_allclose(mean, 4.7859431005, rtol=0, atol=1e-9)
    big = np.zeros((4, 4))
    big[:2] = np.concatenate(np.asarray(COUPLED.coefficients), axis=1)
    big[2:, :2] = np.eye(2)
    shock = np.zeros((4, 4))
    shock[:2, :2] = COUPLED.covariance
    law = np.linalg.solve(np.eye(16) - np.kron(big, big), shock.ravel()).reshape(4, 4)
    mean = jnp.mean(autoregression_spectrum(COUPLED, grid), axis=0)
    np.testing.assert_allclose(mean, np.diag(law)[:2], rtol=1e-10)


def test_modes_that_do_not_turn_grow_or_are_unknown():
    one = lambda a: Autoregression([0.0], jnp.full((1, 1, 1), a), jnp.eye(1), [0.0])
    still = autoregression_modes(one(0.5))
    assert still.period[0] == np.inf and still.stable
    assert autoregression_modes(one(-0.5)).period[0] == 2.0
    assert not autoregression_modes(one(1.01)).stable
    unknown = autoregression_modes(one(jnp.nan))
    assert np.isnan(unknown.modulus[0]) and not unknown.stable


def test_float32():
    small = jax.tree.map(lambda x: x.astype(jnp.float32), COUPLED)
    frequencies = jnp.arange(400) / 400 - 0.5
    power = autoregression_spectrum(small, frequencies.astype(jnp.float32))
    assert power.dtype == jnp.float32
    np.testing.assert_allclose(power, autoregression_spectrum(COUPLED, frequencies), rtol=1e-5)


def test_errors_name_what_is_wrong(user_errors):
    with pytest.raises(TypeError, match="`model` must hold known numbers"):
        jax.jit(lambda m: autoregression_modes(m).stable)(COUPLED)
    with pytest.raises(ValueError, match="`frequencies` must have shape"):
        autoregression_spectrum(COUPLED, jnp.asarray(0.1))
    with pytest.raises(TypeError, match="`frequencies` is float32"):
        autoregression_spectrum(COUPLED, jnp.zeros(1, jnp.float32))
