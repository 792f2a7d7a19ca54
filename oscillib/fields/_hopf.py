"""The Hopf normal-form (Stuart-Landau) network and its exact sub-flows."""

import math
from collections.abc import Callable
from typing import Literal

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Fixed, Free, OffDiagonal, Positive
from ._exponential import expm


State = Float[Array, "2 node"]


class HopfParams(eqx.Module):
    """Parameters of a Hopf normal-form network.

    Arguments:
        growth: bifurcation parameter `a`, shape `(node,)`, per time unit: below zero the unit is
            damped, above zero it oscillates by itself.
        frequency: angular frequency `w`, shape `(node,)`, rad per time unit.
        shear: `c`, shape `(node,)`: frequency falls by `c r^2` at amplitude `r`; default zeros.
        saturation: `b >= 0`, shape `(node,)`: growth falls by `b r^2`; default ones. A negative
            value blows up in finite time and yields non-finite states.
        coupling: `K`, shape `(node, node)`; `K[i, j]` is the drive of node i by node j, per time
            unit; default zeros.
        gain: `g`, a scalar that multiplies `K`; default 1.

    Raises:
        ValueError: an array is not of the shape given above; the coupling is not square.
        TypeError: the arrays differ in dtype.

    Example:
        >>> from oscillib.fields import HopfParams
        >>> HopfParams(growth=[0.2, -0.1], frequency=[6.0, 6.5]).saturation
        Array([1., 1.], dtype=float64)
    """

    growth: Float[Array, " node"]
    frequency: Float[Array, " node"]
    shear: Float[Array, " node"]
    saturation: Float[Array, " node"]
    coupling: Float[Array, "node node"]
    gain: Float[Array, ""]

    def __init__(self, growth, frequency, *, shear=None, saturation=None, coupling=None, gain=None):
        """Convert every array, fill in the defaults, and check shapes and dtypes."""
        self.growth = as_float(growth)
        check_shape("growth", self.growth, (None,), "(node,)")
        n, dtype = self.growth.shape[0], self.growth.dtype
        self.frequency = as_float(frequency)
        self.shear = jnp.zeros(n, dtype) if shear is None else as_float(shear)
        self.saturation = jnp.ones(n, dtype) if saturation is None else as_float(saturation)
        self.coupling = jnp.zeros((n, n), dtype) if coupling is None else as_float(coupling)
        self.gain = jnp.ones((), dtype) if gain is None else as_float(gain)
        for name in ("frequency", "shear", "saturation"):
            check_shape(name, getattr(self, name), (n,), "(node,)")
        check_shape("coupling", self.coupling, (n, n), "(node, node)")
        check_shape("gain", self.gain, (), "()")
        for name in ("frequency", "shear", "saturation", "coupling", "gain"):
            check_same_dtype(name, getattr(self, name), "growth", self.growth)

    def constraints(self) -> "HopfParams":
        """Return the usual constraints, in the structure of the parameters.

        Growth is free, frequency and saturation are positive, the coupling free off its diagonal.
        Shear and gain are fixed: a single recorded component rarely determines the shear, and the
        gain only rescales the coupling matrix. Change one with `eqx.tree_at`.

        Example:
            >>> from oscillib.fields import HopfParams
            >>> HopfParams([0.2], [6.0]).constraints().shear
            Fixed()
        """
        leaves: list[Constraint] = [
            Free(), Positive(), Fixed(), Positive(), OffDiagonal(), Fixed(),
        ]  # fmt: skip
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


