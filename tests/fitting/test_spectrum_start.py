"""Start values from the spectrum: exact tones, the frequency bound, simulations, recordings."""

import functools
import importlib.resources

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import default_frequencies, spectrum_start


TURN = 2 * np.pi
INTERVAL = 0.1


@functools.partial(jax.jit, static_argnames=("num_steps", "records"))
def simulate(growth, noise, key, *, num_steps, records):
    """Record x of dz = [(a + i 2 pi) z - |z|^2 z] dt + s (dWx + i dWy); `(time, case, record)`.

    A step of half the interval: exact flow of the drift, which has a closed form, then exact noise.
    """
    h = INTERVAL / 2
    a, s = growth[:, None], noise[:, None]
    grown = jnp.exp(2 * a * h)
    c, d = np.cos(TURN * h), np.sin(TURN * h)

    def step(z, key):
        x, y = z
        shrink = jnp.sqrt(grown / (1 + (x**2 + y**2) * (grown - 1) / a))
        kick = s[None] * jnp.sqrt(h) * jax.random.normal(key, (2, *x.shape))
        moved = jnp.stack([shrink * (c * x - d * y), shrink * (d * x + c * y)])
        return moved + kick, x

    # 60 time units to forget the start: three times the longest coherence time of the cases.
    burn = 1200
    z = jnp.full((2, growth.shape[0], records), 0.2)
    _, x = jax.lax.scan(step, z, jax.random.split(key, burn + 2 * num_steps))
    return x[burn::2]


def damage(x, *, noise, missing, seed=0):
    """Add white measurement noise (in units of each channel's deviation) and take samples away."""
    x = np.asarray(x).reshape(x.shape[0], -1)
    rng = np.random.default_rng(seed)
    mask = rng.random(x.shape) >= missing
    return np.where(mask, x + noise * x.std(0) * rng.normal(size=x.shape), np.nan), mask


def read(x, *, noise=0.0, missing=0.0):
    """Start values of simulated records, each field `(case, record)`."""
    values, mask = damage(x, noise=noise, missing=missing)
    times = np.arange(x.shape[0]) * INTERVAL
    w = np.asarray(default_frequencies(times))
    start = spectrum_start(times, values, mask, frequencies=w[(w > TURN / 2) & (w < 2 * TURN)])
    return jax.tree.map(lambda v: np.asarray(v).reshape(x.shape[1:]), start)


@pytest.fixture(scope="module")
def tone():
    rng = np.random.default_rng(0)
    times = np.sort(rng.uniform(2.0, 42.0, 300))
    values = 1.0 + 2.0 * np.cos(5.0 * (times - times[0])[:, None] + np.array([0.4, -2.0]))
    mask = rng.random(values.shape) > 0.3
    return times, np.where(mask, values, np.nan), mask, np.linspace(3.0, 8.0, 120)


def test_exact_tone_with_gaps_and_irregular_times(tone):
    times, values, mask, w = tone
    start = spectrum_start(times, values, mask, frequencies=w)
    np.testing.assert_allclose(start.frequency, 5.0, rtol=1e-9)
    np.testing.assert_allclose(start.amplitude, 2.0, rtol=1e-9)
    np.testing.assert_allclose(start.phase, [0.4, -2.0], rtol=1e-7)
    np.testing.assert_allclose(start.offset, 1.0, rtol=1e-9)
    np.testing.assert_allclose(start.growth, 4.0, rtol=1e-6)
    np.testing.assert_allclose(start.envelope_variation, 0.0, atol=1e-6)
    # A line without width is as wide as the record resolves.
    np.testing.assert_allclose(start.half_width, 1 / (times[-1] - times[0]), rtol=1e-9)
    # The sampled variance of a tone on few irregular samples differs from A^2 / 2.
    np.testing.assert_allclose(start.share, 1.0, rtol=0.1)
    assert bool(jnp.all(start.ok))


