from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
import pytest
import scipy.signal

from oscillib.analysis import analytic_phase, hopf_phase, mean_frequency, planar_phase
from oscillib.fields import HopfNetwork, HopfParams, HopfUnitParams
from oscillib.integrate import rk4, rollout
from oscillib.recordings import on_grid, recording


# The Hopf unit of the check values: growth, saturation, shear, angular frequency.
UNIT = HopfParams([0.4], [3.0], shear=[0.9], saturation=[1.5])


def test_hilbert_phase_of_a_cosine_on_a_bin():
    # 1.7 cos on a bin of 256 samples: phase and amplitude are exact; closed form.
    angle = 2 * np.pi * 20 * np.arange(256) / 256 + 0.4
    found = analytic_phase(jnp.asarray(1.7 * np.cos(angle)))
    np.testing.assert_allclose(found.amplitude, 1.7, rtol=0, atol=1e-10)
    np.testing.assert_allclose(found.phase, angle, rtol=0, atol=1e-10)
    turns = 2 * np.pi * 3
    np.testing.assert_allclose(found.phase[37] - turns, -0.287223392973, rtol=0, atol=1e-10)


@pytest.mark.parametrize("n", [63, 64])
def test_hilbert_equals_scipy(n):
    values = np.random.default_rng(n).normal(size=(n, 2))
    expected = np.array(scipy.signal.hilbert(values, axis=0), dtype=complex)
    found = analytic_phase(jnp.asarray(values))
    np.testing.assert_allclose(found.amplitude, np.abs(expected), rtol=1e-12)
    np.testing.assert_allclose(
        found.phase, np.unwrap(np.angle(expected), axis=0), rtol=0, atol=1e-12
    )


def test_band_is_cut_out_by_scipy_before_the_phase_is_taken():
    # The route of a user: a recording on a regular grid, scipy's Butterworth band-pass run forward
    # and backward, then the phase. At the edges of the band |H|^2 = 1/2, forward and backward 1/4
    # of the power; closed form.
    low, high, step = 0.8, 1.25, 0.1
    band = scipy.signal.butter(3, [low, high], "bandpass", fs=1 / step, output="sos")
    edges: Any = [low, high]
    gain = np.abs(np.asarray(scipy.signal.freqz_sos(band, edges, fs=1 / step)[1])) ** 2
    np.testing.assert_allclose(gain, 0.5, rtol=0, atol=1e-9)
    times = step * np.arange(2400)
    # Both edges, each whole turns of the middle 1200 samples long, and a slow drift outside.
    tones = np.stack([np.cos(2 * np.pi * f * times) for f in (low, high)], axis=1)
    slow = 2 * np.sin(2 * np.pi * 0.05 * times)[:, None]
    r = on_grid(recording(times, tones + slow))
    assert bool(jnp.all(r.mask))  # a filter takes no gaps
    filtered = scipy.signal.sosfiltfilt(band, np.asarray(r.values), axis=0)[600:1800]
    np.testing.assert_allclose(np.mean(filtered**2, axis=0), 0.5 * 0.25, rtol=0, atol=1e-9)
    found = analytic_phase(jnp.asarray(filtered))
    np.testing.assert_allclose(found.amplitude, 0.5, rtol=0, atol=1e-9)
    turned = (found.phase[-1] - found.phase[0]) / (2 * np.pi * step * 1199)
    np.testing.assert_allclose(turned, [low, high], rtol=0, atol=1e-9)


def test_planar_phase_counts_turns_and_directions():
    angle = np.linspace(0.3, 40.0, 200)
    radius = 1 + 0.3 * np.sin(angle)
    both = np.stack([angle, -angle], axis=-1)
    states = radius[:, None, None] * np.stack([np.cos(both), np.sin(both)], axis=1)
    found = planar_phase(jnp.asarray(states))
    np.testing.assert_allclose(found.phase, both, rtol=0, atol=1e-12)
    np.testing.assert_allclose(found.amplitude, np.stack([radius] * 2, axis=1), rtol=1e-13)


