"""Phase oscillators with lag (Kuramoto-Sakaguchi)."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_shape
from ..parameters import Constraint, Fixed, Free
from ._arrays import check_state, scalar
from ._coupling import Coupling, as_coupling, coupling_constraint, received


class KuramotoParams(eqx.Module):
    """Parameters of a network of phase oscillators.

    Arguments:
        frequency: angular frequency `w`, shape `(node,)`, rad per time unit.
        coupling: `K`, a matrix `(node, node)`, `K[i, j]` the pull of node j on node i, or `Edges`;
            per time unit; default zeros.
        lag: `alpha`, a scalar, rad; default 0.
        gain: `g`, a scalar that multiplies `K`; default 1.

    Raises:
        ValueError: an array is not of the shape given above.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.fields import KuramotoParams
        >>> KuramotoParams(frequency=[1.0, 1.3]).lag
        Array(0., dtype=float64)
    """

    frequency: Float[Array, " node"]
    coupling: Coupling
    lag: Float[Array, ""]
    gain: Float[Array, ""]

    def __init__(self, frequency, coupling=None, *, lag=None, gain=None):
        """Convert every array, fill in the defaults, and check shapes and dtypes."""
        self.frequency = as_float(frequency)
        check_shape("frequency", self.frequency, (None,), "(node,)")
        reference = ("frequency", self.frequency)
        self.coupling = as_coupling("coupling", coupling, reference)
        self.lag = scalar("lag", lag, 0.0, reference)
        self.gain = scalar("gain", gain, 1.0, reference)

    def constraints(self) -> "KuramotoParams":
        """Return the usual constraints: frequency and coupling free, lag and gain fixed.

        A frequency may be negative: it often counts from a rotating frame.

        Example:
            >>> from oscillib.fields import KuramotoParams
            >>> KuramotoParams([1.0, 1.3]).constraints().coupling
            OffDiagonal()
        """
        leaves: list[Constraint] = [
            Free(), coupling_constraint(self.coupling), Fixed(), Fixed(),
        ]  # fmt: skip
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def kuramoto(
    t: Array | float, y: Float[Array, "1 node"], params: KuramotoParams
) -> Float[Array, "1 node"]:
    """Vector field of phase oscillators with lag.

        dtheta_i/dt = w_i + g sum_j K_ij sin(theta_j - theta_i - alpha)

    where `w, K, alpha, g` are `frequency, coupling, lag, gain`. For the usual mean field give
    `coupling = ones((n, n)) / n` and the strength as `gain`. Phases are not wrapped.

    Known facts. Two oscillators with `K_12 = K_21 = K / 2` and a frequency difference `D` lock for
    `|D| <= K`, else they beat at `sqrt(D^2 - K^2)`. A large mean-field population whose
    frequencies follow a Lorentzian synchronises at `g = 2 half_width` (`lorentzian_order`).

    Arguments:
        t: not used.
        y: phases, rad, shape `(1, node)`.
        params: frequency, coupling, lag, gain.

    Returns:
        `dy/dt`, shape `(1, node)`, rad per time unit.

    Raises:
        ValueError: the state does not fit the parameters.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import KuramotoParams, kuramoto
        >>> params = KuramotoParams([1.0, 2.0], coupling=[[0.0, 0.5], [0.5, 0.0]])
        >>> kuramoto(0.0, jnp.array([[0.0, jnp.pi / 2]]), params)
        Array([[1.5, 1.5]], dtype=float64)

    Source: Kuramoto 1975; Sakaguchi & Kuramoto 1986 (from memory).
    """
    del t
    check_state(y, 1, ("frequency", params.frequency))
    theta = y[0]
    # sin(b - a) from sums over sines and cosines: no array of all pairs of phases.
    sine, cosine = received(params.coupling, jnp.stack([jnp.sin(theta), jnp.cos(theta)]))
    own = theta + params.lag
    pull = sine * jnp.cos(own) - cosine * jnp.sin(own)
    return (params.frequency + params.gain * pull)[None]


def order_parameter(theta: Float[Array, " node"]) -> Float[Array, "2"]:
    """Return the Kuramoto order parameter as the real pair of its mean cosine and mean sine.

        r e^(i psi) = (1/n) sum_j e^(i theta_j)

    Its length `r` is 1 where all phases agree and near `sqrt(pi / 4n)` where they are random. The
    pair is returned because `r` itself has no derivative at 0.

    Arguments:
        theta: phases, rad, shape `(node,)`.

    Returns:
        `(r cos psi, r sin psi)`, shape `(2,)`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import order_parameter
        >>> print(order_parameter(jnp.array([0.0, jnp.pi / 2])))
        [0.5 0.5]

    Source: Kuramoto 1975 (from memory).
    """
    check_shape("theta", theta, (None,), "(node,)")
    return jnp.stack([jnp.mean(jnp.cos(theta)), jnp.mean(jnp.sin(theta))])


def lorentzian_order(gain: Float[Array, ""], half_width: Float[Array, ""]) -> Float[Array, ""]:
    """Return the steady order parameter of infinitely many mean-field oscillators without lag.

        r = sqrt(1 - 2 half_width / gain) above the onset gain = 2 half_width, else 0

    Arguments:
        gain: strength of the mean field, per time unit.
        half_width: of the Lorentzian (Cauchy) distribution of frequencies, rad per time unit.

    Returns:
        `r`, a scalar.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.fields import lorentzian_order
        >>> print(f"{lorentzian_order(jnp.asarray(2.0), jnp.asarray(0.5)):.6f}")
        0.707107

    Source: Kuramoto 1975; Ott & Antonsen 2008 (from memory).
    """
    # Written so that no derivative is infinite or NaN below the onset.
    above = gain > 2 * half_width
    square = jnp.where(above, 1 - 2 * half_width / jnp.where(above, gain, 1), 1)
    return jnp.where(above, jnp.sqrt(square), 0)