def test_what_cannot_be_read_is_not_ok(tone):
    times, values, mask, w = tone
    none = spectrum_start(times, np.full_like(values, np.nan), np.zeros_like(mask), frequencies=w)
    constant = spectrum_start(times, np.full_like(values, 3.0), mask, frequencies=w)
    for start in (none, constant):
        assert not bool(jnp.any(start.ok))
        assert all(bool(jnp.all(jnp.isfinite(x))) for x in jax.tree.leaves(start))
    # The peak of the tone lies outside the band, so the highest power is at its edge.
    edge = spectrum_start(times, values, mask, frequencies=np.linspace(5.1, 8.0, 120))
    assert not bool(jnp.any(edge.ok))
    # A dozen samples, far apart, hold no two neighbouring periods.
    few = np.zeros_like(mask)
    few[::25] = True
    assert not bool(jnp.any(spectrum_start(times, values, few, frequencies=w).ok))
    # A sample that is observed and not finite is never a success.
    broken = values.copy()
    broken[np.flatnonzero(mask[:, 0])[3], 0] = np.inf
    start = spectrum_start(times, broken, mask, frequencies=w)
    np.testing.assert_array_equal(start.ok, [False, True])


def test_masked_entries_change_no_bit_and_gradients(tone):
    times, values, mask, w = tone
    rng = np.random.default_rng(5)
    values = np.where(mask, values, 0) + 0.3 * rng.normal(size=values.shape)

    @jax.jit
    @functools.partial(jax.value_and_grad, has_aux=True)
    def both(v, m):
        start = spectrum_start(times, v, m, frequencies=w)
        smooth = (start.frequency, start.amplitude, start.phase, start.growth, start.share)
        return (1e3 * smooth[0] + sum(smooth[1:])).sum(), start

    clean = both(values, mask)
    dirty = both(np.where(mask, values, np.nan), mask)
    for a, b in zip(jax.tree.leaves(clean), jax.tree.leaves(dirty), strict=True):
        np.testing.assert_array_equal(a, b)
    gradient = np.asarray(clean[1])
    assert np.all(gradient[~mask] == 0) and np.all(gradient[mask] != 0)
    direction, h = rng.normal(size=values.shape), 1e-5
    ends = [both(values + sign * h * direction, mask)[0][0] for sign in (1, -1)]
    expected = (ends[0] - ends[1]) / (2 * h)
    np.testing.assert_allclose((gradient * direction).sum(), expected, rtol=1e-4)
    # A channel without samples must not poison the gradient of the others.
    only = mask & np.array([True, False])
    assert np.all(np.isfinite(both(values, only)[1]))


def test_float32_vmap_and_retrace(tone):
    times, values, mask, w = tone
    traces = []

    @jax.jit
    def batched(t, v, m, w):
        traces.append(1)
        return jax.vmap(lambda v: spectrum_start(t, v, m, frequencies=w))(v)

    t, v, w = (jnp.asarray(x, jnp.float32) for x in (times, values, w))
    for scale in (1.0, 3.0):
        start = batched(t, jnp.stack([v, jnp.float32(scale) * v]), mask, w)
        assert all(x.dtype in (jnp.float32, jnp.bool_) for x in jax.tree.leaves(start))
        np.testing.assert_allclose(start.frequency, 5.0, rtol=1e-5)
        np.testing.assert_allclose(start.amplitude[1], 2.0 * scale, rtol=1e-4)
        np.testing.assert_allclose(start.phase[0], [0.4, -2.0], atol=1e-3)
        np.testing.assert_allclose(start.envelope_variation, 0, atol=1e-4)
        assert bool(jnp.all(start.ok))
    assert len(traces) == 1


