"""A linear map or a small network: what the other blocks are made of."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import check_count, check_same_dtype, check_shape


class Network(eqx.Module):
    """A linear map, or a small network with tanh units, from one vector to another.

        x_0 = x,    x_(k+1) = tanh(W_k x_k + b_k),    output = W_depth x_depth + b_depth

    All leaves are arrays, so that `jax.grad` and optax take it as it is.

    Arguments:
        inputs: entries of `x`.
        outputs: entries of the output.
        width: units of a hidden layer; default 32.
        depth: hidden layers; default 0, a linear map.
        zero: start with the last layer at zero, so that the output is exactly zero until trained;
            default False.
        key: random key of the first weights.
        dtype: precision of the weights; default that of JAX.

    Raises:
        ValueError: a size is out of range; on a call, `x` has another length.
        TypeError: a size is not an int; on a call, `x` has another dtype than the weights.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import Network
        >>> network = Network(3, 2, depth=1, key=jax.random.key(0))
        >>> network(jnp.ones(3)).shape
        (2,)
    """

    layers: tuple[eqx.nn.Linear, ...]

    def __init__(
        self,
        inputs: int,
        outputs: int,
        *,
        width: int = 32,
        depth: int = 0,
        zero: bool = False,
        key: Array,
        dtype=None,
    ):
        """Draw the weights."""
        inputs, outputs = check_count("inputs", inputs), check_count("outputs", outputs)
        width, depth = check_count("width", width), check_count("depth", depth, least=0)
        sizes = [inputs, *[width] * depth, outputs]
        keys = jax.random.split(key, depth + 1)
        layers = [
            eqx.nn.Linear(a, b, key=k, dtype=dtype)
            for a, b, k in zip(sizes[:-1], sizes[1:], keys, strict=True)
        ]
        if zero:
            layers[-1] = jax.tree.map(jnp.zeros_like, layers[-1])
        self.layers = tuple(layers)

    @property
    def inputs(self) -> int:
        """Entries of the input."""
        return self.layers[0].weight.shape[1]

    @property
    def outputs(self) -> int:
        """Entries of the output."""
        return self.layers[-1].weight.shape[0]

    def __call__(self, x: Float[Array, " input"]) -> Float[Array, " output"]:
        """Return the output for one vector."""
        check_shape("x", x, (self.inputs,), "(input,)")
        check_same_dtype("x", x, "the weights", self.layers[0].weight)
        for layer in self.layers[:-1]:
            x = jnp.tanh(layer(x))
        return self.layers[-1](x)


def decode(y: Float[Array, "*state"], params: Network) -> Float[Array, " channel"]:
    """Read channels off a latent state by a linear map or a small network.

        channels = params(y flattened)

    It is a readout like any other, with the network as its parameters: it goes into rollouts,
    windows and filters. The dynamics stay in the latent state, so windows are still joined there:
    give `losses.continuity` the gaps of the latent state, which exist whatever is missing from the
    recording.

    Arguments:
        y: latent state, any shape.
        params: a `Network` with as many inputs as `y` has entries and an output a channel.

    Returns:
        Shape `(channel,)`.

    Raises:
        ValueError: the network takes another number of entries.
        TypeError: dtypes differ.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import Network, decode
        >>> from oscillib.fields import HopfNetwork, HopfParams
        >>> from oscillib.integrate import cut, roll_windows, strang
        >>> from oscillib.losses import continuity
        >>> field = HopfNetwork()
        >>> step = strang(field.unit_flow, field.coupling_flow)
        >>> windows = cut(jnp.linspace(0.0, 2.0, 21), 10)
        >>> starts = jnp.full((2, 2, 1), 0.5)  # (window, component, node), latent
        >>> rolled = roll_windows(step, HopfParams([0.2], [6.0]), starts, windows)
        >>> network = Network(2, 5, depth=1, key=jax.random.key(0))
        >>> read = jax.vmap(jax.vmap(decode, in_axes=(0, None)), in_axes=(0, None))
        >>> read(rolled.states, network).shape  # (window, time, channel)
        (2, 11, 5)
        >>> bool(continuity(rolled.gaps, weight=1.0) > 0)  # of the latent state, not of channels
        True

    Source: common practice, no source.
    """
    y = jnp.asarray(y)
    if y.size != params.inputs:
        raise ValueError(
            f"`params` must take the {y.size} entries of a state `y` of shape {y.shape}; it takes "
            f"{params.inputs}. Fix: `Network({y.size}, channels, key=key)`."
        )
    return params(y.reshape(-1))
