"""Noisy steps: the covariance of one step, and what many simulated paths do."""

import math
from collections.abc import Callable
from typing import Any

import equinox as eqx
import jax
import jax.numpy as jnp
import numpy as np
from jax import lax
from jaxtyping import Array, Float

from .._validate import as_float, check_count, check_floating, check_same_dtype, check_shape
from ..integrate import (
    NoisyParams,
    NoisyStep,
    linear_transition,
    noisy_rollout,
    planar_rate,
    rk4,
    split_noise,
    without_noise,
)
from ._failure import fail
from ._step import Field, Scalar, State, check_step_output, is_noisy


Rate = Callable[[Any], Float[Array, "size size"]]

# Short steps, as a share of `h`, at which the covariance must grow like the step.
_SHORT = 1 / 1024
# Pieces of a step in which the field is linearised anew: an error of order (h / 16)^2.
_PIECES = 16


def check_noise(
    step: NoisyStep,
    field: Field,
    params: NoisyParams,
    y0: State,
    h: Scalar,
    *,
    key: Array,
    rtol: float,
    rate: Rate = planar_rate,
    steps: int = 4,
    paths: int = 4096,
    refine: int = 8,
    alarm: float = 1e-6,
) -> None:
    """Check the noise of a noisy step: one step in closed form, and many simulated paths.

    1. The covariance is finite, symmetric, without negative eigenvalue, and grows like `h`.
    2. What one step adds agrees with the exact transition of the field linearised along the
       noiseless path from `y0`, `|C - C_exact|_ij <= rtol sqrt(C_exact_ii C_exact_jj)`: for a
       linear field at any `rtol`.
    3. Mean and covariance of `paths` simulated paths after `steps` steps agree with those of an
       independent reference: `rk4` and noise at the step `h / refine`. Allowed are `rtol` of their
       size and k standard errors of the difference. k is chosen such that a correct step is refused
       with a probability of `alarm` over all entries together (normal approximation, Bonferroni).

    Arguments:
        step: `step(params, h) -> NoisyAdvance`.
        field: `field(t, y, params) -> dy`, of which the step is to be the noisy form.
        params: a `NoisyParams`; its `field` goes to the field.
        y0: start, shape `(*state)`.
        h: step size, a scalar, time units.
        key: random key of the paths.
        rtol: error claimed of the step in one step, and of its moments after `steps`; no default.
            An entry that noise reaches only through others is the worst in one step: `split_noise`
            misses a quarter of its variance.
        rate: `rate(noise) -> Q`, covariance rate of the noise; default `planar_rate`.
        steps: steps simulated; default 4.
        paths: paths simulated; default 4096: a variance is then known to 2 percent.
        refine: how many steps of the reference to one of `step`; default 8.
        alarm: probability of refusing a correct step; default 1e-6.

    Raises:
        AssertionError: one of the three does not hold.
        ValueError: shapes do not fit; there is no noise.
        TypeError: dtypes differ; `params` is not a `NoisyParams`.

    Example:
        >>> import jax, jax.numpy as jnp
        >>> from oscillib.checks import check_noise
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import NoisyParams, noisy_strang
        >>> field = HopfNetwork()
        >>> step = noisy_strang(field.saturation_flow, field.linear_matrix)
        >>> params = NoisyParams(HopfParams([-0.2], [6.0]), noise=[0.1])
        >>> check_noise(step, field, params, jnp.array([[0.3], [0.0]]), 0.1, rtol=0.05,
        ...             key=jax.random.key(0))

    Source: linear transition, Van Loan 1978 (from memory); two-sample comparison of moments, common
    practice, no source.
    """
    if not isinstance(params, NoisyParams):
        raise TypeError(f"`params` must be a `NoisyParams`; got {type(params).__name__}.")
    check_floating("y0", y0)
    y0 = jnp.asarray(y0)
    h = as_float(h) if hasattr(h, "dtype") else jnp.asarray(h, y0.dtype)
    check_shape("h", h, (), "()")
    check_same_dtype("h", h, "y0", y0)
    steps, paths = check_count("steps", steps), check_count("paths", paths, least=100)
    refine = check_count("refine", refine)
    q = rate(params.noise)
    check_shape("rate(params.noise)", q, (y0.size, y0.size), "(size, size)")
    if not np.any(np.asarray(q)):
        raise ValueError("`params.noise` must not be zero everywhere: there is nothing to check.")
    _check_kind(step, params, y0, h)
    lengths = h * jnp.array([1, _SHORT, _SHORT / 2], h.dtype)
    out = _one_step(step, params, y0, lengths)
    declared, added = np.asarray(out[0], float), np.asarray(out[1], float)
    _check_covariance(declared[0], float(jnp.finfo(y0.dtype).eps))
    exact = np.asarray(_exact(field, rate, params, y0, h), float)
    _check_one_step(added, exact, np.asarray(q * lengths[1], float), rtol)
    # Draws that do not depend on those of the step, or the two would err together.
    ours, theirs = jax.random.split(key)
    got = _ends(step, params, y0, h, steps, ours, paths)
    true = _reference_ends(field, rate, params, y0, h / refine, steps * refine, theirs, paths)
    _check_moments(np.asarray(got, float), np.asarray(true, float), rtol, alarm)


