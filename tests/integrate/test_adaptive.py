import diffrax
import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import adaptive_rollout


NET = HopfNetwork()
START = jnp.array([[0.2], [0.1]])
TIMES = jnp.array([0.0, 4.0, 7.0])
DECAY = lambda t, y, params: -y


def radius2(growth, adjoint=None):
    params = HopfParams([growth], [3.0], shear=[0.9], saturation=[1.5])
    out = adaptive_rollout(
        NET, params, START, TIMES, rtol=1e-12, atol=1e-12,
        solver=diffrax.Dopri8(), adjoint=adjoint,
    )  # fmt: skip
    return jnp.sum(out.states[-1] ** 2), out


def test_published_trajectory_and_gradient():
    # Closed forms to 40 digits; the gradient of |z(7)|^2 in growth from its derivative.
    (_, out), slope = jax.jit(jax.value_and_grad(radius2, has_aux=True))(0.4)
    assert out.success
    expected = [0.071124401454523437, 0.50734829416618121]
    np.testing.assert_allclose(out.states[-1].ravel(), expected, rtol=0, atol=1e-10)
    assert abs(slope - 0.70136703347805486) < 1e-8


def test_forward_mode():
    value = lambda a: radius2(a, diffrax.ForwardMode())[0]
    slope = jax.jit(jax.jacfwd(value))(0.4)
    assert abs(slope - 0.70136703347805486) < 1e-8


def test_irregular_absolute_times():
    # y' = y cos t from t = 3: e^(sin t - sin 3).
    times = jnp.array([3.0, 3.1, 4.7, 10.0])
    field = lambda t, y, params: y * jnp.cos(t)
    out = adaptive_rollout(field, None, jnp.ones(2), times, rtol=1e-11, atol=1e-11)
    expected = np.exp(np.sin(times) - np.sin(3.0))
    np.testing.assert_allclose(out.states[:, 1], expected, rtol=1e-9)
    assert out.success


def test_success_is_false_where_the_run_fails():
    def run(power, max_steps):
        return adaptive_rollout(
            lambda t, y, params: y**params, power, jnp.ones(1), jnp.array([0.0, 3.0]),
            rtol=1e-6, atol=1e-6, max_steps=max_steps,
        )  # fmt: skip

    growth = jax.jit(lambda power: run(power, 256))
    assert growth(jnp.asarray(1.0)).success
    assert not growth(jnp.asarray(2.0)).success  # 1 / (1 - t) ends at t = 1
    few = jax.jit(lambda power: run(power, 3))(jnp.asarray(1.0))
    assert not few.success
    assert few.num_steps == 3


@pytest.mark.parametrize(
    "error, match, y0, times",
    [
        (ValueError, "`times` must be strictly increasing; got -1.0 at", 1.0, [0.0, 2.0, 1.0]),
        (ValueError, "`times` must be strictly increasing; got 0.0 at", 1.0, [0.0, 1.0, 1.0]),
        (ValueError, "`times` must hold at least two samples; got 1", 1.0, [0.0]),
        (ValueError, r"`times` must have shape \(time,\)", 1.0, [[0.0, 1.0]]),
        (TypeError, "`times` is float64 but `y0` is float32", np.float32(1), [0.0, 1.0]),
        (TypeError, "`y0` must hold real floating-point numbers", 1, [0.0, 1.0]),
    ],
)
def test_errors(user_errors, error, match, y0, times):
    with pytest.raises(error, match=match):
        adaptive_rollout(
            DECAY, None, jnp.asarray(y0)[None], jnp.asarray(times), rtol=1e-6, atol=1e-6
        )


def test_error_of_the_field(user_errors):
    with pytest.raises(ValueError, match="must return one array of the shape of `y`"):
        adaptive_rollout(
            lambda y, t, params: -y, None, jnp.ones(2), jnp.arange(2.0), rtol=1e-6, atol=1e-6
        )