class HopfNetwork(eqx.Module):
    """Vector field of a network of Hopf normal-form (Stuart-Landau) units.

    With `z = x + iy` for each node,

        dz_i/dt = (a_i + i w_i) z_i - (b_i + i c_i) |z_i|^2 z_i + g sum_j K_ij (z_j - z_i)

    where `a, w, c, b, K, g` are `growth, frequency, shear, saturation, coupling, gain` of
    `HopfParams`. With `kind="additive"` the last term is `g sum_j K_ij z_j`.

    The field is the sum of two parts whose flows are known exactly, and it can be cut in two ways:
    `saturation_flow` and `linear_flow` (growth, rotation and coupling of the whole network), or
    `unit_flow` (whole single units) and `coupling_flow`.

    Arguments:
        kind: `"diffusive"` (default) or `"additive"`.

    Raises:
        ValueError: `kind` is neither.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> field = HopfNetwork()
        >>> field(0.0, jnp.array([[1.0], [0.0]]), HopfParams(growth=[1.0], frequency=[6.0]))
        Array([[0.],
               [6.]], dtype=float64)

    Source: normal form of the Hopf bifurcation, Kuramoto 1984 (from memory).
    """

    kind: Literal["diffusive", "additive"] = eqx.field(static=True, default="diffusive")

    def __check_init__(self):
        """Refuse an unknown kind of coupling."""
        if self.kind not in ("diffusive", "additive"):
            raise ValueError(f"`kind` must be 'diffusive' or 'additive'; got {self.kind!r}.")

    def __call__(self, t: Array | float, y: State, params: HopfParams) -> State:
        """Return `dy/dt`, shape `(2, node)`; `t` is not used."""
        del t
        check_state(y, params)
        r2 = jnp.sum(y**2, axis=0)
        growth = params.growth - params.saturation * r2
        turn = params.frequency - params.shear * r2
        rotated = jnp.stack([-y[1], y[0]])
        return growth[None] * y + turn[None] * rotated + y @ self.coupling_matrix(params).T

    def coupling_matrix(self, params: HopfParams) -> Float[Array, "node node"]:
        """Return the matrix `M` with which coupling acts on each component: `dx/dt = M x`."""
        k = params.gain * params.coupling
        return k - jnp.diag(jnp.sum(k, axis=1)) if self.kind == "diffusive" else k

    def linear_matrix(self, params: HopfParams) -> Float[Array, "state state"]:
        """Return the Jacobian at the origin, on the state flattened component by component.

        Example:
            >>> from oscillib.fields import HopfNetwork, HopfParams
            >>> HopfNetwork().linear_matrix(HopfParams(growth=[1.0], frequency=[6.0]))
            Array([[ 1., -6.],
                   [ 6.,  1.]], dtype=float64)
        """
        diagonal = jnp.diag(params.growth) + self.coupling_matrix(params)
        turn = jnp.diag(params.frequency)
        return jnp.block([[diagonal, -turn], [turn, diagonal]])

    def linear_flow(self, params: HopfParams, h: Float[Array, ""]) -> Callable[[State], State]:
        """Exact flow of growth, rotation and coupling over a time `h` (may be negative)."""
        propagator = expm(h * self.linear_matrix(params))

        def apply(y: State) -> State:
            check_state(y, params)
            return (propagator @ y.reshape(-1)).reshape(y.shape)

        return apply

    def coupling_flow(self, params: HopfParams, h: Float[Array, ""]) -> Callable[[State], State]:
        """Exact flow of the coupling alone over a time `h` (may be negative)."""
        propagator = expm(h * self.coupling_matrix(params))

        def apply(y: State) -> State:
            check_state(y, params)
            return y @ propagator.T

        return apply

    def saturation_flow(self, params: HopfParams, h: Float[Array, ""]) -> Callable[[State], State]:
        """Exact flow of saturation and shear over a time `h`.

        With `u = 2 b h |z|^2`: `z -> z (1 + u)^(-1/2 - i c / 2b)`. Backwards in time it exists
        while `u > -1`; beyond, the result is NaN.
        """

        def apply(y: State) -> State:
            check_state(y, params)
            return _saturate(y, h, params)

        return apply

    def unit_flow(self, params: HopfParams, h: Float[Array, ""]) -> Callable[[State], State]:
        """Exact flow of every uncoupled unit over a time `h`.

        With `u = b |z|^2 (e^(2ah) - 1) / a`: `z -> z e^((a + iw) h) (1 + u)^(-1/2 - i c / 2b)`.

        Example:
            >>> import jax.numpy as jnp
            >>> from oscillib.fields import HopfNetwork, HopfParams
            >>> p = HopfParams([0.4], [3.0], shear=[0.9], saturation=[1.5])
            >>> flow = HopfNetwork().unit_flow(p, jnp.asarray(7.0))
            >>> print(jnp.round(flow(jnp.array([[0.2], [0.1]])).ravel(), 6))
            [0.071124 0.507348]
        """
        a, w = params.growth, params.frequency
        # (e^(2ah) - 1) / 2a is the time the saturation would need on its own to do as much.
        equivalent = h * _expm1_over(2 * a * h)
        factor = jnp.exp(a * h)

        def apply(y: State) -> State:
            check_state(y, params)
            return factor[None] * _rotate(_saturate(y, equivalent, params), w * h)

        return apply


def check_state(y: Array, params: HopfParams) -> None:
    """Raise unless `y` has shape `(2, node)` and the parameters' dtype."""
    check_shape("y", y, (2, params.growth.shape[0]), "(component, node)")
    check_same_dtype("y", y, "params.growth", params.growth)


def _saturate(y: State, h: Array, params: HopfParams) -> State:
    r2h = h * jnp.sum(y**2, axis=0)
    u = 2 * params.saturation * r2h
    # log(1 + u) / 2b = h r^2 log1p(u) / u stays exact where b or r vanishes.
    turn = -params.shear * r2h * _log1p_over(u)
    return _rotate(y, turn) / jnp.sqrt(1 + u)[None]


def _rotate(y: State, angle: Array) -> State:
    c, s = jnp.cos(angle), jnp.sin(angle)
    return jnp.stack([c * y[0] - s * y[1], s * y[0] + c * y[1]])


# Where the series below take over. Closer to 0 the derivatives of the quotients cancel: the second
# one loses 2 / u^2 roundings, which at 1e-3 is all of float32's digits.
_SERIES_BELOW = 0.03


def _log1p_over(u: Array) -> Array:
    """Return `log(1 + u) / u`, by its series near 0 so that every derivative exists there."""
    small = jnp.abs(u) < _SERIES_BELOW
    safe = jnp.where(small, 1.0, u)
    near = jnp.where(small, u, 0.0)
    # log(1 + u) = 2 atanh(v), v = u / (2 + u): five terms of this series suffice for float64.
    v2 = (near / (2 + near)) ** 2
    series = 2 / (2 + near) * _polynomial(v2, [1 / (2 * k + 1) for k in range(5)])
    return jnp.where(small, series, jnp.log1p(safe) / safe)


def _expm1_over(u: Array) -> Array:
    """Return `(exp(u) - 1) / u`, by its series near 0 so that every derivative exists there."""
    small = jnp.abs(u) < _SERIES_BELOW
    safe = jnp.where(small, 1.0, u)
    series = _polynomial(jnp.where(small, u, 0.0), [1 / math.factorial(k + 1) for k in range(8)])
    return jnp.where(small, series, jnp.expm1(safe) / safe)


def _polynomial(x: Array, coefficients: list[float]) -> Array:
    total = jnp.full_like(x, coefficients[-1])
    for c in coefficients[-2::-1]:
        total = total * x + c
    return total
