import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.encoders import Network, decode
from oscillib.integrate import cut, gather, roll_windows
from oscillib.losses import continuity, reconstruction


KEY = jax.random.key(0)


def test_linear_map_and_hidden_layers_are_the_formula():
    x = jnp.array([0.3, -0.7, 1.1])
    for depth in (0, 2):
        network = Network(3, 2, width=4, depth=depth, key=KEY)
        layers = [(np.asarray(a.weight), np.asarray(a.bias)) for a in network.layers]
        assert [w.shape for w, _ in layers] == (
            [(2, 3)] if depth == 0 else [(4, 3), (4, 4), (2, 4)]
        )
        y = np.asarray(x)
        for w, b in layers[:-1]:
            y = np.tanh(w @ y + b)
        np.testing.assert_allclose(network(x), layers[-1][0] @ y + layers[-1][1], rtol=1e-14)
        assert (network.inputs, network.outputs) == (3, 2)


def test_zero_starts_at_zero_but_can_learn():
    network = Network(3, 2, depth=1, zero=True, key=KEY)
    x = jnp.ones(3)
    np.testing.assert_array_equal(network(x), 0)
    slope = jax.grad(lambda n: jnp.sum(n(x)))(network)
    assert jnp.all(slope.layers[-1].weight != 0)


def test_precision_is_that_of_the_weights():
    network = Network(3, 2, key=KEY, dtype=jnp.float32)
    assert network(jnp.ones(3, jnp.float32)).dtype == jnp.float32
    with pytest.raises(TypeError, match="`x` is float64 but `the weights` is float32"):
        network(jnp.ones(3))


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`depth` must be at least 0; got -1"):
        Network(3, 2, depth=-1, key=KEY)
    with pytest.raises(TypeError, match="`inputs` must be a Python int"):
        Network(3.0, 2, key=KEY)  # pyright: ignore[reportArgumentType]
    with pytest.raises(
        ValueError, match=r"`x` must have shape \(input,\) = \(3\); got shape \(4,\)"
    ):
        Network(3, 2, key=KEY)(jnp.ones(4))
    with pytest.raises(ValueError, match=r"4 entries of a state `y` of shape \(2, 2\); it takes 3"):
        decode(jnp.ones((2, 2)), Network(3, 5, key=KEY))


def turn(rate, h):
    """A step that is exact: a latent state that turns."""
    c, s = jnp.cos(rate * h), jnp.sin(rate * h)
    return lambda t, y: jnp.stack([c * y[0] - s * y[1], s * y[0] + c * y[1]])


def test_latent_windows_close_their_gaps_across_missing_samples():
    """With a decoder, windows are joined in the latent state, also where nothing is observed."""
    network = Network(2, 3, key=KEY)
    times = jnp.linspace(0.0, 1.2, 13)
    windows = cut(times, 4)
    read = jax.vmap(jax.vmap(decode, in_axes=(0, None)), in_axes=(0, None))
    angle = 6.0 * times
    path = jnp.stack([jnp.cos(angle), jnp.sin(angle)], axis=1)
    values = gather(jax.vmap(decode, in_axes=(0, None))(path, network), windows)
    mask = jnp.ones((13, 3), bool).at[3:10].set(False)  # both joints, samples 4 and 8, unseen
    seen = gather(mask, windows) & windows.owned[..., None]

    @jax.jit
    @jax.value_and_grad
    def loss(starts):
        rolled = roll_windows(turn, jnp.asarray(6.0), starts, windows)
        misfit = reconstruction(read(rolled.states, network), values, seen, scale=jnp.ones(3))
        return misfit + continuity(rolled.gaps, weight=2.0)

    truth = path[windows.index[:, 0]]
    least, slope = loss(truth)
    np.testing.assert_allclose(slope, 0, atol=1e-11)
    # Moved by d, the second window, of which nothing is seen, is held by its two latent gaps.
    value, pull = loss(truth.at[1].add(0.1))
    np.testing.assert_allclose(value - least, 2 * (0.1**2 + 0.1**2), rtol=1e-12)
    np.testing.assert_allclose(pull[1], 2 * 2 * 0.1, rtol=1e-12)