def _check_kind(step: NoisyStep, params: NoisyParams, y0: Array, h: Array) -> None:
    if not is_noisy(step, params, h):
        _fault("kind of step", None, "a `NoisyAdvance`", "none", "`split_noise(step)` makes one")
    check_step_output(without_noise(step), params, y0, h)
    covariance = jax.eval_shape(lambda k: jnp.asarray(step(params, k).covariance), h)
    expected = f"{(y0.size, y0.size)} {y0.dtype}"
    got = f"{covariance.shape} {covariance.dtype}"
    if got != expected:
        hint = "one row and column for each entry of the flattened state"
        _fault("shape and dtype of the covariance", None, expected, got, hint)


def _check_covariance(c: np.ndarray, eps: float) -> None:
    if not np.all(np.isfinite(c)):
        index = tuple(int(i) for i in np.argwhere(~np.isfinite(c))[0])
        _fault("finite covariance", index, "a finite number", c[index], "check the noise level")
    rounding = 100 * eps * float(np.max(np.abs(c)))
    if np.max(np.abs(c - c.T)) > rounding:
        index = _worst(c - c.T)
        got = f"{c[index]:.6g} and {c.T[index]:.6g}"
        _fault("symmetry of the covariance", index, "C_ij = C_ji", got, "return (C + C') / 2")
    least = float(np.min(np.linalg.eigvalsh(c)))
    if least < -len(c) * rounding:
        hint = "a covariance is a sum of squares L L'"
        _fault("covariance has no negative eigenvalue", None, ">= 0", f"{least:.6g}", hint)


def _check_one_step(added: np.ndarray, exact: np.ndarray, q: np.ndarray, rtol: float) -> None:
    """Compare what steps of three lengths add; `q` is what the second must, so short it is."""
    whole, short, shorter = added
    total = np.trace(short)
    if total > 0:
        power = math.log2(total / max(float(np.trace(shorter)), total * 1e-9))
        if abs(power - 1) > 0.1:
            hint = "noise is added with variance proportional to h, amplitude to sqrt(h)"
            got = f"trace like h^{round(power, 2) + 0.0:.2f} for short steps"
            _fault("covariance grows like h", None, "a trace that grows like h^1", got, hint)
    size = np.sqrt(np.outer(np.diag(exact), np.diag(exact)))
    # An entry without variance must have none, to rounding.
    allowed = rtol * size + 1e-6 * np.max(size)
    excess = np.abs(whole - exact) - allowed
    if np.all(excess <= 0):
        return
    index = _worst(np.where(excess > 0, (whole - exact) / allowed, 0))
    got = f"{whole[index]:.6g}"
    expected = f"{exact[index]:.6g}, within {allowed[index]:.3g}"
    # Of a short step, in which only the noise itself counts.
    _fault("covariance of one step", index, expected, got, _hint(short, q, rtol))


@eqx.filter_jit
def _one_step(step: Any, params: Any, y0: Array, lengths: Array) -> tuple[Array, Array]:
    """Return the covariance that a step of each length declares, and the one that it adds."""

    def one(h):
        advance, t = step(params, h), jnp.zeros_like(h)
        middle = advance.into_noise(t, y0)
        flat = lambda y: advance.after(t, y.reshape(y0.shape)).reshape(-1)
        entry = jax.jacfwd(flat)(middle.reshape(-1))
        return advance.covariance, entry @ advance.covariance @ entry.T

    return jax.vmap(one)(lengths)


