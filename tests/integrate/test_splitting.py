import diffrax
import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax import lax

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import adaptive_rollout, rollout, strang, suzuki


NET = HopfNetwork()
COUNTS = np.array([64, 128, 256, 512])
LINEAR = (NET.saturation_flow, NET.linear_flow)
UNIT = (NET.unit_flow, NET.coupling_flow)


def runner(step):
    """Compile a run over 4 time units in any number of steps once; independent of `rollout`."""

    @jax.jit
    def final(params, y, count):
        h = 4 / count.astype(y.dtype)
        advance = step(params, h)
        return lax.fori_loop(0, count, lambda _, y: advance(0.0, y), y)

    return lambda place, count: np.asarray(final(*place, jnp.asarray(count)))


def order(run, place, exact):
    errors = [np.linalg.norm(run(place, n) - exact) for n in COUNTS]
    return -np.polyfit(np.log(COUNTS), np.log(errors), 1)[0]


@pytest.fixture(scope="module")
def network():
    rng = np.random.default_rng(0)
    params = HopfParams(
        rng.uniform(-0.2, 0.5, 3), rng.uniform(2, 4, 3), shear=rng.normal(size=3),
        saturation=rng.uniform(0.5, 2, 3), coupling=0.5 * rng.random((3, 3)),
    )  # fmt: skip
    return params, jnp.asarray(0.5 * rng.normal(size=(2, 3)))


@pytest.fixture(scope="module")
def reference(network):
    times, (params, start) = jnp.array([0.0, 4.0]), network
    out = adaptive_rollout(
        NET, params, start, times, rtol=1e-13, atol=1e-13, solver=diffrax.Dopri8()
    )
    assert out.success
    return np.asarray(out.states[-1])


# Order and the tolerance on it: textbook (Hairer, Lubich & Wanner 2006; from memory), with slopes
# over the same step counts of 1.9999 and 4.116 computed independently.
@pytest.mark.parametrize("make, expected, tolerance", [(strang, 2, 0.05), (suzuki, 4, 0.2)])
def test_order(make, expected, tolerance, network, reference):
    run = runner(make(*LINEAR))
    place = HopfParams([0.4], [3.0]), jnp.array([[0.2], [0.1]])
    # Closed form to 40 digits; common practice.
    exact = np.array([[0.55491488485800019834], [-0.057203871761378918795]])
    assert abs(order(run, place, exact) - expected) < tolerance
    assert abs(order(run, network, reference) - expected) < tolerance


def test_one_flow_after_the_other_is_of_order_1():
    # Lie's splitting by hand, for which the exact flows suffice; slope 0.99764 computed apart.
    first, second = LINEAR

    def step(params, h):
        one, other = first(params, h), second(params, h)
        return lambda t, y: other(one(y))

    place = HopfParams([0.4], [3.0]), jnp.array([[0.2], [0.1]])
    exact = np.array([[0.55491488485800019834], [-0.057203871761378918795]])
    assert abs(order(runner(step), place, exact) - 1) < 0.1


@pytest.mark.parametrize("make, expected, tolerance", [(strang, 2, 0.05), (suzuki, 4, 0.2)])
def test_order_of_units_against_coupling(make, expected, tolerance, network, reference):
    assert abs(order(runner(make(*UNIT)), network, reference) - expected) < tolerance


def test_uncoupled_units_are_exact_at_any_step():
    params, start = HopfParams([0.4], [3.0]), jnp.array([[0.2], [0.1]])
    out = strang(*UNIT)(params, jnp.asarray(4.0))(0.0, start)
    exact = [0.55491488485800019834, -0.057203871761378918795]
    np.testing.assert_allclose(out.ravel(), exact, rtol=0, atol=1e-14)


@pytest.mark.parametrize("make", [strang, suzuki])
def test_substeps_are_steps_and_steps_are_reversible(network, make):
    # The flows used here cost no matrix exponential, so that this compiles fast.
    params, start = network
    parts = (NET.saturation_flow, NET.unit_flow)
    step = lambda n: jax.jit(lambda h, y: make(*parts, substeps=n)(params, h)(0.0, y))
    single, folded = step(1), step(3)
    y = start
    for _ in range(3):
        y = single(jnp.asarray(0.1), y)
    np.testing.assert_allclose(folded(jnp.asarray(0.3), start), y, rtol=0, atol=1e-15)
    back = folded(jnp.asarray(-0.3), y)
    np.testing.assert_allclose(back, start, rtol=0, atol=1e-14)


def test_each_flow_is_prepared_once_for_each_length():
    lengths = []

    def flow(params, h):
        lengths.append(float(h))
        return lambda y: y

    strang(flow, flow)(None, 1.0)
    assert lengths == [0.5, 1.0]
    lengths.clear()
    suzuki(flow, flow, substeps=2)(None, 2.0)
    p = 1 / (4 - 4 ** (1 / 3))
    np.testing.assert_allclose(lengths, [p / 2, p, (1 - 3 * p) / 2, p, 1 - 4 * p], rtol=1e-15)


def test_one_step_a_sample_of_twenty_nodes():
    # 20 nodes at about one cycle per time unit, 1,000 samples of 0.1 time units, one step each:
    # the largest error is below 2e-4 of the largest amplitude. With strong growth, which the
    # single units follow exactly, that holds for the second splitting alone.
    rng = np.random.default_rng(0)
    frequency = 2 * np.pi * rng.uniform(0.7, 1.3, 20)
    coupling = 0.1 * rng.random((20, 20)) / 20
    start = jnp.asarray(0.5 * rng.normal(size=(2, 20)))
    times = 0.1 * jnp.arange(1001.0)
    exact = jax.jit(
        lambda p: adaptive_rollout(
            NET, p, start, times, rtol=1e-11, atol=1e-11, solver=diffrax.Dopri8()
        )
    )
    rolled = [
        jax.jit(lambda p, s=parts: rollout(strang(*s), p, start, 0.1, 1000))
        for parts in (LINEAR, UNIT)
    ]

    def errors(lowest, highest):
        growth = rng.uniform(lowest, highest, 20)
        params = HopfParams(growth, frequency, coupling=coupling)
        truth = exact(params)
        assert truth.success
        amplitude = jnp.max(jnp.hypot(truth.states[:, 0], truth.states[:, 1]))
        return [float(jnp.max(jnp.abs(f(params) - truth.states)) / amplitude) for f in rolled]

    assert max(errors(-0.1, 0.2)) < 2e-4
    linear, unit = errors(0.5, 1.5)
    assert unit < 2e-4 < linear


@pytest.mark.parametrize("make", [strang, suzuki])
def test_errors(user_errors, make):
    with pytest.raises(TypeError, match=r"`substeps` must be a Python int.*got float"):
        make(*LINEAR, substeps=2.0)
    with pytest.raises(ValueError, match="`substeps` must be at least 1; got 0"):
        make(*LINEAR, substeps=0)
