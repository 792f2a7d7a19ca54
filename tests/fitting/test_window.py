"""The window rule against the profile loss of a tone, and the growing lengths."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import longest_window, window_lengths


def profile_loss(frequency, seconds):
    """Squared error of a noise-free 1 Hz tone, amplitude and phase refitted at `frequency` (Hz)."""
    t = np.arange(0, seconds, 0.02)
    x = np.cos(2 * np.pi * t + 0.7)
    angle = 2 * np.pi * frequency * t
    design = np.stack([np.cos(angle), np.sin(angle)], 1)
    fit = design @ np.linalg.lstsq(design, x, rcond=None)[0]
    return ((x - fit) ** 2).mean() / (x**2).mean()


# Measured, no source: the first maximum of this loss for windows of 60, 20 and 5 s.
@pytest.mark.parametrize(("seconds", "measured"), [(60.0, 0.017), (20.0, 0.050), (5.0, 0.200)])
def test_first_maximum_and_descent_inside_the_rule(seconds, measured):
    errors = np.linspace(0, 1.6 / seconds, 161)
    loss = np.array([profile_loss(1 + e, seconds) for e in errors])
    first = errors[np.flatnonzero(np.diff(loss) < 0)[0]]
    assert abs(first * seconds - 1) < 0.15
    assert abs(first / measured - 1) < 0.15
    # Inside the rule the loss rises all the way from the true frequency.
    allowed = np.asarray(longest_window(2 * np.pi * errors[1:])) >= seconds
    assert allowed.sum() >= 45
    assert np.all(np.diff(loss)[: allowed.sum()] > 0)
    # The closed form of the docstring, in angular units.
    d = 2 * np.pi * errors[1:]
    expected = 1 - (np.sin(d * seconds / 2) / (d * seconds / 2)) ** 2
    np.testing.assert_allclose(loss[1:], expected, atol=0.04)


def test_longest_window_units_shapes_and_dtypes():
    # 0.5 cycles: an error of 2 pi / 10 rad per time unit turns half a cycle in 5 time units.
    np.testing.assert_allclose(longest_window(2 * np.pi / 10), 5.0, rtol=1e-12)
    np.testing.assert_allclose(jax.jit(longest_window)(-2 * jnp.pi / 10), 5.0, rtol=1e-12)
    assert longest_window(0.0) == jnp.inf
    assert longest_window(jnp.ones((2, 3), jnp.float32)).dtype == jnp.float32
    assert jax.vmap(longest_window)(jnp.ones(4)).shape == (4,)
    np.testing.assert_allclose(jax.grad(longest_window)(2.0), -np.pi / 4, rtol=1e-12)


def test_window_lengths():
    assert window_lengths(100, first=10) == (10, 20, 40, 80, 100)
    assert window_lengths(100, first=25, last=50) == (25, 50)
    assert window_lengths(100, first=100) == (100,)
    assert window_lengths(8, first=1, factor=1.01) == tuple(range(1, 9))
    assert window_lengths(1000, first=30, factor=3) == (30, 90, 270, 810, 1000)


def test_errors(user_errors):
    with pytest.raises(ValueError, match="`frequency_error` must be finite; got nan"):
        longest_window(float("nan"))
    with pytest.raises(ValueError, match="first <= last <= num_steps; got first=20"):
        window_lengths(10, first=20)
    with pytest.raises(ValueError, match="got first=2, last=11"):
        window_lengths(10, first=2, last=11)
    with pytest.raises(ValueError, match="`factor` must be finite and above 1"):
        window_lengths(10, first=2, factor=1.0)
    with pytest.raises(TypeError, match="`first` must be a Python int"):
        window_lengths(10, first=2.0)  # pyright: ignore[reportArgumentType]
