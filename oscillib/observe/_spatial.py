"""Spatial maps: channels from components, and errors of channels mapped back."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Fixed, Free
from ._linear import ReadoutParams, linear_readout


class MapParams(eqx.Module):
    """A known spatial map, and the gain of each of its components.

    Arguments:
        weight: shape `(channel, component)`: how much of each component a channel shows.
        gain: shape `(component,)`, channel units per unit of state; default ones.
        offset: shape `(channel,)`, channel units; default zeros.

    Raises:
        ValueError: shapes other than these.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.observe import MapParams
        >>> MapParams(weight=[[1.0, 0.0], [0.5, 0.5], [0.0, 1.0]]).gain
        Array([1., 1.], dtype=float64)
    """

    weight: Float[Array, "channel component"]
    gain: Float[Array, " component"]
    offset: Float[Array, " channel"]

    def __init__(self, weight, *, gain=None, offset=None):
        """Convert every array, fill in the defaults, and check shapes and dtypes."""
        self.weight = as_float(weight)
        check_shape("weight", self.weight, (None, None), "(channel, component)")
        channels, components = self.weight.shape
        dtype = self.weight.dtype
        self.gain = jnp.ones(components, dtype) if gain is None else as_float(gain)
        self.offset = jnp.zeros(channels, dtype) if offset is None else as_float(offset)
        check_shape("gain", self.gain, (components,), "(component,)")
        check_shape("offset", self.offset, (channels,), "(channel,)")
        check_same_dtype("gain", self.gain, "weight", self.weight)
        check_same_dtype("offset", self.offset, "weight", self.weight)

    def constraints(self) -> "MapParams":
        """Return the usual constraints: the map is fixed, gain and offset are free.

        Example:
            >>> from oscillib.observe import MapParams
            >>> MapParams([[1.0]]).constraints().weight
            Fixed()
        """
        leaves: list[Constraint] = [Fixed(), Free(), Free()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def map_readout(y: Float[Array, "component node"], params: MapParams) -> Float[Array, " channel"]:
    """Read channels from the nodes through a known spatial map.

        channel_c = sum_k weight_ck gain_k x_k + offset_c

    with `x_k` the first component of node k: a component of the map is a node of the network.

    Arguments:
        y: one state, shape `(component, node)`.
        params: map, gain and offset.

    Returns:
        Shape `(channel,)`, channel units.

    Raises:
        ValueError: the state does not fit the map.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import MapParams, map_readout
        >>> params = MapParams([[1.0, 0.0], [0.5, 0.5]], gain=[2.0, 1.0])
        >>> map_readout(jnp.array([[1.0, 3.0]]), params)
        Array([2. , 2.5], dtype=float64)

    Source: common practice, no source.
    """
    return linear_readout(y, ReadoutParams(params.weight * params.gain[None], params.offset))


def map_back(
    error: Float[Array, "*batch channel"], weight: Float[Array, "channel component"]
) -> Float[Array, "*batch component"]:
    """Map an error per channel back to the components that the channels show.

        error_k = sum_c weight_ck^2 error_c / sum_c weight_ck^2

    A mean over channels, each counting by how much of its power a component makes: the mean error,
    and the units, stay what they were. Where a component is shown by no channel the result is NaN.

    Arguments:
        error: any error per channel, such as a mean squared one, shape `(..., channel)`.
        weight: the map, shape `(channel, component)`.

    Returns:
        Shape `(..., component)`, in the units of `error`.

    Raises:
        ValueError: the channels do not fit.
        TypeError: dtypes differ.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import map_back
        >>> map_back(jnp.array([1.0, 4.0]), jnp.array([[1.0, 0.0], [1.0, 2.0]]))
        Array([2.5, 4. ], dtype=float64)

    Source: common practice, no source.
    """
    error, weight = as_float(error), as_float(weight)
    check_shape("weight", weight, (None, None), "(channel, component)")
    check_shape("error", error, (*error.shape[:-1], weight.shape[0]), "(..., channel)")
    check_same_dtype("error", error, "weight", weight)
    power = weight**2
    return error @ (power / jnp.sum(power, axis=0)[None])
