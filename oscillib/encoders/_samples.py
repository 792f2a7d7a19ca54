"""From samples to what the recurrence sees: values, which are missing, and irregular gaps."""

import equinox as eqx
import jax.numpy as jnp
import numpy as np
from jaxtyping import Array, Bool, Float

from .._validate import check_count, check_floating, check_same_dtype, check_shape
from ._network import Network
from ._rows import by_row


Mask = Bool[Array, "time channel"] | Bool[np.ndarray, "time channel"]


def extent(mask: Mask) -> Bool[Array, " time"]:
    """Tell which rows are within the recording: from the first to the last with a sample.

    Rows outside are padding: they are skipped and change nothing by a bit. Rows within, of which
    nothing was observed, are a gap: time passes there, and the recurrence goes through them.

    Arguments:
        mask: True where observed, shape `(time, channel)`.

    Returns:
        Shape `(time,)`; all False where nothing was observed.

    Raises:
        ValueError: `mask` has not two axes.
        TypeError: `mask` is not boolean.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import extent
        >>> extent(jnp.array([[False], [True], [False], [True], [False]])).tolist()
        [False, True, True, True, False]
    """
    mask = jnp.asarray(mask)
    check_shape("mask", mask, (None, None), "(time, channel)")
    if mask.dtype != jnp.bool_:
        raise TypeError(f"`mask` must be boolean, True where observed; got dtype {mask.dtype}.")
    seen = jnp.any(mask, axis=1)
    return (jnp.cumsum(seen) > 0) & (jnp.cumsum(seen[::-1])[::-1] > 0)


def sample_inputs(
    times: Float[Array, " time"] | None, values: Float[Array, "time channel"], mask: Mask
) -> Float[Array, "time input"]:
    """Return what a network sees of each sample, with nothing that is missing in it.

        row = (values or 0, mask as 0 or 1, time since the row before, time until the next)

    The mask among the inputs tells a missing value from one that is 0. The two intervals are 0 at
    the ends of the recording, and everything is 0 outside it. A masked entry changes neither the
    result nor a gradient by a bit, whatever it holds; its own gradient is exactly 0.

    Arguments:
        times: sample times, shape `(time,)`, increasing, in a unit in which an interval is about 1
            or less; `None`: evenly spaced, with 1 as the interval.
        values: shape `(time, channel)`, best scaled to a spread of about 1 (see
            `recordings.scale`); anything, also NaN, where `mask` is False.
        mask: True where observed, same shape.

    Returns:
        Shape `(time, 2 channel + 2)`.

    Raises:
        ValueError: shapes differ.
        TypeError: `values` is not floating, `mask` not boolean, or `times` is of another dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import sample_inputs
        >>> values = jnp.array([[5.0], [jnp.nan], [7.0]])
        >>> sample_inputs(jnp.array([0.0, 1.0, 3.0]), values, ~jnp.isnan(values))
        Array([[5., 1., 0., 1.],
               [0., 0., 1., 2.],
               [7., 1., 2., 0.]], dtype=float64)

    Source: the mask and the intervals as inputs, Che et al. 2018 (from memory).
    """
    check_shape("values", values, (None, None), "(time, channel)")
    check_floating("values", values)
    values, mask = jnp.asarray(values), jnp.asarray(mask)
    check_shape("mask", mask, values.shape, "that of `values`")
    inside = extent(mask)
    if times is None:
        times = jnp.arange(values.shape[0], dtype=values.dtype)
    check_shape("times", times, values.shape[:1], "(time,)")
    check_same_dtype("times", times, "values", values)
    # Replaced before the difference: times of padding may be anything.
    known = jnp.where(inside, times, 0)
    intervals = jnp.where(inside[1:] & inside[:-1], known[1:] - known[:-1], 0)
    edge = jnp.zeros(min(1, values.shape[0]), values.dtype)
    before, after = jnp.concatenate([edge, intervals]), jnp.concatenate([intervals, edge])
    parts = [jnp.where(mask, values, 0), mask.astype(values.dtype), before[:, None], after[:, None]]
    return jnp.concatenate(parts, axis=1)


class SampleMap(eqx.Module):
    """Map of each sample by itself to what the recurrence takes: linear or a small network.

        row_k = network(sample_inputs(times, values, mask)[k])

    Arguments:
        channels: channels of a recording.
        outputs: entries of a row.
        width: units of a hidden layer; default 32.
        depth: hidden layers; default 0, a linear map.
        key: random key of the first weights.
        dtype: precision of the weights; default that of JAX.

    Raises:
        ValueError: a size is out of range; on a call, shapes do not fit.
        TypeError: a size is not an int; on a call, dtypes differ.

    Example:
        >>> import jax
        >>> import jax.numpy as jnp
        >>> from oscillib.encoders import SampleMap
        >>> samples = SampleMap(3, 8, key=jax.random.key(0))
        >>> samples(None, jnp.ones((5, 3)), jnp.ones((5, 3), bool)).shape
        (5, 8)
    """

    network: Network

    def __init__(
        self,
        channels: int,
        outputs: int,
        *,
        width: int = 32,
        depth: int = 0,
        key: Array,
        dtype=None,
    ):
        """Draw the weights."""
        channels = check_count("channels", channels)
        self.network = Network(
            2 * channels + 2, outputs, width=width, depth=depth, key=key, dtype=dtype
        )

    def __call__(
        self, times: Float[Array, " time"] | None, values: Float[Array, "time channel"], mask: Mask
    ) -> Float[Array, "time feature"]:
        """Return one row a sample, shape `(time, outputs)`."""
        channels = self.network.inputs // 2 - 1
        check_shape("values", values, (None, channels), "(time, channel)")
        return by_row(self.network, sample_inputs(times, values, mask))
