"""The least-squares periodogram against scipy, closed forms and recordings with gaps."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import default_frequencies, periodogram


@pytest.fixture(scope="module")
def compiled():
    return jax.jit(periodogram)


@pytest.fixture(scope="module")
def with_gradient():
    """Compile a smooth function of all fields, and its gradient by values and frequencies."""

    def loss(times, values, mask, frequencies):
        p = periodogram(times, values, mask, frequencies)
        # The offsets are near 5: a small sum keeps the digits of finite differences.
        small = jnp.cos(p.phase) + p.offset - 5
        return (p.power**2).sum() + p.amplitude.sum() + small.sum()

    return jax.jit(jax.value_and_grad(loss, argnums=(1, 3)))


@pytest.fixture(scope="module")
def irregular():
    rng = np.random.default_rng(0)
    times = np.sort(rng.uniform(3.0, 33.0, 120))
    values = rng.normal(size=(120, 3)) + 5.0 + np.cos(2.2 * times)[:, None]
    mask = rng.random((120, 3)) > 0.3
    return times, values, mask, np.linspace(0.3, 9.0, 40)


def test_equals_scipy(compiled, irregular):
    from scipy.signal import lombscargle

    times, values, mask, w = irregular
    got = compiled(times, values, mask, w)
    for c in range(3):
        m = mask[:, c]
        expected = lombscargle(times[m], values[m, c], w, floating_mean=True, normalize=True)
        np.testing.assert_allclose(got.power[:, c], expected, rtol=0, atol=1e-9)


def test_equals_least_squares(compiled, irregular):
    times, values, mask, w = irregular
    got = compiled(times, values, mask, w)
    for c in range(3):
        m = mask[:, c]
        angle = w[7] * (times[m] - times[0])
        design = np.stack([np.ones(m.sum()), np.cos(angle), np.sin(angle)], 1)
        offset, a, b = np.linalg.lstsq(design, values[m, c], rcond=None)[0]
        np.testing.assert_allclose(got.offset[7, c], offset, rtol=1e-10)
        np.testing.assert_allclose(got.amplitude[7, c], np.hypot(a, b), rtol=1e-9)
        np.testing.assert_allclose(got.phase[7, c], np.arctan2(-b, a), rtol=1e-9)


def test_tone_on_a_fourier_bin(compiled):
    # Closed form: power n v / 2 is A^2 n / 4 for a tone of n whole-turn samples, v = A^2 / 2.
    n, amplitude = 120, 1.7
    times = np.arange(n) * 0.25
    w = 2 * np.pi * np.arange(1, 41) / (n * 0.25)
    values = np.repeat((4.0 + amplitude * np.cos(w[8] * times + 0.3))[:, None], 3, axis=1)
    got = compiled(times, values, np.ones((n, 3), bool), w)
    classical = got.power[:, 0] * n * values[:, 0].var() / 2
    np.testing.assert_allclose(classical[8], amplitude**2 * n / 4, rtol=1e-12)
    np.testing.assert_allclose(np.delete(np.asarray(classical), 8), 0, atol=1e-10)
    np.testing.assert_allclose(got.amplitude[8], amplitude, rtol=1e-12)
    np.testing.assert_allclose(got.phase[8], 0.3, rtol=1e-12)
    np.testing.assert_allclose(got.offset[8], 4.0, rtol=1e-12)


def test_peak_and_total_of_a_tone():
    # 1.7 cos on the bin 20 of 256 samples at 50 a time unit: A^2 n / 4 (Scargle 1982), the peak
    # A^2 n / (2 * 50) of a one-sided density and the power A^2 / 2 (Parseval); closed forms.
    times = np.arange(256) / 50
    values = 1.7 * np.cos(2 * np.pi * 20 * np.arange(256) / 256)[:, None]
    got = periodogram(times, values, np.ones((256, 1), bool), 2 * np.pi * 50 / 256 * np.array([20]))
    square, power = got.amplitude[0, 0] ** 2, got.power[0, 0] * values.var()
    np.testing.assert_allclose(power * 256 / 2, 184.96, rtol=0, atol=1e-9)
    np.testing.assert_allclose([square * 256 / 100, power], [7.3984, 1.445], rtol=0, atol=1e-10)


def test_white_noise_power_is_beta_distributed(compiled):
    # Closed form: in white noise the power is Beta(1, (n - 3) / 2), of mean 2 / (n - 1).
    rng = np.random.default_rng(1)
    values = rng.normal(size=(40, 400))
    got = compiled(np.arange(40.0), values, np.ones((40, 400), bool), np.array([0.9]))
    power = np.asarray(got.power)
    deviation = 2 / 39 / np.sqrt(power.size)
    assert abs(power.mean() - 2 / 39) < 4 * deviation
    assert abs((power > 0.15).mean() - 0.85**18.5) < 4 * np.sqrt(0.05 * 0.95 / power.size)


def test_singular_frequencies():
    # At 0 there is only the constant; at the Nyquist frequency the sine vanishes on the grid.
    times = np.arange(32.0)
    values = (-1.0) ** np.arange(32)[:, None] * 2.0 + 1.0
    got = periodogram(times, values, np.ones((32, 1), bool), np.array([0.0, np.pi]))
    np.testing.assert_allclose(got.power[:, 0], [0.0, 1.0], atol=1e-12)
    np.testing.assert_allclose(got.amplitude[:, 0], [0.0, 2.0], atol=1e-12)
    np.testing.assert_allclose(got.offset[:, 0], 1.0, atol=1e-12)


def test_masked_entries_change_no_bit(with_gradient, irregular):
    times, values, mask, w = irregular
    clean = with_gradient(times, values, mask, w)
    dirty = with_gradient(times, np.where(mask, values, np.nan), mask, w)
    for a, b in zip(jax.tree.leaves(clean), jax.tree.leaves(dirty), strict=True):
        np.testing.assert_array_equal(a, b)
    gradient = np.asarray(clean[1][0])
    assert np.all(gradient[~mask] == 0) and np.all(gradient[mask] != 0)


def test_channel_without_samples(compiled, with_gradient, irregular):
    times, values, mask, w = irregular
    values, mask = values.copy(), mask.copy()
    values[:, 1], mask[:, 1], values[:, 2] = np.nan, False, 2.0
    got = compiled(times, values, mask, w)
    np.testing.assert_array_equal(got.power[:, 1:], 0)
    np.testing.assert_array_equal(got.amplitude[:, 1:], 0)
    for gradient in with_gradient(times, values, mask, w)[1]:
        assert np.all(np.isfinite(gradient))


def test_gradient_is_the_central_difference(with_gradient, irregular):
    times, values, mask, w = irregular
    gradients = with_gradient(times, values, mask, w)[1]
    rng, h = np.random.default_rng(2), 1e-5
    dv, dw = rng.normal(size=values.shape), rng.normal(size=w.shape)
    for step_v, step_w, gradient in ((dv, 0 * dw, gradients[0]), (0 * dv, dw, gradients[1])):
        ahead, _ = with_gradient(times, values + h * step_v, mask, w + h * step_w)
        behind, _ = with_gradient(times, values - h * step_v, mask, w - h * step_w)
        direction = step_v if gradient.ndim == 2 else step_w
        expected = (ahead - behind) / (2 * h)
        np.testing.assert_allclose((gradient * direction).sum(), expected, rtol=1e-6)


def test_float32_vmap_and_retrace(irregular):
    times, values, mask, w = irregular
    exact = periodogram(times, values, mask, w)
    traces = []

    @jax.jit
    def batched(t, v, m, w):
        traces.append(1)
        return jax.vmap(periodogram, in_axes=(None, 0, 0, None))(t, v, m, w)

    single = [jnp.asarray(x, jnp.float32) for x in (times, values, w)]
    for scale in (1.0, 2.0):
        v = jnp.stack([single[1], jnp.float32(scale) * single[1]])
        got = batched(single[0], v, jnp.stack([mask, mask]), single[2])
        assert got.power.dtype == jnp.float32
        np.testing.assert_allclose(got.power[0], exact.power, atol=1e-4)
        np.testing.assert_allclose(got.amplitude[1], scale * exact.amplitude, atol=1e-3)
    assert len(traces) == 1


def test_late_times_keep_float32_precision():
    # A clock that does not start at 0 must not cost the digits of the angle.
    times = np.arange(64.0) + 4096.0
    values = np.cos(0.5 * (times - times[0]) + 1.0)[:, None]
    f32 = [jnp.asarray(x, jnp.float32) for x in (times, values, np.array([0.5]))]
    got = periodogram(f32[0], f32[1], jnp.ones((64, 1), bool), f32[2])
    np.testing.assert_allclose(got.phase[0, 0], 1.0, atol=1e-5)


def test_default_frequencies():
    times = np.arange(101) * 0.1
    w = np.asarray(default_frequencies(times, oversample=4))
    step = 2 * np.pi / 10.0
    np.testing.assert_allclose(w[0], step, rtol=1e-12)
    np.testing.assert_allclose(np.diff(w), step / 4, rtol=1e-9)
    np.testing.assert_allclose(w[-1], np.pi / 0.1, rtol=1e-12)
    assert default_frequencies(times.astype(np.float32)).dtype == jnp.float32
    # Missing rows leave the median interval, and with it the highest frequency, as they are.
    kept = np.delete(times, [5, 6, 40])
    np.testing.assert_allclose(default_frequencies(kept)[-1], np.pi / 0.1, rtol=1e-2)


@pytest.mark.parametrize(
    ("change", "error", "words"),
    [
        ({"values": np.ones(5)}, ValueError, r"`values` must have shape \(time, channel\)"),
        ({"mask": np.ones((5, 1), bool)}, ValueError, "`mask` must have shape"),
        ({"mask": np.ones((5, 2))}, TypeError, "`mask` must be boolean.*astype"),
        ({"values": np.ones((5, 2), int)}, TypeError, "`values` must hold real floating"),
        ({"values": np.ones((5, 2), np.float32)}, TypeError, "`values` is float32"),
        ({"times": np.ones((5, 1))}, ValueError, r"`times` must have shape \(time,\)"),
        ({"times": np.array([0.0, 1, np.nan, 3, 4])}, ValueError, "`times` must be finite"),
        ({"frequencies": np.array([-1.0])}, ValueError, "`frequencies` must be 0 or more"),
        ({"frequencies": np.ones((1, 1))}, ValueError, "`frequencies` must have shape"),
    ],
)
def test_errors(user_errors, change, error, words):
    good = {
        "times": np.arange(5.0),
        "values": np.ones((5, 2)),
        "mask": np.ones((5, 2), bool),
        "frequencies": np.array([1.0]),
    }
    with pytest.raises(error, match=words):
        periodogram(**(good | change))


def test_default_frequencies_of_known_times_inside_jit():
    times = np.arange(5.0)
    inside = jax.jit(lambda x: x + default_frequencies(times))(0.0)
    np.testing.assert_array_equal(inside, default_frequencies(times))


def test_default_frequencies_errors(user_errors):
    with pytest.raises(TypeError, match="outside `jit`"):
        jax.jit(default_frequencies)(jnp.arange(5.0))
    with pytest.raises(ValueError, match="at least 3 samples; got 2"):
        default_frequencies(jnp.arange(2.0))
    with pytest.raises(ValueError, match="`times` must be increasing"):
        default_frequencies(jnp.array([0.0, 2.0, 1.0]))
    with pytest.raises(ValueError, match="`oversample` must be at least 1"):
        default_frequencies(jnp.arange(5.0), oversample=0)