def test_no_nan_at_the_origin():
    states = jnp.zeros((4, 2, 1)).at[1, 0, 0].set(1.0)
    total = lambda f: lambda x: sum(jnp.sum(part) for part in f(x))
    for function, at in ((planar_phase, states), (analytic_phase, jnp.zeros(8))):
        value, slope = jax.jit(jax.value_and_grad(total(function)))(at)
        assert np.isfinite(value) and np.isfinite(slope).all()


def test_mean_frequency_of_an_uneven_protophase():
    # An ellipse around a shifted centre: uneven within a turn, exact over whole turns but for the
    # straight line between samples.
    times = jnp.linspace(0.0, 10.3, 4000)
    angle = 2.7 * times
    states = jnp.stack([2 * jnp.cos(angle) + 0.5, jnp.sin(angle)], axis=1)
    phase = planar_phase(states).phase
    assert float(jnp.max(jnp.abs(phase - angle))) > 0.3
    np.testing.assert_allclose(mean_frequency(phase, times), 2.7, rtol=1e-6)
    slope = (phase[-1] - phase[0]) / times[-1]
    assert abs(slope - 2.7) > 1e-3


def test_mean_frequency_directions_short_records_and_gradient():
    times = jnp.linspace(0.0, 4.0, 101)
    rates = jnp.array([5.0, -3.0, 1.0])
    found = mean_frequency(rates[None] * times[:, None], times)
    np.testing.assert_allclose(found[:2], rates[:2], rtol=1e-12)
    assert np.isnan(found[2])
    slope = jax.jit(jax.grad(lambda w: mean_frequency(w * times, times)))(5.0)
    np.testing.assert_allclose(slope, 1.0, rtol=1e-10)
    assert np.isnan(mean_frequency(jnp.where(times > 3, jnp.nan, 5 * times), times))
    # Irregular times.
    warped = times**1.3
    np.testing.assert_allclose(mean_frequency(5 * warped, warped), 5.0, rtol=1e-12)


def test_frequency_of_the_limit_cycle_from_either_phase():
    # w - c a / b = 2.76: closed form.
    y0 = jnp.array([[np.sqrt(0.4 / 1.5)], [0.0]])
    times = 0.01 * jnp.arange(3001.0)
    states = rollout(rk4(HopfNetwork()), UNIT, y0, 0.01, 3000)
    np.testing.assert_allclose(mean_frequency(planar_phase(states).phase, times), 2.76, rtol=1e-8)
    hilbert = analytic_phase(states[:, 0]).phase
    # The ends of the record, where the Hilbert phase is unreliable, are left out.
    inner = mean_frequency(hilbert[500:-500], times[500:-500])
    np.testing.assert_allclose(inner, 2.76, rtol=2e-3)


def test_asymptotic_phase_of_the_hopf_unit():
    # arg z - (c/b) ln(|z| / r*) at z = 0.9 e^(0.7 i): Kuramoto 1984, Winfree 2001 (from memory).
    z = 0.9 * np.exp(0.7j)
    y = jnp.array([[z.real], [z.imag]])
    np.testing.assert_allclose(hopf_phase(y, UNIT), [0.3666895574], rtol=0, atol=1e-10)
    single = HopfUnitParams(0.4, 3.0, shear=0.9, saturation=1.5)
    np.testing.assert_allclose(hopf_phase(y[:, 0], single), 0.3666895574, rtol=0, atol=1e-10)


def test_asymptotic_phase_advances_evenly_off_the_cycle():
    y0 = jnp.array([[0.05], [0.9]])
    times = np.linspace(0.0, 0.9, 7)
    along = lambda t: hopf_phase(HopfNetwork().unit_flow(UNIT, t)(y0), UNIT)[0]
    phase = jax.jit(jax.vmap(along))(jnp.asarray(times))
    np.testing.assert_allclose(np.unwrap(phase), phase[0] + 2.76 * times, rtol=0, atol=1e-12)


