"""The filter's information against a dense normal's, and under masks."""

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
import pytest
from jax.flatten_util import ravel_pytree

from oscillib.fields import HopfNetwork, HopfParams
from oscillib.integrate import NoisyParams, noisy_strang
from oscillib.likelihood import (
    Gaussian,
    StateSpaceParams,
    filter_information,
    gaussian_filter,
    wide_start,
)
from oscillib.observe import ReadoutParams, linear_readout
from oscillib.parameters import Fixed, constrain, unconstrain


FIELD = HopfNetwork()
STEP = noisy_strang(FIELD.saturation_flow, FIELD.linear_matrix)
H, COUNT = 0.3, 12
START = wide_start((2, 1), 1.0)


def make(saturation=0.0):
    field = HopfParams([-0.2], [2.0], saturation=[saturation])
    params = StateSpaceParams(
        NoisyParams(field, noise=[0.4]), ReadoutParams([1.0], [0.3]), reading_noise=[0.2]
    )
    constraints = eqx.tree_at(
        lambda c: (c.dynamics.field.saturation, c.readout.gain),
        params.constraints(),
        (Fixed(), Fixed()),
    )
    return params, constraints


@pytest.fixture(scope="module")
def information():
    return jax.jit(
        lambda params, values, mask: filter_information(
            STEP,
            linear_readout,
            params,
            make()[1],
            values,
            mask,
            h=H,
            start=wide_start((2, 1), 1.0),
        )
    )


def test_linear_unit_against_the_dense_normal(information):
    # Fisher information of N(m, V): dm' V^-1 dm + tr(V^-1 dV V^-1 dV) / 2, e.g. Kay 1993 (from
    # memory). The filter's is that of one recording, so the mean over recordings is compared.
    params, constraints = make()
    flat, unravel = ravel_pytree(unconstrain(params, constraints))

    def moments(x):
        p = constrain(unravel(x), constraints, params)
        a, w, s = p.dynamics.field.growth[0], p.dynamics.field.frequency[0], p.dynamics.noise[0]
        t = H * jnp.arange(COUNT).astype(x.dtype)
        decay = jnp.exp(a * (t[:, None] + t[None]))
        shared = jnp.minimum(t[:, None], t[None])
        grown = s**2 * jnp.expm1(-2 * a * shared) / (-2 * a)
        # Start variance 1 in both components; noise since then, isotropic.
        cov = decay * (1 + grown) * jnp.cos(w * (t[:, None] - t[None]))
        cov = cov + p.reading_noise[0] ** 2 * jnp.eye(COUNT)
        return jnp.full(COUNT, p.readout.offset[0]), cov

    mean, cov = moments(flat)
    dm, dv = jax.jacfwd(moments)(flat)
    inverse = jnp.linalg.inv(cov)
    expected = jnp.einsum("ti,ts,sj->ij", dm, inverse, dm)
    expected += jnp.einsum("ab,bci,cd,daj->ij", inverse, dv, inverse, dv) / 2

    draws = np.random.default_rng(0).multivariate_normal(mean, cov, size=1000)
    mask = jnp.ones((COUNT, 1), bool)
    each = jax.jit(jax.vmap(information, in_axes=(None, 0, None)))(
        params, jnp.asarray(draws)[..., None], mask
    )
    error = np.std(each, axis=0) / np.sqrt(len(draws))
    assert np.all(np.abs(np.mean(each, axis=0) - expected) < 5 * error + 1e-9)


def test_masked_entries_have_no_influence(information):
    params, _ = make()
    values = jnp.asarray(np.random.default_rng(1).normal(size=(COUNT, 1)))
    mask = jnp.arange(COUNT)[:, None] % 3 != 1
    whole = information(params, values, mask)
    spoiled = information(params, jnp.where(mask, values, jnp.nan), mask)
    np.testing.assert_array_equal(whole, spoiled)
    # What is never observed says nothing; fewer samples say less about the offset, whose
    # information does not depend on the values.
    assert float(jnp.max(jnp.abs(information(params, values, jnp.zeros_like(mask))))) == 0
    full = information(params, values, jnp.ones_like(mask))
    assert full[3, 3] > whole[3, 3]


def test_precision_of_the_mean_is_exact(information):
    # The offset moves only means: its information is the precision sum 1' V^-1 1.
    params, _ = make()
    mask = jnp.ones((COUNT, 1), bool)
    zero = jnp.zeros((COUNT, 1))
    dense = np.linalg.inv(dense_covariance(params)).sum()
    got = information(params, zero, mask)
    names = ("growth", "frequency", "noise", "offset", "reading_noise")
    index = names.index("offset")
    np.testing.assert_allclose(got[index, index], dense, rtol=1e-10)


def dense_covariance(params):
    t = H * np.arange(COUNT)
    a = float(params.dynamics.field.growth[0])
    w, s = float(params.dynamics.field.frequency[0]), float(params.dynamics.noise[0])
    grown = s**2 * np.expm1(-2 * a * np.minimum.outer(t, t)) / (-2 * a)
    cov = np.exp(a * np.add.outer(t, t)) * (1 + grown) * np.cos(w * np.subtract.outer(t, t))
    return cov + float(params.reading_noise[0]) ** 2 * np.eye(COUNT)


def test_equals_the_hessian_on_average_for_a_nonlinear_unit():
    # The information identity: mean outer product of scores = mean information, at the truth;
    # here by the filter's own law, over recordings drawn from its one-step predictions.
    params, constraints = make(saturation=0.05)
    flat, unravel = ravel_pytree(unconstrain(params, constraints))
    start = Gaussian(jnp.array([[1.0], [0.0]]), 0.05 * jnp.eye(2))
    mask = jnp.ones((4, 1), bool)

    def likelihood(x, values):
        p = constrain(unravel(x), constraints, params)
        out = gaussian_filter(STEP, linear_readout, p, values, mask, h=H, start=start)
        return out.log_likelihood, out

    def draw(noise):
        def one(values, k):
            out = likelihood(flat, values)[1]
            drawn = out.channel_means[k] + jnp.sqrt(out.channel_variances[k]) * noise[k]
            return values.at[k].set(drawn), None

        return jax.lax.scan(one, jnp.zeros((4, 1)), jnp.arange(4))[0]

    @jax.jit
    def both(noise):
        values = jax.vmap(draw)(noise)
        scores = jax.vmap(jax.grad(lambda x, v: likelihood(x, v)[0]), in_axes=(None, 0))(
            flat, values
        )
        each = jax.vmap(
            lambda v: filter_information(
                STEP, linear_readout, params, constraints, v, mask, h=H, start=start
            )
        )(values)
        return jnp.einsum("ri,rj->rij", scores, scores), each

    outer, each = both(jnp.asarray(np.random.default_rng(2).normal(size=(1000, 4, 1))))
    error = np.std(np.asarray(outer - each), axis=0) / np.sqrt(1000)
    assert np.all(np.abs(np.mean(np.asarray(outer - each), axis=0)) < 5 * error + 1e-9)
