import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.analysis import RootStatus, fixed_point, fixed_points


def sigmoid(x, steepness, threshold):
    """Sigmoid shifted so that S(0) = 0."""
    shift = 1 / (1 + np.exp(steepness * threshold))
    return 1 / (1 + jnp.exp(-steepness * (x - threshold))) - shift, 1 - shift


def hysteresis(t, y, drive):
    """Wilson & Cowan 1972, the set of figure 4 (from memory)."""
    e, i = y
    s_e, k_e = sigmoid(12 * e - 4 * i + drive, 1.2, 2.8)
    s_i, k_i = sigmoid(13 * e - 11 * i, 1.0, 4.0)
    return jnp.stack([-e + (k_e - e) * s_e, -i + (k_i - i) * s_i])


def grid(n=7):
    e, i = np.meshgrid(np.linspace(0, 0.5, n), np.linspace(0, 0.5, n))
    return jnp.asarray(np.stack([e.ravel(), i.ravel()], axis=1))


def test_wilson_cowan_hysteresis():
    # Wilson & Cowan 1972 (from memory): stable, saddle, stable; values computed independently.
    found = fixed_points(hysteresis, jnp.zeros(()), grid())
    expected = [[0, 0], [0.18967, 0.06810], [0.43975, 0.22593]]
    np.testing.assert_allclose(found.states, expected, atol=5e-6)
    stable = found.rate[:, 0] < 0
    assert stable.tolist() == [True, False, True]
    assert found.rate[1, 1] < 0
    assert found.starts.sum() == np.sum(found.status == RootStatus.CONVERGED)
    speeds = [np.max(np.abs(hysteresis(0.0, jnp.asarray(y), 0.0))) for y in found.states]
    assert max(speeds) < 1e-14


@pytest.fixture(scope="module")
def moved():
    """The upper stable state of the hysteresis set, and its derivatives in the drive."""
    state = lambda p: fixed_point(hysteresis, p, jnp.array([0.44, 0.23])).state
    return jax.jit(lambda p: (state(p), jax.jacrev(state)(p), jax.jacfwd(state)(p)))


def test_derivative_follows_the_fixed_point(moved):
    h = 1e-5
    p = jnp.asarray(0.1)
    _, reverse, forward = moved(p)
    central = (moved(p + h)[0] - moved(p - h)[0]) / (2 * h)
    np.testing.assert_allclose(reverse, forward, rtol=1e-12)
    np.testing.assert_allclose(forward, central, rtol=1e-8)


def test_second_derivative():
    # y = sqrt(a) in the double well.
    well = lambda t, y, a: a * y - y**3
    y = lambda a: fixed_point(well, a, jnp.array([2.5])).state[0]
    np.testing.assert_allclose(jax.jit(jax.hessian(y))(4.0), -1 / 32, rtol=1e-12)


def test_any_shape_and_both_precisions_trace_once():
    traces = []
    field = lambda t, y, p: p - y - 0.1 * y**3

    @jax.jit
    def find(p, y0):
        traces.append(p)
        return fixed_point(field, p, y0)

    for dtype, tolerance in ((jnp.float64, 1e-14), (jnp.float32, 1e-6)):
        for level in (1.0, 2.0):
            p = jnp.asarray([[level, 0.5], [0.1, -3.0]], dtype)
            out = find(p, jnp.zeros((2, 2), dtype))
            assert out.state.dtype == out.speed.dtype == dtype
            assert int(out.status) == RootStatus.CONVERGED
            assert float(out.speed) < 10 * tolerance
    assert len(traces) == 2


def test_time_reaches_the_field():
    out = fixed_point(lambda t, y, p: p * t - y, 2.0, jnp.zeros(1), t=3.0)
    np.testing.assert_allclose(out.state, [6.0])


def test_small_states_need_their_own_tolerance():
    field = lambda t, y, p: y**2 - p**2
    out = fixed_point(field, 1e-9, jnp.array([3e-9]), tolerance=1e-18)
    assert int(out.status) == RootStatus.CONVERGED
    np.testing.assert_allclose(out.state, [1e-9], rtol=1e-9)


def test_no_fixed_point_gives_no_rows():
    found = fixed_points(lambda t, y, p: 1 + y**2, 0.0, jnp.ones((3, 1)))
    assert found.states.shape == (0, 1)
    assert found.rate.shape == (0, 1)
    assert (found.status != RootStatus.CONVERGED).all()


def test_listing_in_float32_counts_close_finds_once():
    well = lambda t, y, a: a * y - y**3
    starts = jnp.linspace(-3.0, 3.0, 40, dtype=jnp.float32)[:, None]
    found = fixed_points(well, jnp.float32(4.0), starts)
    np.testing.assert_allclose(found.states.ravel(), [-2, 0, 2], atol=1e-5)
    assert found.states.dtype == np.float32
    assert found.starts.sum() == 40


@pytest.mark.usefixtures("user_errors")
def test_messages():
    field = lambda t, y, p: y
    with pytest.raises(ValueError, match="must return one array of the shape of `y`"):
        fixed_point(lambda t, y, p: y[0], None, jnp.ones(2))
    with pytest.raises(TypeError, match="`y0` must hold real floating-point"):
        fixed_point(field, None, jnp.ones(2, int))
    with pytest.raises(ValueError, match="`max_steps` must be at least 1"):
        fixed_point(field, None, jnp.ones(2), max_steps=0)
    with pytest.raises(ValueError, match="`starts` must have shape"):
        fixed_points(field, None, jnp.ones((0, 2)))
