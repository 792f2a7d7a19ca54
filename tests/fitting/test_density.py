import dataclasses

import jax
import jax.numpy as jnp
import numpy as np
import pytest

from oscillib.fitting import log_density
from oscillib.parameters import Constraint, Fixed, Free, Interval, OffDiagonal, Positive


@dataclasses.dataclass(frozen=True)
class Increasing(Constraint):
    """Increasing entries: each is the last plus a positive step; mixes entries."""

    def to_free(self, value):
        return jnp.concatenate([value[:1], jnp.log(jnp.diff(value))])

    def to_value(self, free, template):
        return jnp.cumsum(jnp.concatenate([free[:1], jnp.exp(free[1:])]))


@dataclasses.dataclass(frozen=True)
class Cubed(Constraint):
    """Any value, entry by entry, with a map that is not the identity."""

    def to_free(self, value):
        return jnp.cbrt(value)

    def to_value(self, free, template):
        return free**3


@dataclasses.dataclass(frozen=True)
class Shares(Constraint):
    """Positive shares that add up to one."""

    def to_free(self, value):
        return jnp.log(value[:-1] / value[-1:])

    def to_value(self, free, template):
        return jax.nn.softmax(jnp.concatenate([free, jnp.zeros_like(template[:1])]))


PARAMS = {
    "coupling": jnp.array([[0.0, 0.4], [-0.3, 0.0]]),
    "cubed": jnp.array([8.0]),
    "fixed": jnp.asarray(5.0),
    "fraction": jnp.array([1.5, 3.0]),
    "ordered": jnp.array([-1.0, 0.5, 0.7]),
    "spread": jnp.asarray(2.0),
}
CONSTRAINTS = {
    "coupling": OffDiagonal(),
    "cubed": Cubed(),
    "fixed": Fixed(),
    "fraction": Interval(1.0, 4.0),
    "ordered": Increasing(),
    "spread": Positive(),
}


def loss(params):
    return jnp.sum(jnp.stack([jnp.sum(jnp.cos(v)) for v in params.values()]))


def test_jacobian_against_a_numerical_one():
    density = log_density(loss, CONSTRAINTS, PARAMS)
    plain = log_density(loss, CONSTRAINTS, PARAMS, jacobian=False)
    x = density.start + 0.1
    unravel = jax.jit(density.unravel)
    both = jax.jit(lambda x: (density.log_prob(x), plain.log_prob(x), loss(density.unravel(x))))

    def fitted(x):
        v = unravel(x)
        edges = np.array([v["coupling"][0, 1], v["coupling"][1, 0]])
        rest = [np.ravel(v[k]) for k in ("cubed", "fraction", "ordered", "spread")]
        return np.concatenate([edges, *rest])

    h = 1e-5
    columns = [(fitted(x + h * e) - fitted(x - h * e)) / (2 * h) for e in np.eye(x.size)]
    expected = np.linalg.slogdet(np.stack(columns, axis=1))[1]
    with_term, without, value = both(x)
    np.testing.assert_allclose(with_term - without, expected, rtol=1e-8)
    np.testing.assert_allclose(without, -value, rtol=1e-14)
    assert density.unravel(x)["fixed"] == 5.0


def test_far_out_in_both_precisions():
    # Density of a logistic variable: its log falls with slope one, long after 1 - sigmoid is zero.
    for dtype in (jnp.float32, jnp.float64):
        template = jnp.asarray(0.5, dtype)
        log_prob = log_density(lambda v: 0 * v, Interval(0.0, 1.0), template).log_prob
        out = log_prob(jnp.asarray([60.0], dtype))
        assert out.dtype == dtype
        np.testing.assert_allclose(out, -60.0, rtol=1e-6)


def test_not_finite_is_minus_infinity():
    log_prob = log_density(lambda v: jnp.log(v - 1), Free(), jnp.asarray(2.0)).log_prob
    out = jax.vmap(log_prob)(jnp.array([[0.0], [1.0], [2.0]]))
    assert out[0] == -jnp.inf and out[1] == -jnp.inf and out[2] == 0.0


def test_gradient():
    density = log_density(loss, CONSTRAINTS, PARAMS, prior=lambda p: -(p["spread"] ** 2))
    log_prob = jax.jit(density.log_prob)
    slope = jax.jit(jax.grad(density.log_prob))(density.start)
    h = 1e-6
    for k, e in enumerate(np.eye(density.start.size)):
        step = jnp.asarray(h * e)
        central = (log_prob(density.start + step) - log_prob(density.start - step)) / (2 * h)
        np.testing.assert_allclose(slope[k], central, rtol=1e-6, atol=1e-7)


def test_random_walk_finds_a_gamma_posterior():
    # Counts of a Poisson process with a gamma(2, rate 1) prior: gamma(2 + sum, rate 1 + n).
    counts = jnp.array([3.0, 1.0, 4.0, 1.0, 5.0])
    density = log_density(
        lambda rate: jnp.sum(rate - counts * jnp.log(rate)),
        Positive(),
        jnp.asarray(1.0),
        prior=lambda rate: jnp.log(rate) - rate,
    )

    def move(state, key):
        x, here = state
        a, b = jax.random.split(key)
        trial = x + 0.6 * jax.random.normal(a, x.shape)
        there = density.log_prob(trial)
        accept = jnp.log(jax.random.uniform(b)) < there - here
        state = jnp.where(accept, trial, x), jnp.where(accept, there, here)
        return state, density.unravel(state[0])

    def walk(key):
        start = density.start, density.log_prob(density.start)
        return jax.lax.scan(move, start, jax.random.split(key, 4000))[1]

    rates = jax.jit(jax.vmap(walk))(jax.random.split(jax.random.key(0), 20))[:, 200:]
    # 76,000 samples with a correlation time of some ten: error 0.65 / sqrt(7600) = 0.008.
    assert abs(rates.mean() - 16 / 6) < 0.03
    assert abs(rates.std() - 4 / 6) < 0.03


def test_errors_name_what_is_wrong(user_errors):
    shares = jnp.array([0.2, 0.8])
    with pytest.raises(ValueError, match="must map as many entries as the array has, 2"):
        log_density(jnp.sum, Shares(), shares)
    assert log_density(jnp.sum, Shares(), shares, jacobian=False).start.shape == (1,)
    with pytest.raises(ValueError, match="`loss` must return one"):
        log_density(lambda p: p, Free(), jnp.ones(2))
