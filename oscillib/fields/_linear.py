"""The linear network, which noise keeps moving."""

from collections.abc import Callable

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Fixed, Free, OffDiagonal
from ._arrays import matching, scalar
from ._coupling import Kind, check_kind, received


State = Float[Array, "component node"]


class LinearParams(eqx.Module):
    """Parameters of a linear network.

    Arguments:
        local: `B`, shape `(node, component, component)`, per time unit: how the components of one
            node act on each other. See `relaxing` and `turning` for the two usual forms.
        coupling: `K`, shape `(node, node)`; `K[i, j]` is the drive of node i by node j, per time
            unit; default zeros.
        gain: `g`, a scalar that multiplies `K`; default 1.

    Raises:
        ValueError: an array is not of the shape given above.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.fields import LinearParams
        >>> LinearParams.turning(growth=[-0.1], frequency=[6.0]).local
        Array([[[-0.1, -6. ],
                [ 6. , -0.1]]], dtype=float64)
    """

    local: Float[Array, "node component component"]
    coupling: Float[Array, "node node"]
    gain: Float[Array, ""]

    def __init__(self, local, coupling=None, *, gain=None):
        """Convert every array, fill in the defaults, and check shapes and dtypes."""
        self.local = as_float(local)
        components = self.local.shape[1] if self.local.ndim > 1 else None
        axes = "(node, component, component)"
        check_shape("local", self.local, (None, components, components), axes)
        n, dtype = self.local.shape[0], self.local.dtype
        self.coupling = jnp.zeros((n, n), dtype) if coupling is None else as_float(coupling)
        check_shape("coupling", self.coupling, (n, n), "(node, node)")
        check_same_dtype("coupling", self.coupling, "local", self.local)
        self.gain = scalar("gain", gain, 1.0, ("local", self.local))

    @classmethod
    def relaxing(cls, rate, coupling=None, *, gain=None) -> "LinearParams":
        """Build nodes of one component that relax at a rate `(node,)`, per time unit.

        Example:
            >>> from oscillib.fields import LinearParams
            >>> LinearParams.relaxing(rate=[0.5]).local
            Array([[[-0.5]]], dtype=float64)
        """
        rate = as_float(rate)
        check_shape("rate", rate, (None,), "(node,)")
        return cls(-rate[:, None, None], coupling, gain=gain)

    @classmethod
    def turning(cls, growth, frequency, coupling=None, *, gain=None) -> "LinearParams":
        """Build planar nodes, damped where `growth < 0`: `HopfParams` without saturation.

        Both shapes `(node,)`; growth per time unit, frequency in rad per time unit.

        Example:
            >>> from oscillib.fields import LinearParams
            >>> LinearParams.turning(growth=[-0.1, -0.2], frequency=[6.0, 5.0]).coupling.shape
            (2, 2)
        """
        growth = as_float(growth)
        check_shape("growth", growth, (None,), "(node,)")
        frequency = matching("frequency", frequency, 0.0, ("growth", growth))
        rows = [jnp.stack([growth, -frequency], axis=1), jnp.stack([frequency, growth], axis=1)]
        return cls(jnp.stack(rows, axis=1), coupling, gain=gain)

    def constraints(self) -> "LinearParams":
        """Return the usual constraints: `local` free, coupling free off its diagonal, gain fixed.

        Example:
            >>> from oscillib.fields import LinearParams
            >>> LinearParams.relaxing([0.5]).constraints().coupling
            OffDiagonal()
        """
        leaves: list[Constraint] = [Free(), OffDiagonal(), Fixed()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


class LinearNetwork(eqx.Module):
    """Vector field of a linear network, the noise-driven network of damped nodes.

        dy_i/dt = B_i y_i + g sum_j K_ij (y_j - y_i)

    where `B, K, g` are `local, coupling, gain` of `LinearParams`, and `y_i` holds the components of
    node i. With `kind="additive"` the last term is `g sum_j K_ij y_j`. With noise and one component
    this is the multivariate Ornstein-Uhlenbeck process.

    Known facts. The origin is the only fixed point (unless `linear_matrix` is singular), stable
    where all eigenvalues of `linear_matrix` have negative real parts; a rhythm of mode k turns at
    the imaginary part of its eigenvalue. Under noise the stationary law is Gaussian.

    Its methods bear the names of `HopfNetwork`'s, so that it takes its place anywhere:
    `noisy_strang(field.saturation_flow, field.linear_matrix, rate=field.noise_rate)` is exact.

    Arguments:
        kind: `"diffusive"` (default) or `"additive"`.

    Raises:
        ValueError: `kind` is neither.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import LinearNetwork, LinearParams
        >>> params = LinearParams.relaxing([1.0, 1.0], coupling=[[0.0, 0.5], [0.0, 0.0]])
        >>> LinearNetwork()(0.0, jnp.array([[1.0, 3.0]]), params)
        Array([[ 0., -3.]], dtype=float64)

    Source: Uhlenbeck & Ornstein 1930; as a model of recordings of networks, Gilson, Moreno-Bote,
    Ponce-Alvarez, Ritter & Deco 2016 (from memory).
    """

    kind: Kind = eqx.field(static=True, default="diffusive")

    def __check_init__(self):
        """Refuse an unknown kind of coupling."""
        check_kind(self.kind)

    def __call__(self, t: Array | float, y: State, params: LinearParams) -> State:
        """Return `dy/dt`, shape `(component, node)`; `t` is not used."""
        del t
        _check_state(y, params)
        alone = jnp.einsum("ncd,dn->cn", params.local, y)
        return alone + params.gain * received(params.coupling, y, kind=self.kind)

    def linear_matrix(self, params: LinearParams) -> Float[Array, "state state"]:
        """Return the matrix of the field, on the state flattened component by component.

        Example:
            >>> from oscillib.fields import LinearNetwork, LinearParams
            >>> LinearNetwork().linear_matrix(LinearParams.turning([-1.0], [6.0]))
            Array([[-1., -6.],
                   [ 6., -1.]], dtype=float64)
        """
        n, components = params.local.shape[:2]
        between = params.gain * params.coupling
        if self.kind == "diffusive":
            between = between - jnp.diag(jnp.sum(between, axis=1))
        # Blocks of (component, component), each a (node, node) matrix.
        blocks = jnp.einsum("ncd,nm->cndm", params.local, jnp.eye(n, dtype=between.dtype))
        coupled = jnp.einsum("cd,nm->cndm", jnp.eye(components, dtype=between.dtype), between)
        return (blocks + coupled).reshape(n * components, n * components)

    def linear_flow(self, params: LinearParams, h: Float[Array, ""]) -> Callable[[State], State]:
        """Exact flow of the whole field over a time `h` (may be negative)."""
        propagator = jax.scipy.linalg.expm(h * self.linear_matrix(params))

        def apply(y: State) -> State:
            _check_state(y, params)
            return (propagator @ y.reshape(-1)).reshape(y.shape)

        return apply

    def saturation_flow(
        self, params: LinearParams, h: Float[Array, ""]
    ) -> Callable[[State], State]:
        """Flow of what is not linear: nothing, so the state is returned as it is."""
        del h

        def apply(y: State) -> State:
            _check_state(y, params)
            return y

        return apply

    def noise_rate(self, noise: Float[Array, "component node"]) -> Float[Array, "state state"]:
        """Return the covariance rate of independent noise on every component of every node.

        Example:
            >>> import jax.numpy as jnp
            >>> from oscillib.fields import LinearNetwork
            >>> LinearNetwork().noise_rate(jnp.array([[0.5, 2.0]]))
            Array([[0.25, 0.  ],
                   [0.  , 4.  ]], dtype=float64)
        """
        check_shape("noise", noise, (None, None), "(component, node)")
        return jnp.diag(noise.reshape(-1) ** 2)


def _check_state(y: Array, params: LinearParams) -> None:
    n, components = params.local.shape[:2]
    check_shape("y", y, (components, n), "(component, node)")
    check_same_dtype("y", y, "params.local", params.local)
