"""From an equation on paper to a checked, fitted field: `python examples/own_field.py`."""

import jax
import jax.numpy as jnp

from oscillib.checks import check_field
from oscillib.fitting import SoftContinuity, describe, laplace, refine, shoot
from oscillib.integrate import NoisyParams, cut, noisy_rollout, rk4, split_noise
from oscillib.likelihood import StateSpaceParams, gaussian_filter, wide_start
from oscillib.parameters import Positive


jax.config.update("jax_enable_x64", True)


def brusselator(t, y, params):  # dx/dt = a + x^2 v - (b + 1) x,   dv/dt = b x - x^2 v
    a, b, (x, v) = params["a"], params["b"], y
    return jnp.stack([a + x**2 * v - (b + 1) * x, b * x - x**2 * v])


truth, rules = {"a": jnp.asarray(1.0), "b": jnp.asarray(2.5)}, {"a": Positive(), "b": Positive()}
rest = jnp.array([1.0, 2.5])  # x = a, v = b / a
check_field(brusselator, truth, rest + 0.3, fixed_points=[rest], key=jax.random.key(0)).require()

step, see = rk4(brusselator), lambda y, params: y[:1]  # only x glows
noisy = split_noise(step, rate=lambda level: level**2 * jnp.eye(2))
system, times = NoisyParams(truth, jnp.asarray(0.05)), 0.1 * jnp.arange(401)
states = noisy_rollout(noisy, system, rest + 0.3, 0.1, 400, key=jax.random.key(1))
values = states[:, :1] + 0.05 * jax.random.normal(jax.random.key(2), (401, 1))

# Windows bring a poor guess home, whatever the noise.
guess, windows = {"a": jnp.asarray(0.7), "b": jnp.asarray(2.0)}, cut(times, 20)
starts = jnp.pad(values[windows.index[:, 0]], ((0, 0), (0, 1)), constant_values=2.0)
soft, scale = SoftContinuity(weight=25.0), jnp.array([0.1])
fit = shoot(
    step, see, guess, starts, windows, values, scale=scale, constraints=rules, continuity=soft
)
print("windows:", describe(fit.status), {name: float(p) for name, p in fit.params.items()})


# The filter's likelihood finds the noise, and how far to trust each number.
def loss(p):
    params = StateSpaceParams(NoisyParams(p, p["noise"]), (), p["reading"][None])
    given = {"h": 0.1, "start": wide_start((2,), 3.0), "method": "cubature"}
    out = gaussian_filter(noisy, see, params, values, jnp.isfinite(values), **given)
    return -out.log_likelihood


first = fit.params | {"noise": jnp.asarray(0.1), "reading": jnp.asarray(0.1)}
rules = rules | {"noise": Positive(), "reading": Positive()}
best = jax.jit(lambda p: refine(loss, p, rules))(first)
known = jax.jit(lambda p: laplace(loss, p, rules))(best.params)
print("filter:", describe(best.status))
for name in rules:
    print(f"{name}: {best.params[name]:.3f} [{known.lower[name]:.3f}, {known.upper[name]:.3f}]")