@eqx.filter_jit
def _exact(field: Any, rate: Rate, params: Any, y0: Array, h: Array) -> Array:
    """Return the covariance of small noise about the noiseless path after a time `h`."""
    small = h / _PIECES
    half, q = rk4(field)(params.field, small / 2), rate(params.noise)

    def piece(carry, k):
        y, covariance = carry
        t = small * k
        middle = half(t, y)
        flat = lambda x: field(t + small / 2, x.reshape(y0.shape), params.field).reshape(-1)
        matrix = jax.jacfwd(flat)(middle.reshape(-1))
        propagator, added = linear_transition(matrix, q, small)
        covariance = propagator @ covariance @ propagator.T + added
        return (half(t + small / 2, middle), covariance), None

    index = jnp.arange(_PIECES).astype(h.dtype)
    (_, covariance), _ = lax.scan(piece, (y0, jnp.zeros_like(q)), index)
    return covariance


@eqx.filter_jit
def _ends(step: Any, params: Any, y0: Array, h: Array, steps: int, key: Array, paths: int) -> Array:
    """Return where the paths end, shape `(path, size)`."""
    one = lambda k: noisy_rollout(step, params, y0, h, steps, key=k)[-1]
    return jax.vmap(one)(jax.random.split(key, paths)).reshape(paths, y0.size)


@eqx.filter_jit
def _reference_ends(
    field: Any, rate: Rate, params: Any, y0: Array, h: Array, steps: int, key: Array, paths: int
) -> Array:
    # Made in here, so that a second check of the same field compiles nothing anew.
    return _ends(split_noise(rk4(field), rate=rate), params, y0, h, steps, key, paths)


def _check_moments(got: np.ndarray, true: np.ndarray, rtol: float, alarm: float) -> None:
    import scipy.stats

    size = got.shape[1]
    bound = float(scipy.stats.norm.isf(alarm / (size * (size + 3))))
    words = f"{bound:.1f} standard errors, false alarm {alarm:.0e}"
    if not np.all(np.isfinite(got)):
        hint = "take a smaller `h`"
        _fault("finite paths", None, "finite states", "states that are not finite", hint)
    mean, error = got.mean(0), np.sqrt((got.var(0) + true.var(0)) / len(got))
    deviation = true.std(0)
    allowed = bound * error + rtol * (np.abs(true.mean(0)) + deviation)
    _moment("mean of simulated paths", mean, true.mean(0), allowed, words, "")
    products, expected = _products(got), _products(true)
    error = np.sqrt((products.var(0) + expected.var(0)) / len(got))
    allowed = bound * error + rtol * np.outer(deviation, deviation)
    ours, theirs = products.mean(0), expected.mean(0)
    _moment("covariance of simulated paths", ours, theirs, allowed, words, _hint(ours, theirs, 0.1))


def _products(x: np.ndarray) -> np.ndarray:
    centred = x - x.mean(0)
    return centred[:, :, None] * centred[:, None, :]


def _moment(
    prop: str, got: np.ndarray, true: np.ndarray, allowed: np.ndarray, words: str, hint: str
) -> None:
    excess = np.abs(got - true) - allowed
    if np.all(excess <= 0):
        return
    index = _worst(np.where(excess > 0, (got - true) / np.maximum(allowed, 1e-300), 0))
    expected = f"{true[index]:.6g}, within {allowed[index]:.3g} ({words})"
    hint = hint or "check where in the step the noise enters, and the map before and after it"
    _fault(prop, index, expected, f"{got[index]:.6g}", hint)


def _hint(got: np.ndarray, expected: np.ndarray, rtol: float) -> str:
    """Say how a covariance differs from what it should be."""
    share = float(np.vdot(got, expected) / np.vdot(expected, expected))
    if np.allclose(got, share * expected, rtol=0.0, atol=max(rtol, 0.05) * np.max(np.abs(got))):
        if abs(share - 1) > 0.1:
            return f"the covariance is {share:.3g} times what it should be"
        return "take a smaller `h`, or claim a larger error"
    own = np.diag(np.diag(expected))
    if np.any(expected != own) and np.allclose(
        np.diag(got), np.diag(expected), rtol=max(rtol, 0.05)
    ):
        return "the variances are right, the covariances between entries are not"
    return "compare the noise of every entry with `rate`"


def _worst(x: np.ndarray) -> tuple[int, ...]:
    return tuple(int(i) for i in np.unravel_index(np.argmax(np.abs(x)), x.shape))


def _fault(prop: str, index: Any, expected: Any, got: Any, hint: str) -> None:
    leaf = "states" if "paths" in prop else "NoisyAdvance.covariance"
    fail(prop, leaf=leaf, index=index, expected=expected, got=got, hint=hint)
