"""The haemodynamic balloon model: from activity to the blood-oxygen signal."""

from typing import Any, Literal

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Fixed, Free, Positive
from ._driven import observer_rows


# Of the revised signal, at 1.5 tesla: frequency offset at the surface of magnetised vessels (1/s),
# slope of the relaxation rate within them against oxygen extraction (1/s), echo time (s).
_OFFSET, _SLOPE, _ECHO = 40.3, 25.0, 0.04


class BalloonParams(eqx.Module):
    """Parameters of the balloon model; the defaults are prior means of the third paper.

    All arrays have shape `(node,)`. Time is in seconds: the defaults and the constants of the
    revised signal are.

    Arguments:
        efficacy: `eps`, how strongly activity dilates the vessels, per s^2 and unit of activity.
        decay: `kappa`, decay rate of the vasodilatory signal, per s; default 0.65.
        autoregulation: `gamma`, feedback of the flow, per s^2; default 0.41.
        transit: `tau`, mean transit time of blood, s; default 0.98.
        exponent: `alpha`, Grubb's, of volume against outflow; default 0.32.
        extraction: `E0`, oxygen extraction at rest, between 0 and 1; default 0.34.
        volume: `V0`, fraction of venous blood at rest; default 0.02.
        ratio: `e`, intra- against extravascular signal (revised signal only); default 1.43.

    Raises:
        ValueError: shapes differ.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.observe import BalloonParams
        >>> BalloonParams(efficacy=[0.5, 0.5]).transit
        Array([0.98, 0.98], dtype=float64)

    Source: Friston, Harrison & Penny 2003; `ratio`: Stephan et al. 2007 (both from memory).
    Friston et al. 2000 had efficacy 0.54, 1/kappa 1.54 s, 1/gamma 2.46 s^2, alpha 0.33.
    """

    efficacy: Float[Array, " node"]
    decay: Float[Array, " node"]
    autoregulation: Float[Array, " node"]
    transit: Float[Array, " node"]
    exponent: Float[Array, " node"]
    extraction: Float[Array, " node"]
    volume: Float[Array, " node"]
    ratio: Float[Array, " node"]

    def __init__(
        self,
        efficacy,
        *,
        decay=None,
        autoregulation=None,
        transit=None,
        exponent=None,
        extraction=None,
        volume=None,
        ratio=None,
    ):
        """Convert every array, fill in the defaults, and check shapes and dtypes."""
        self.efficacy = as_float(efficacy)
        check_shape("efficacy", self.efficacy, (None,), "(node,)")
        self.decay = self._matching("decay", decay, 0.65)
        self.autoregulation = self._matching("autoregulation", autoregulation, 0.41)
        self.transit = self._matching("transit", transit, 0.98)
        self.exponent = self._matching("exponent", exponent, 0.32)
        self.extraction = self._matching("extraction", extraction, 0.34)
        self.volume = self._matching("volume", volume, 0.02)
        self.ratio = self._matching("ratio", ratio, 1.43)

    def _matching(self, name: str, value: Any, default: float) -> Array:
        x = jnp.full_like(self.efficacy, default) if value is None else as_float(value)
        check_shape(name, x, self.efficacy.shape, "(node,)")
        check_same_dtype(name, x, "efficacy", self.efficacy)
        return x

    def constraints(self) -> "BalloonParams":
        """Return the usual constraints: efficacy free, decay and transit positive, others fixed.

        A single signal hardly determines the others.

        Example:
            >>> from oscillib.observe import BalloonParams
            >>> BalloonParams([0.5]).constraints().transit
            Positive()
        """
        leaves: list[Constraint] = [
            Free(), Positive(), Fixed(), Positive(), Fixed(), Fixed(), Fixed(), Fixed(),
        ]  # fmt: skip
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def balloon(
    t: Array | float,
    z: Float[Array, "4 node"],
    drive: Float[Array, " node"],
    params: BalloonParams,
) -> Float[Array, "4 node"]:
    """Observer that turns activity into blood flow, volume and deoxyhaemoglobin.

        ds/dt = eps u - kappa s - gamma (f - 1),    df/dt = s
        tau dv/dt = f - v^(1/alpha)
        tau dq/dt = f (1 - (1 - E0)^(1/f)) / E0 - v^(1/alpha) q / v

    with `u` the drive and the other symbols as in `BalloonParams`. The state is
    `(s, log f, log v, log q)`: rest is the origin, and no step can make a volume negative. A long
    strong inhibition, which would empty the vessels in the equations above, drives `log f` to minus
    infinity: a non-finite state.

    Known facts. Without drive the only fixed point is the origin; `balloon_steady` gives it for a
    constant drive. Flow answers as a damped oscillator of natural angular frequency `sqrt(gamma)`
    and decay rate `kappa / 2`.

    Arguments:
        t: not used.
        z: state `(s, log f, log v, log q)`, shape `(4, node)`.
        drive: activity, shape `(node,)`.
        params: see `BalloonParams`.

    Returns:
        `dz/dt`, shape `(4, node)`, per s.

    Raises:
        ValueError: shapes do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import BalloonParams, balloon
        >>> balloon(0.0, jnp.zeros((4, 1)), jnp.array([2.0]), BalloonParams([0.5]))[:2]
        Array([[1.],
               [0.]], dtype=float64)

    Source: Buxton, Wong & Frank 1998; Friston, Harrison & Penny 2003; logarithms of the state:
    Stephan et al. 2008 (all from memory).
    """
    del t
    _check(z, params)
    check_shape("drive", drive, params.efficacy.shape, "(node,)")
    p, s = params, z[0]
    f, v, q = jnp.exp(z[1:])
    outflow = jnp.exp(z[2] / p.exponent)
    ds = p.efficacy * drive - p.decay * s - p.autoregulation * (f - 1)
    dv = (f - outflow) / (p.transit * v)
    dq = (f * _extracted(f, p.extraction) / q - outflow / v) / p.transit
    return jnp.stack([ds, s / f, dv, dq])


