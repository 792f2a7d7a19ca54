"""What every field must keep: shape, dtype, finite derivatives at the origin, one compilation."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.flatten_util import ravel_pytree

from oscillib.fields import (
    CorrectedParams,
    Correction,
    CoupledParams,
    Edges,
    FitzHughNagumoParams,
    ForcedParams,
    GoodwinParams,
    HopfUnitParams,
    Input,
    KuramotoParams,
    LinearNetwork,
    LinearParams,
    VanDerPolParams,
    WilsonCowanParams,
    corrected,
    coupled,
    fitzhugh_nagumo,
    forced,
    goodwin,
    hopf_unit,
    kuramoto,
    van_der_pol,
    wilson_cowan,
)
from oscillib.parameters import constrain, unconstrain


K = jnp.array([[0.0, 0.3], [0.2, 0.0]])
EDGES = Edges([0, 1], [1, 0], [0.2, 0.3], nodes=2)
LINES = Input([0.0, 1.0], [[0.5], [2.0]], kind="linear")
VDP = VanDerPolParams([1.0, 2.0])
FIELDS = {
    "van_der_pol": (van_der_pol, VDP, 2),
    "fitzhugh_nagumo": (fitzhugh_nagumo, FitzHughNagumoParams([0.5, 0.1]), 2),
    "hopf_unit": (hopf_unit, HopfUnitParams([0.5, -0.1], [3.0, 2.0], shear=[0.1, 0.2]), 2),
    "goodwin": (goodwin, GoodwinParams(np.ones((3, 2)), np.full((3, 2), 0.1), [9.0, 2.5]), 3),
    "kuramoto": (kuramoto, KuramotoParams([1.0, 1.5], K, lag=0.3), 1),
    "wilson_cowan": (wilson_cowan, WilsonCowanParams([1.25, 0.0], coupling=EDGES), 2),
    "linear": (LinearNetwork(), LinearParams.turning([-0.1, -0.2], [6.0, 5.0], K), 2),
    "coupled": (coupled(van_der_pol), CoupledParams(VDP, EDGES), 2),
    "forced": (forced(van_der_pol), ForcedParams(VDP, LINES, [[1.0], [2.0]]), 2),
    "corrected": (
        corrected(van_der_pol),
        CorrectedParams(VDP, Correction(2, width=3, depth=1, key=jax.random.key(0))),
        2,
    ),
}


@pytest.fixture(params=list(FIELDS))
def case(request):
    return FIELDS[request.param]


@pytest.mark.parametrize("dtype", [jnp.float32, jnp.float64])
def test_shape_and_dtype(case, dtype):
    field, params, components = case
    params = jax.tree.map(lambda x: x.astype(dtype), params)
    y = jax.ShapeDtypeStruct((components, 2), dtype)
    out = jax.eval_shape(field, jax.ShapeDtypeStruct((), dtype), y, params)
    assert out.shape == y.shape and out.dtype == dtype


def test_gradients_and_one_compilation(case):
    field, params, components = case
    rng, traces = np.random.default_rng(0), []
    weights = jnp.asarray(rng.normal(size=(components, 2)))
    free, constraints = unconstrain(params, params.constraints()), params.constraints()
    flat, unravel = ravel_pytree((free, jnp.zeros((components, 2))))

    @jax.jit
    def at(x):
        traces.append(None)

        def loss(x):
            free, y = unravel(x)
            moved = constrain(free, constraints, params)
            return jnp.sum(weights * field(jnp.asarray(0.25), y, moved))

        return jax.value_and_grad(loss)(x)

    assert all(jnp.all(jnp.isfinite(x)) for x in at(flat)), "at the origin"
    # Positive states, as a Goodwin unit needs; everything else moves too.
    size = components * 2
    x = flat + 0.1 * jnp.asarray(rng.normal(size=flat.shape))
    x = x.at[-size:].set(jnp.asarray(rng.uniform(0.5, 1.5, size=size)))
    along = jnp.asarray(rng.normal(size=flat.shape))
    above, below = at(x + 1e-5 * along)[0], at(x - 1e-5 * along)[0]
    # Central differences: off by e^2 times third derivatives, and by rounding over e.
    np.testing.assert_allclose(at(x)[1] @ along, (above - below) / 2e-5, rtol=1e-6, atol=1e-8)
    assert len(traces) == 1


def test_constraints_have_the_structure_of_the_parameters(case):
    _, params, _ = case
    assert jax.tree.structure(params.constraints()) == jax.tree.structure(params)
    back = constrain(unconstrain(params, params.constraints()), params.constraints(), params)
    for a, b in zip(jax.tree.leaves(back), jax.tree.leaves(params), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-14)


@pytest.mark.parametrize("kind", ["van_der_pol", "fitzhugh_nagumo", "hopf_unit", "goodwin"])
def test_a_single_unit_is_a_column(kind):
    field, params, components = FIELDS[kind]
    y = jnp.asarray(np.random.default_rng(1).uniform(0.5, 1.5, size=(components, 2)))
    one = field(0.0, y[:, 1], jax.tree.map(lambda x: x[..., 1], params))
    np.testing.assert_array_equal(one, field(0.0, y, params)[:, 1])


@pytest.mark.parametrize("kind", ["van_der_pol", "goodwin", "kuramoto", "wilson_cowan", "linear"])
def test_errors_of_the_state(user_errors, kind):
    field, params, components = FIELDS[kind]
    with pytest.raises(ValueError, match=r"`y` must have shape \(component, node\)"):
        field(0.0, jnp.zeros((components, 3)), params)
    with pytest.raises(ValueError, match=r"`y` must have shape"):
        field(0.0, jnp.zeros((components + 1, 2)), params)
    with pytest.raises(TypeError, match=r"`y` is float32 but `params\..*` is float64"):
        field(0.0, jnp.zeros((components, 2), jnp.float32), params)


@pytest.mark.parametrize(
    "make, error, match",
    [
        (lambda: VanDerPolParams([1.0, 2.0], [1.0]), ValueError, "`frequency` must have shape"),
        (
            lambda: VanDerPolParams(jnp.ones(2, jnp.float32), jnp.ones(2)),
            TypeError,
            "`frequency` is float64 but `damping` is float32",
        ),
        (lambda: KuramotoParams([1.0], lag=[0.1]), ValueError, "`lag` must have shape"),
        (lambda: KuramotoParams([1.0], [[1.0, 2.0]]), ValueError, "`coupling` must have shape"),
        (lambda: WilsonCowanParams([1.0], ee=2.0), ValueError, "`ee` must have shape"),
        (lambda: GoodwinParams([1.0], [1.0], 2.0), ValueError, "`production` must have shape"),
        (lambda: LinearParams([[1.0]]), ValueError, "`local` must have shape"),
        (
            lambda: LinearNetwork(kind="both"),  # pyright: ignore[reportArgumentType]
            ValueError,
            "`kind` must be 'diffusive'",
        ),
    ],
)
def test_errors_of_the_parameters(user_errors, make, error, match):
    with pytest.raises(error, match=match):
        make()
