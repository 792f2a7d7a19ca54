"""Waveform readout: rhythms that are not sinusoids, read from one planar unit a channel."""

import equinox as eqx
import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import as_float, check_same_dtype, check_shape
from ..parameters import Constraint, Free, Positive


class WaveformParams(eqx.Module):
    """Gain, offset and overtones of a waveform readout.

    Arguments:
        gain: shape `(channel,)`, channel units per unit of state.
        offset: shape `(channel,)`, channel units; default zeros.
        cosine: shape `(channel, overtone)`; entry k weighs `Re z^(k + 2)`; default one overtone
            of zero weight.
        sine: same shape; entry k weighs `Im z^(k + 2)`; default zeros.
        level: shape `(channel,)`: how the mean of a cycle moves with its squared amplitude;
            default zeros.

    Raises:
        ValueError: shapes other than these.
        TypeError: dtypes differ.

    Example:
        >>> from oscillib.observe import WaveformParams
        >>> WaveformParams(gain=[2.0]).cosine
        Array([[0.]], dtype=float64)
    """

    gain: Float[Array, " channel"]
    offset: Float[Array, " channel"]
    cosine: Float[Array, "channel overtone"]
    sine: Float[Array, "channel overtone"]
    level: Float[Array, " channel"]

    def __init__(self, gain, offset=None, *, cosine=None, sine=None, level=None):
        """Convert every array, fill in the defaults, and check that they fit."""
        self.gain = as_float(gain)
        check_shape("gain", self.gain, (None,), "(channel,)")
        n, dtype = self.gain.shape[0], self.gain.dtype
        given = next((as_float(x) for x in (cosine, sine) if x is not None), None)
        overtones = jnp.zeros((n, 1) if given is None else given.shape, dtype)
        self.offset = jnp.zeros(n, dtype) if offset is None else as_float(offset)
        self.cosine = overtones if cosine is None else as_float(cosine)
        self.sine = overtones if sine is None else as_float(sine)
        self.level = jnp.zeros(n, dtype) if level is None else as_float(level)
        check_shape("offset", self.offset, (n,), "(channel,)")
        check_shape("level", self.level, (n,), "(channel,)")
        check_shape("cosine", self.cosine, (n, None), "(channel, overtone)")
        check_shape("sine", self.sine, self.cosine.shape, "(channel, overtone)")
        for name in ("offset", "cosine", "sine", "level"):
            check_same_dtype(name, getattr(self, name), "gain", self.gain)

    def constraints(self) -> "WaveformParams":
        """Return the usual constraints: the gain is positive, the rest free.

        Example:
            >>> from oscillib.observe import WaveformParams
            >>> WaveformParams(gain=[2.0]).constraints().level
            Free()
        """
        leaves: list[Constraint] = [Positive(), Free(), Free(), Free(), Free()]
        return jax.tree.unflatten(jax.tree.structure(self), leaves)


def waveform_readout(y: Float[Array, "2 node"], params: WaveformParams) -> Float[Array, " channel"]:
    """Read each channel from one planar unit `z = x + iy`, overtones included.

        channel = offset + gain (x + level |z|^2 + sum_k cosine_k Re z^k + sine_k Im z^k)

    with k from 2 up. A rhythm that rises faster than it falls, or whose mean follows its
    amplitude, needs no extra unit this way: the overtones stay locked to the phase.

    Arguments:
        y: one state, shape `(2, node)`; node i is read by channel i.
        params: gain, offset and overtones.

    Returns:
        Shape `(channel,)`, channel units.

    Raises:
        ValueError: the state is not `(2, channel)`.
        TypeError: state and gain differ in dtype.

    Example:
        >>> import jax.numpy as jnp
        >>> from oscillib.observe import WaveformParams, waveform_readout
        >>> params = WaveformParams(gain=[1.0], cosine=[[0.5]], level=[0.25])
        >>> waveform_readout(jnp.array([[2.0], [0.0]]), params)  # 2 + 0.25 * 4 + 0.5 * 4
        Array([5.], dtype=float64)

    Source: Fourier series of a waveform over the phase; common practice, no source.
    """
    y = jnp.asarray(y)
    check_shape("y", y, (2, params.gain.shape[0]), "(component, node)")
    check_same_dtype("y", y, "params.gain", params.gain)
    x, v = y
    read = x + params.level * (x**2 + v**2)
    real, imaginary = x, v
    for k in range(params.cosine.shape[1]):
        real, imaginary = real * x - imaginary * v, real * v + imaginary * x
        read = read + params.cosine[:, k] * real + params.sine[:, k] * imaginary
    return params.offset + params.gain * read