@pytest.mark.long
def test_frequency_reaches_the_bound():
    # Cramer-Rao bound for a tone with unknown phase and amplitude, per sample squared:
    # 24 s^2 / (A^2 n (n^2 - 1)), and 1.39779392e-05 without its approximation for this phase.
    # Rife & Boorstyn 1974; Kay 1993; from memory.
    amplitude, s, n, w, phase, draws = 1.3, 0.5, 64, 0.9, 0.4, 2000
    approximate, exact = 24 * s**2 / (amplitude**2 * n * (n**2 - 1)), 1.39779392e-05
    assert abs(approximate / exact - 1) < 0.04
    times = np.arange(float(n))
    noise = np.random.default_rng(3).normal(0, s, (n, draws))
    values = amplitude * np.cos(w * times + phase)[:, None] + noise
    start = spectrum_start(
        times, values, np.ones((n, draws), bool), frequencies=np.linspace(0.5, 1.3, 60)
    )
    error = np.asarray(start.frequency) - w
    assert abs(error.mean()) < 4 * np.sqrt(exact / draws)
    # Relative sampling error of a variance: sqrt(2 / draws).
    assert abs((error**2).mean() / exact - 1) < 4 * np.sqrt(2 / draws)


# Measured over 200 records a case, no source; the limits allow 50 records their scatter.
CASES = {  # growth: (noise, most wrong signs at 60 periods)
    -0.4: (0.1, 0.16),
    -0.2: (0.1, 0.22),
    -0.05: (0.03, 0.24),
    0.2: (0.05, 0.02),
    0.5: (0.1, 0.02),
}


@pytest.mark.long
def test_sign_of_growth_on_simulations():
    growth = jnp.array(list(CASES))
    noise = jnp.array([c[0] for c in CASES.values()])
    x = simulate(growth, noise, jax.random.key(0), num_steps=600, records=50)
    start = read(x, noise=0.5, missing=0.3)
    wrong = (np.sign(start.growth) != np.sign(growth)[:, None]).mean(1)
    assert np.all(wrong <= [c[1] for c in CASES.values()]), wrong
    assert start.ok.all()
    # The cubic term widens a damped line: with the mean of |z|^2, which is s^2 / width, in
    # place of |z|^2 in a Gaussian closure, width = |a| + 2 s^2 / width.
    a, s = np.abs(growth[:2]), np.asarray(noise[:2])
    width = (a + np.sqrt(a**2 + 8 * s**2)) / 2
    np.testing.assert_allclose(np.median(start.half_width[:2], 1), width, rtol=0.2)
    np.testing.assert_allclose(np.median(start.growth[3:], 1), [0.2, 0.5], rtol=0.1)
    # Noise of a quarter of the variance leaves a share of 0.8.
    np.testing.assert_allclose(np.median(start.share, 1), 0.8, atol=0.06)
    # The line's centre: sqrt(2 half_width / span) = 0.115 and 0.082 for the two widest.
    error = np.sqrt(((start.frequency - TURN) ** 2).mean(1))
    assert np.all(error < [0.2, 0.15, 0.1, 0.03, 0.04]), error


@pytest.mark.long
@pytest.mark.parametrize(("noise", "missing"), [(0.0, 0.0), (0.5, 0.3)])
@pytest.mark.parametrize("num_steps", [300, 600, 1000])
def test_error_rates_of_the_docstring(num_steps, noise, missing):
    growth = jnp.array([-0.4, -0.2, -0.05, -0.05, 0.2, 0.2, 0.5, 0.5])
    s = jnp.array([0.1, 0.1, 0.03, 0.1, 0.1, 0.05, 0.1, 0.3])
    x = simulate(growth, s, jax.random.key(num_steps), num_steps=num_steps, records=200)
    start = read(x, noise=noise, missing=missing)
    wrong = (np.sign(start.growth) != np.sign(growth)[:, None]).mean(1)
    # Percent in the docstring; the limit is three standard errors of 200 records (and rounding).
    table = {
        (300, 0.0): [11, 10, 20, 20, 11, 0, 0, 9],
        (300, 0.5): [23, 21, 25, 26, 13, 1, 0, 10],
        (600, 0.0): [2, 4, 5, 10, 10, 0, 0, 5],
        (600, 0.5): [10, 12, 6, 13, 13, 0, 0, 10],
        (1000, 0.0): [1, 0, 2, 2, 7, 0, 0, 4],
        (1000, 0.5): [2, 0, 4, 3, 8, 0, 0, 5],
    }
    expected = np.array(table[num_steps, noise]) / 100
    limit = expected + 3 * np.sqrt((expected + 0.01) / 200)
    assert np.all(wrong <= limit), wrong


