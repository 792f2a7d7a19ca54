import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import amplitude_adjusted_surrogate, phase_surrogate


VALUES = jnp.asarray(np.random.default_rng(1).normal(size=(64, 2))) + 3.0


def spectra(values):
    transform = np.fft.rfft(np.asarray(values), axis=0)
    return np.einsum("fi,fj->fij", transform, transform.conj())


@pytest.mark.parametrize("num", [63, 64])
def test_periodogram_stays_and_phases_do_not(num):
    values = VALUES[:num]
    out = phase_surrogate(values, key=jax.random.key(0))
    np.testing.assert_allclose(spectra(out), spectra(values), rtol=1e-12, atol=1e-9)
    power = lambda v: np.abs(np.fft.rfft(np.asarray(v), axis=0)) ** 2
    np.testing.assert_allclose(power(out), power(values), rtol=1e-12)
    np.testing.assert_allclose(out.mean(axis=0), values.mean(axis=0), rtol=1e-13)
    assert jnp.max(jnp.abs(out - values)) > 0.5


def test_channels_apart_lose_their_relation():
    values = jnp.concatenate([VALUES, VALUES], axis=1)
    together = phase_surrogate(values, key=jax.random.key(1))
    np.testing.assert_allclose(together[:, :2], together[:, 2:], rtol=1e-12)
    apart = phase_surrogate(values, key=jax.random.key(1), shared_phases=False)
    assert jnp.max(jnp.abs(apart[:, :2] - apart[:, 2:])) > 0.5
    power = lambda v: np.abs(np.fft.rfft(np.asarray(v), axis=0)) ** 2
    np.testing.assert_allclose(power(apart), power(values), rtol=1e-12)


def test_jit_vmap_grad_and_float32():
    keys = jax.random.split(jax.random.key(2), 3)
    draw = jax.jit(jax.vmap(lambda k, v: phase_surrogate(v, key=k), in_axes=(0, None)))
    out = draw(keys, VALUES.astype(jnp.float32))
    assert out.dtype == jnp.float32
    assert jnp.max(jnp.abs(out[0] - out[1])) > 0.5
    # Parseval: the sum of squares stays, hence its slope is 2 values.
    total = lambda v: jnp.sum(phase_surrogate(v, key=keys[0]) ** 2)
    np.testing.assert_allclose(jax.grad(total)(VALUES), 2 * VALUES, rtol=1e-10)


def test_errors_name_what_is_wrong(user_errors):
    with pytest.raises(ValueError, match=r"`values` must be finite.*5, 1"):
        phase_surrogate(VALUES.at[5, 1].set(jnp.nan), key=jax.random.key(0))
    with pytest.raises(ValueError, match="`values` must have shape"):
        phase_surrogate(VALUES[:, 0], key=jax.random.key(0))
    with pytest.raises(TypeError, match="`values` must hold real floating"):
        phase_surrogate(VALUES.astype(int), key=jax.random.key(0))


# Skewed values with a rhythm, as counts of light are.
COUNTS = np.exp(np.sin(0.4 * np.arange(512)) + 0.3 * np.random.default_rng(2).normal(size=512))


def test_adjusted_surrogate_keeps_values_and_nearly_the_spectrum():
    # Schreiber & Schmitz 1996: sorted values identical; relative error of the spectrum small.
    # With 512 points and 200 iterations a run apart was off by 1.3e-2.
    values = jnp.asarray(np.stack([COUNTS, np.log(COUNTS)], axis=1))
    out = amplitude_adjusted_surrogate(values, key=jax.random.key(0), iterations=200)
    np.testing.assert_array_equal(np.sort(out, axis=0), np.sort(values, axis=0))
    amplitude = lambda v: np.abs(np.fft.rfft(np.asarray(v), axis=0))[1:]
    error = np.linalg.norm(amplitude(out) - amplitude(values), axis=0)
    error /= np.linalg.norm(amplitude(values), axis=0)
    print("relative error of the spectrum:", error)
    assert np.all(error < 0.03)
    # A shuffle keeps the values too, but not the rhythm.
    shuffled = np.random.default_rng(0).permutation(np.asarray(values))
    worse = np.linalg.norm(amplitude(shuffled) - amplitude(values), axis=0)
    assert np.all(worse / np.linalg.norm(amplitude(values), axis=0) > 0.3)
    assert np.mean(np.asarray(out) == np.asarray(values)) < 0.1


def test_adjusted_surrogate_under_jit_vmap_and_grad():
    values = jnp.asarray(COUNTS[:15, None])  # an odd number; the other tests have an even one
    draw = lambda v, k: amplitude_adjusted_surrogate(v, key=k, iterations=5)
    keys = jax.random.split(jax.random.key(3), 2)

    @jax.jit
    def everything(v):
        many = jax.vmap(draw, (None, 0))(v, keys)
        return many, jax.grad(lambda v: jnp.sum(draw(v, keys[0]) ** 2))(v)

    many, slope = everything(values)
    assert np.any(many[0] != many[1])
    # A permutation: the sum of squares stays, hence its slope is 2 values.
    np.testing.assert_allclose(slope, 2 * values, rtol=1e-12)
    small, _ = everything(values.astype(jnp.float32))
    assert small.dtype == jnp.float32
    bad, _ = everything(values.at[3].set(jnp.nan))
    assert np.all(np.isnan(bad))


def test_adjusted_surrogate_of_values_all_equal():
    values = jnp.full((16, 1), 0.1)
    out = amplitude_adjusted_surrogate(values, key=jax.random.key(0), iterations=5)
    np.testing.assert_array_equal(out, values)


def test_errors_of_the_adjusted_surrogate_name_what_is_wrong(user_errors):
    with pytest.raises(ValueError, match=r"`values` must be finite.*5, 1"):
        amplitude_adjusted_surrogate(VALUES.at[5, 1].set(jnp.nan), key=jax.random.key(0))
    with pytest.raises(ValueError, match="`iterations` must be at least 1"):
        amplitude_adjusted_surrogate(VALUES, key=jax.random.key(0), iterations=0)
