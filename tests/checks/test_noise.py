import jax
import jax.numpy as jnp
import pytest

from oscillib.checks import check_noise
from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, euler_maruyama, noisy_strang, rk4, split_noise


FIELD = HopfNetwork()
PARAMS = NoisyParams(HopfParams([-0.2], [6.0], shear=[0.3]), noise=[0.2])
# Far from rest: within one step the unit turns, and its saturation with it.
START = jnp.array([[0.8], [0.2]])
EXACT = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)
KEY = jax.random.key(0)


def mixed(noise):
    """Noise that is correlated between the components."""
    root = jnp.array([[1.0, 0.0], [0.6, 0.5]], noise.dtype)
    return noise[0] ** 2 * root @ root.T


def decay(t, y, params):
    """A linear field whose components decay by themselves."""
    return -params[:, None] * y


DECAY = NoisyParams(jnp.array([1.0, 3.0]), noise=[0.3])


# In the default run the example of `check_noise` does this, nearer to rest.
@pytest.mark.long
def test_splitting_step():
    check_noise(EXACT, FIELD, PARAMS, START, 0.1, rtol=0.05, key=KEY)


def test_correlated_noise_in_single_precision():
    params, start = jax.tree.map(lambda x: x.astype(jnp.float32), (DECAY, START))
    step = split_noise(rk4(decay), rate=mixed)
    check_noise(step, decay, params, start, 0.05, rate=mixed, rtol=0.05, key=KEY)


@pytest.mark.long
def test_euler_maruyama_within_its_error():
    # One step: the variance of a linear unit misses h A; the frequency adds (w h)^2 a step.
    check_noise(euler_maruyama(FIELD), FIELD, PARAMS, START, 0.01, rtol=0.05, key=KEY)


def test_exact_step_of_a_linear_field_to_rounding():
    matrix = lambda params: -jnp.diag(params)
    nothing = lambda params, h: lambda y: y
    step = noisy_strang(nothing, matrix, rate=mixed)
    check_noise(step, decay, DECAY, START, 0.5, rate=mixed, rtol=1e-9, key=KEY)


@pytest.mark.long
def test_false_alarms_are_as_rare_as_stated():
    # The bound of `alarm`, and no error allowed beside it: 200 checks of an exact step.
    matrix, nothing = lambda params: -jnp.diag(params), lambda params, h: lambda y: y
    step = noisy_strang(nothing, matrix)
    refused = 0
    for key in jax.random.split(jax.random.key(1), 200):
        try:
            check_noise(step, decay, DECAY, START, 0.2, rtol=1e-6, alarm=0.05, paths=1024, key=key)
        except AssertionError:
            refused += 1
    # Bonferroni makes it 0.05 or less; binomial(200, 0.05) exceeds 23 in 1e-4 of all cases.
    assert refused <= 23
    assert refused > 0


def test_misuse(user_errors):
    del user_errors
    with pytest.raises(TypeError, match="`params` must be a `NoisyParams`"):
        check_noise(EXACT, FIELD, PARAMS.field, START, 0.1, rtol=0.05, key=KEY)
    silent = NoisyParams(PARAMS.field, noise=[0.0])
    with pytest.raises(ValueError, match="must not be zero everywhere"):
        check_noise(EXACT, FIELD, silent, START, 0.1, rtol=0.05, key=KEY)
    with pytest.raises(ValueError, match="`paths` must be at least 100"):
        check_noise(EXACT, FIELD, PARAMS, START, 0.1, rtol=0.05, paths=10, key=KEY)