def balloon_steady(drive: Float[Array, " node"], params: BalloonParams) -> Float[Array, "4 node"]:
    """Return the fixed point of `balloon` under a constant drive.

        s = 0,  f = 1 + eps u / gamma,  v = f^alpha,  q = v (1 - (1 - E0)^(1/f)) / E0

    Arguments:
        drive: constant activity `u`, shape `(node,)`.
        params: see `BalloonParams`.

    Returns:
        State `(0, log f, log v, log q)`, shape `(4, node)`; NaN where the drive would stop the
        flow, `u <= -gamma / eps`.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import BalloonParams, balloon_steady
        >>> print(jnp.exp(balloon_steady(jnp.array([0.1]), BalloonParams([1.0])).ravel()).round(6))
        [1.       1.243902 1.072338 0.895642]

    Source: as `balloon`; solved in closed form.
    """
    f = 1 + params.efficacy * drive / params.autoregulation
    f = jnp.where(f > 0, f, jnp.nan)
    log_v = params.exponent * jnp.log(f)
    log_q = log_v + jnp.log(_extracted(f, params.extraction))
    return jnp.stack([jnp.zeros_like(f), jnp.log(f), log_v, log_q])


class BalloonReadout(eqx.Module):
    """Readout of the blood-oxygen signal from the last four rows of a state.

        channel = V0 (k1 (1 - q) + k2 (1 - q / v) + k3 (1 - v))

    with, for `signal="classic"`, `k1 = 7 E0, k2 = 2, k3 = 2 E0 - 0.2`, and for `"revised"`, at 1.5
    tesla and an echo time of 40 ms, `k1 = 4.3 * 40.3 E0 TE, k2 = e * 25 E0 TE, k3 = 1 - e`.

    Arguments:
        signal: `"classic"` or `"revised"`; no default, because the two differ in size and shape.

    Raises:
        ValueError: `signal` is neither; on tracing, the state does not fit the parameters.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import BalloonParams, BalloonReadout, balloon_steady
        >>> params = BalloonParams(efficacy=[1.0])
        >>> readout = BalloonReadout(signal="classic")
        >>> print(readout(balloon_steady(jnp.array([0.1]), params), params).round(6))
        [0.010864]

    Source: classic: Buxton, Wong & Frank 1998 and Friston et al. 2000; revised: Stephan et al. 2007
    (all from memory).
    """

    signal: Literal["classic", "revised"] = eqx.field(static=True)

    def __check_init__(self):
        """Refuse an unknown signal."""
        if self.signal not in ("classic", "revised"):
            raise ValueError(f"`signal` must be 'classic' or 'revised'; got {self.signal!r}.")

    def __call__(self, y: Float[Array, "row node"], params: BalloonParams) -> Float[Array, " node"]:
        """Return the signal of every node, a fraction of that at rest, shape `(node,)`."""
        z = observer_rows(jnp.asarray(y), 4)
        _check(z, params)
        v, q = jnp.exp(z[2:])
        k1, k2, k3 = self.weights(params)
        return params.volume * (k1 * (1 - q) + k2 * (1 - q / v) + k3 * (1 - v))

    def weights(self, params: BalloonParams) -> Float[Array, "3 node"]:
        """Return `k1, k2, k3`, shape `(3, node)`.

        Example:
            >>> from oscillib.observe import BalloonParams, BalloonReadout
            >>> params = BalloonParams([1.0], extraction=[0.4])
            >>> print(BalloonReadout(signal="revised").weights(params).ravel().round(5))
            [ 2.77264  0.572   -0.43   ]
        """
        e0, ratio = params.extraction, params.ratio
        if self.signal == "classic":
            return jnp.stack([7 * e0, jnp.full_like(e0, 2), 2 * e0 - 0.2])
        return jnp.stack([4.3 * _OFFSET * e0 * _ECHO, ratio * _SLOPE * e0 * _ECHO, 1 - ratio])


def _extracted(f: Array, extraction: Array) -> Array:
    """Return the oxygen extracted from a unit of flow, against that at rest."""
    return -jnp.expm1(jnp.log1p(-extraction) / f) / extraction


def _check(z: Array, params: BalloonParams) -> None:
    check_shape("z", z, (4, params.efficacy.shape[0]), "(4, node)")
    check_same_dtype("z", z, "params.efficacy", params.efficacy)
