import jax.numpy as jnp
import numpy as np

from oscillib.fitting._eigen import bounded_step, sizes, spectrum


def test_units_do_not_matter():
    matrix = jnp.array([[2.0, 0.3, -0.1], [0.3, 1.0, 0.2], [-0.1, 0.2, 3.0]])
    units = jnp.array([1e-3, 1.0, 1e4])
    a, b = spectrum(matrix), spectrum(matrix * units[:, None] * units[None, :])
    np.testing.assert_allclose(a.values, b.values, rtol=1e-12)
    np.testing.assert_allclose(a.scale * units, b.scale, rtol=1e-15)


def test_vanishing_eigenvalues_have_a_floor():
    assert np.all(sizes(jnp.zeros(3)) == 1.0)
    np.testing.assert_allclose(
        sizes(jnp.array([-2.0, 0.0, 1e-3])), [2.0, 2 * 2.0 ** (-52 * 2 / 3), 1e-3], rtol=1e-12
    )


def test_step_has_the_length_of_the_radius_or_is_newtons():
    size, pull = jnp.array([1e-6, 0.3, 2.0]), jnp.array([1.0, -2.0, 0.5])
    newton = bounded_step(size, pull, jnp.asarray(jnp.inf))
    np.testing.assert_allclose(newton, pull / size, rtol=1e-15)
    for radius in (1e-6, 1e-2, 1.0, 30.0, 1e5):
        step = bounded_step(size, pull, jnp.asarray(radius))
        np.testing.assert_allclose(jnp.linalg.norm(step), radius, rtol=1e-6)
        # Optimality: one damping serves every direction.
        damping = pull / step - size
        np.testing.assert_allclose(damping, damping[0], rtol=1e-3, atol=1e-9)
    assert np.all(bounded_step(size, jnp.zeros(3), jnp.asarray(1.0)) == 0)
