"""Spectra of damped networks against Lorentzians, and of simulated recordings against those."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.optimize
import scipy.signal

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import (
    NoisyParams,
    euler_maruyama,
    linear_transition,
    noisy_rollout,
    planar_rate,
)
from oscillib.likelihood import (
    coherence,
    cross_spectrum,
    lagged_covariance,
    sample_spectrum,
    see_spectrum,
    stationary_covariance,
    whittle,
)


FIELD = HopfNetwork()
A, W, S = -0.2, 2 * np.pi * 0.05, 0.02
MATRIX = FIELD.linear_matrix(HopfParams([A], [W]))
RATE = planar_rate(jnp.array([S]))


@pytest.fixture(scope="module")
def spectrum():
    return jax.jit(cross_spectrum)


def test_lorentzians(spectrum):
    # s^2 (v^2 + a^2 + w^2) / ((a^2 + w^2 - v^2)^2 + 4 a^2 v^2) at v = 0.3; closed form.
    out = spectrum(MATRIX, RATE, jnp.array([0.3]))
    # A resolvent near its resonance: rounding is some thousand times the value's.
    np.testing.assert_allclose(out.real[0, 0, 0], 0.0054544604148628224, rtol=0, atol=1e-14)
    # The peak lies below the eigenfrequency: sqrt(2w sqrt(a^2 + w^2) - a^2 - w^2).
    near = jnp.linspace(0.3087, 0.3088, 1001)
    peak = near[jnp.argmax(spectrum(MATRIX, RATE, near).real[:, 0, 0])]
    assert abs(peak - 0.3087099393) < 1e-6


def test_integral_is_the_variance(spectrum):
    # Wiener & Khinchin; v = tan(angle) makes the infinite line finite.
    angle = jnp.asarray((np.arange(2000) + 0.5) * (np.pi / 2000) - np.pi / 2)
    out = spectrum(MATRIX, RATE, jnp.tan(angle)).real[:, 0, 0]
    integral = jnp.sum(out / jnp.cos(angle) ** 2) * (np.pi / 2000) / (2 * np.pi)
    np.testing.assert_allclose(integral, 0.001, rtol=0, atol=1e-12)


def test_sampled_spectrum_is_the_transform_of_the_lagged_covariance():
    h, v = 0.7, 1.3
    covariance = stationary_covariance(MATRIX, RATE).covariance
    lags = h * jnp.arange(400.0)
    forward = np.asarray(lagged_covariance(MATRIX, covariance, lags))
    turn = np.exp(-1j * v * np.asarray(lags))[:, None, None]
    expected = h * (
        (forward * turn).sum(0) + (forward.transpose(0, 2, 1) * turn.conj()).sum(0) - forward[0]
    )
    out = cross_spectrum(MATRIX, RATE, jnp.array([v]), interval=h)
    np.testing.assert_allclose(
        np.asarray(out.real[0]) + 1j * np.asarray(out.imag[0]), expected, atol=1e-14
    )


def test_short_intervals_approach_continuous_time(spectrum):
    v = jnp.array([0.1, 0.3, 0.5])
    fine = cross_spectrum(MATRIX, RATE, v, interval=1e-3)
    np.testing.assert_allclose(fine.real, spectrum(MATRIX, RATE, v).real, rtol=1e-4, atol=1e-9)


def test_coherence_of_independent_nodes_and_of_one_signal():
    matrix = FIELD.linear_matrix(HopfParams([-0.2, -0.3], [2.0, 3.0]))
    out = cross_spectrum(matrix, planar_rate(jnp.array([0.1, 0.2])), jnp.array([1.0, 2.5]))
    both = coherence(out)
    np.testing.assert_allclose(both[:, 0, 1], 0, atol=1e-15)
    np.testing.assert_allclose(both[:, 0, 0], 1, rtol=1e-12)
    doubled = see_spectrum(jnp.array([[1.0, 0, 0, 0], [2.0, 0, 0, 0]]), out)
    np.testing.assert_allclose(coherence(doubled), 1, rtol=1e-12)


def test_overlapping_stretches_are_welchs_method():
    # Stretches of 256 samples at steps of 128 are two sets that do not overlap. scipy's welch, one
    # sided, gives 0.960079153681 at the bin 30, and its csd the rest.
    values = np.random.default_rng(0).normal(size=4096)
    other = np.random.default_rng(1).normal(size=4096) + np.roll(values, 3)
    both = jnp.asarray(np.stack([values, other], axis=1))
    estimate = jax.jit(lambda x: sample_spectrum(x, jnp.ones_like(x, bool), 256, interval=0.5))
    first, second = estimate(both), estimate(both[128:])
    assert (int(first.count), int(second.count)) == (16, 15)
    joined = [
        2 * (16 * np.asarray(a) + 15 * np.asarray(b)) / 31
        for a, b in zip(first.spectrum, second.spectrum, strict=True)
    ]
    assert abs(joined[0][29, 0, 0] - 0.960079153681) < 1e-12
    frequencies, theirs = scipy.signal.csd(values, other, fs=2.0, nperseg=256)
    np.testing.assert_allclose(first.frequencies, 2 * np.pi * frequencies[1:-1], rtol=1e-13)
    # scipy conjugates the first of the two.
    ours = joined[0][:, 0, 1] - 1j * joined[1][:, 0, 1]
    np.testing.assert_allclose(ours, theirs[1:-1], rtol=0, atol=1e-12)


def test_taper_spreads_a_tone_over_one_and_a_half_bins():
    # Equivalent noise bandwidth of the periodic Hann window: 1.5 bins; Harris 1978, Proc. IEEE 66.
    # The total is the power A^2 / 2 of the tone (Parseval), half of it at negative frequencies.
    tone = jnp.asarray(1.7 * np.cos(2 * np.pi * 20 * np.arange(256) / 256))[:, None]
    power = sample_spectrum(tone, jnp.ones_like(tone, bool), 256, interval=0.02).spectrum.real
    assert abs(jnp.sum(power) / jnp.max(power) - 1.5) < 1e-12
    assert abs(2 * jnp.sum(power) / (256 * 0.02) - 1.445) < 1e-12


def test_coherence_of_few_stretches():
    # Of L independent stretches without any relation: mean 1/L, and 1 - 0.05^(1/(L - 1)) is passed
    # by 5 percent; Carter 1987, beta law (from memory); here L = 8. Units do not matter.
    unit = np.logspace(-2, 2, 30)
    draws = jnp.asarray(unit * np.random.default_rng(0).normal(size=(4, 8 * 256, 30)))
    estimate = lambda x: sample_spectrum(x, jnp.ones_like(x, bool), 256, interval=1.0).spectrum
    both = jax.jit(jax.vmap(lambda x: coherence(estimate(x))))(draws)
    # The taper relates neighbouring frequencies.
    pairs = np.asarray(both)[:, ::3][:, :, *np.triu_indices(30, 1)].ravel()
    assert abs(np.mean(pairs) - 0.125) < 0.002
    assert abs(np.quantile(pairs, 0.95) - 0.34816366) < 0.006


@pytest.mark.long
def test_damped_spectrum_of_the_noisy_unit_where_euler_maruyama_is_wrong(step):
    """Weak noise on a damped unit: Lorentzian, at a step of an eighth of a period."""
    params, h, length = NoisyParams(HopfParams([-0.5], [6.0]), [0.05]), 0.13, 256
    matrix, rate = FIELD.linear_matrix(params.field), planar_rate(params.noise)

    def found(step):
        ys = noisy_rollout(step, params, jnp.zeros((2, 1)), h, 64 * length, key=jax.random.key(0))
        values = ys[:, 0]
        return sample_spectrum(values, jnp.ones_like(values, bool), length, interval=h)

    ours = found(step)
    expected = see_spectrum(
        jnp.eye(2)[:1], cross_spectrum(matrix, rate, ours.frequencies, interval=h)
    )
    ratio = np.asarray(ours.spectrum.real / expected.real).ravel()
    # 64 stretches: each ratio is gamma distributed with standard deviation 1/8.
    assert abs(ratio.mean() - 1) < 4 / 8 / np.sqrt(len(ratio) / 2)
    assert np.max(np.abs(ratio - 1)) < 5 / 8
    wrong = np.asarray(found(euler_maruyama(FIELD)).spectrum.real / expected.real).ravel()
    assert np.max(np.abs(wrong - 1)) > 10


def test_whittle_finds_the_noise_and_skips_stretches_with_gaps(step):
    params, h, length = NoisyParams(HopfParams([-0.5], [6.0], saturation=[0.0]), [0.4]), 0.1, 512
    ys = noisy_rollout(step, params, jnp.zeros((2, 1)), h, 40 * length - 1, key=jax.random.key(1))
    values = ys[:, 0] + 0.2 * jax.random.normal(jax.random.key(2), (40 * length, 1))
    mask = np.ones(values.shape, bool)
    mask[::4000] = False
    sample = sample_spectrum(jnp.where(mask, values, jnp.nan), mask, length, interval=h)
    assert int(sample.count) == 40 - len({k // length for k in range(0, 40 * length, 4000)})

    def loss(free):
        x = jnp.concatenate([-jnp.exp(free[:1]), jnp.exp(free[1:])])
        matrix = FIELD.linear_matrix(HopfParams(x[:1], x[1:2]))
        model = cross_spectrum(matrix, planar_rate(x[2:3]), sample.frequencies, interval=h)
        seen = see_spectrum(jnp.eye(2)[:1], model, reading_noise=x[3:], interval=h)
        return whittle(seen, sample)

    start = np.log([0.8, 5.5, 0.3, 0.3])
    found = scipy.optimize.minimize(jax.jit(jax.value_and_grad(loss)), start, jac=True).x
    np.testing.assert_allclose(np.exp(found), [0.5, 6.0, 0.4, 0.2], rtol=0.12)
    np.testing.assert_allclose(np.exp(found[1]), 6.0, atol=0.05)


def test_sampled_noise_matches_the_exact_step():
    # At infinite interval samples are independent: the spectrum is flat, h times the variance.
    h = 1e3
    out = cross_spectrum(MATRIX, RATE, jnp.array([1e-3, 2e-3]), interval=h)
    covariance = linear_transition(MATRIX, RATE, h)[1]
    np.testing.assert_allclose(out.real[:, 0, 0], h * covariance[0, 0], rtol=1e-12)


@pytest.mark.usefixtures("user_errors")
def test_messages():
    values = jnp.zeros((8, 1))
    with pytest.raises(ValueError, match="`length` must be at most the 8 samples"):
        sample_spectrum(values, values == 0, 9, interval=1.0)
    with pytest.raises(ValueError, match="`reading_noise` and `interval` belong together"):
        see_spectrum(
            jnp.eye(2), cross_spectrum(MATRIX, RATE, jnp.ones(1)), reading_noise=jnp.ones(2)
        )
