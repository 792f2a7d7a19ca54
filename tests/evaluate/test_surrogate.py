import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.evaluate import phase_surrogate


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