def folder(package):
    return importlib.resources.files(package)


@pytest.mark.long
def test_sunspot_period():
    # The yearly sunspot numbers return after about 11 years; 10.2 to 11.6 by common practice.
    from statsmodels.datasets import sunspots

    year, number = np.asarray(sunspots.load_pandas().data).T
    start = spectrum_start(year, number[:, None], np.ones((len(year), 1), bool))
    period = TURN / start.frequency[0]
    assert bool(start.ok[0])
    assert 10.2 < period < 11.6, period


@pytest.mark.long
def test_sea_surface_temperature_has_a_year():
    # Columns: year, month, then temperature and anomaly of the regions 1+2, 3, 4, 3.4. The annual
    # cycle is weak in region 4, which is left out.
    with (folder("pywt") / "data" / "sst_nino3.npz").open("rb") as file:
        data = np.load(file)["data"]
    times = data[:, 0] + (data[:, 1] - 1) / 12
    values = data[:, [2, 4, 8]]
    start = spectrum_start(times, values, np.ones_like(values, bool))
    assert bool(jnp.all(start.ok))
    np.testing.assert_allclose(TURN / start.frequency, 1.0, rtol=0.01)


@pytest.mark.long
@pytest.mark.parametrize("name", ["sf-temps.csv", "seattle-temps.csv"])
def test_air_temperature_has_a_day(name):
    # Hourly, one hour of the year missing; slow drift is kept out by the band of frequencies.
    table = np.genfromtxt(
        str(folder("vega_datasets") / "_data" / name),
        delimiter=",",
        names=True,
        dtype=None,
        encoding="utf-8",
    )
    stamps = np.array([d.replace("/", "-") for d in table["date"]], "datetime64[m]")
    hours = (stamps - stamps[0]) / np.timedelta64(60, "m")
    values = table["temp"].astype(float)[:, None]
    w = np.asarray(default_frequencies(hours))
    band = w[(w > TURN / 48) & (w < TURN / 16)]
    start = spectrum_start(hours, values, np.ones_like(values, bool), frequencies=band)
    assert bool(start.ok[0])
    np.testing.assert_allclose(TURN / start.frequency[0], 24.0, rtol=0.01)


@pytest.mark.parametrize(
    ("change", "error", "words"),
    [
        ({"values": np.ones(5)}, ValueError, r"`values` must have shape \(time, channel\)"),
        ({"mask": np.ones((5, 2))}, TypeError, "`mask` must be boolean"),
        ({"frequencies": np.array([1.0, 2.0])}, ValueError, "`frequencies` must hold at least 3"),
        ({"frequencies": np.array([1.0, 3.0, 2.0])}, ValueError, "`frequencies` must be increas"),
        ({"frequencies": np.ones((3, 1))}, ValueError, "`frequencies` must have shape"),
        ({"frequencies": np.ones(3, np.float32)}, TypeError, "`frequencies` is float32"),
    ],
)
def test_errors(user_errors, change, error, words):
    good = {
        "times": np.arange(5.0),
        "values": np.ones((5, 2)),
        "mask": np.ones((5, 2), bool),
        "frequencies": np.array([1.0, 2.0, 3.0]),
    }
    arguments = good | change
    w = arguments.pop("frequencies")
    with pytest.raises(error, match=words):
        spectrum_start(**arguments, frequencies=w)


def test_default_frequencies_need_known_times(user_errors):
    with pytest.raises(TypeError, match="outside `jit`"):
        jax.jit(spectrum_start)(jnp.arange(5.0), jnp.ones((5, 1)), jnp.ones((5, 1), bool))