def test_asymptotic_phase_without_a_cycle_is_nan_with_finite_gradient():
    p = HopfParams([0.4, -0.4, 0.4], [3.0, 3.0, 3.0])
    y = jnp.array([[0.5, 0.5, 0.0], [0.1, 0.1, 0.0]])
    phase = hopf_phase(y, p)
    assert np.isnan(phase).tolist() == [False, True, True]
    total = lambda y, p: jnp.nansum(hopf_phase(y, p))
    slopes = jax.jit(jax.grad(total, argnums=(0, 1)))(y, p)
    assert all(np.isfinite(x).all() for x in jax.tree.leaves(slopes))


def test_precisions_trace_once_batch_and_gradient():
    traces = []

    def measure(x, p):
        first, second = planar_phase(x), analytic_phase(x[:, 0])
        times = jnp.arange(x.shape[0]).astype(x.dtype)
        frequency = mean_frequency(first.phase, times)
        return (first, second, frequency, hopf_phase(x[0], p))

    @jax.jit
    def everything(xs, p):
        traces.append(p)
        total = lambda x: sum(jnp.sum(leaf) for leaf in jax.tree.leaves(measure(x, p)))
        return jax.vmap(measure, in_axes=(0, None))(xs, p), jax.grad(total)(xs[0])

    results = {}
    for dtype in (jnp.float64, jnp.float32):
        for scale in (1.0, 2.0):
            angle = 0.9 * np.arange(40) + 0.2
            x = scale * np.stack([np.cos(angle), np.sin(angle)], axis=1)[..., None]
            p = HopfParams(*(jnp.asarray([v], dtype) for v in (0.4, 3.0)))
            out = everything(jnp.asarray([x, 2 * x], dtype), p)
            assert all(leaf.dtype == dtype for leaf in jax.tree.leaves(out))
            results[dtype, scale] = out
    assert len(traces) == 2
    jax.tree.map(
        lambda a, b: np.testing.assert_allclose(a, b, rtol=1e-4, atol=2e-3),
        results[jnp.float32, 2.0],
        results[jnp.float64, 2.0],
    )


def test_gradients_against_central_differences():
    rng = np.random.default_rng(2)
    angle = 0.8 * np.arange(30)
    x = jnp.asarray(
        np.stack([np.cos(angle), np.sin(angle)], axis=1) + 0.1 * rng.normal(size=(30, 2))
    )
    way = jnp.asarray(rng.normal(size=x.shape))
    weights = jnp.asarray(rng.normal(size=30))

    @jax.jit
    def measure(x):
        planar, hilbert = planar_phase(x), analytic_phase(x[:, 1])
        return (
            weights @ planar.phase
            + weights @ planar.amplitude
            + weights @ hilbert.phase
            + weights @ hilbert.amplitude
            + mean_frequency(planar.phase, jnp.arange(30.0))
        )

    h = 1e-5
    central = (measure(x + h * way) - measure(x - h * way)) / (2 * h)
    np.testing.assert_allclose(jnp.sum(jax.jit(jax.grad(measure))(x) * way), central, rtol=1e-7)


@pytest.mark.usefixtures("user_errors")
def test_messages():
    with pytest.raises(ValueError, match=r"`states` must have shape \(time, 2, \*node\)"):
        planar_phase(jnp.ones((5, 3)))
    with pytest.raises(TypeError, match="`values` must hold real floating-point"):
        analytic_phase(jnp.ones(4, complex))
    with pytest.raises(ValueError, match="`times` must have shape"):
        mean_frequency(jnp.ones(5), jnp.ones(4))
    with pytest.raises(ValueError, match="`times` must be strictly increasing"):
        mean_frequency(jnp.ones(3), jnp.array([0.0, 1.0, 1.0]))
    with pytest.raises(ValueError, match="`y` must have shape"):
        hopf_phase(jnp.ones((2, 2)), UNIT)
