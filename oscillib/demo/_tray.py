"""An invented tray of cultured tissue slices whose clock reporter glows, with known truth."""

from typing import Literal, NamedTuple

import jax
import jax.numpy as jnp
from jaxtyping import Array, Float

from .._validate import check_count
from ..fields import HopfNetwork, HopfParams
from ..integrate import NoisyParams, noisy_rollout, noisy_strang
from ..observe import ReadoutParams, linear_readout
from ..recordings import Recording, recording


_HOURS_PER_SAMPLE = 0.5
_DAYS = 6
_SETTLE = 200  # samples before the recording starts, so that it starts on the attractor
_PERIOD = 24.0  # hours
_GROWTH = 0.04  # per hour
_DAMPED = -0.02  # per hour, where treatment damps
_COUPLING = 0.06  # per hour, between the regions of an untreated slice
_NOISE = 0.06  # per square root of an hour, for an amplitude near 1
_FADING = 1 / 90.0  # per hour
_GAP = (70.0, 73.0)  # hours during which the medium is changed and nothing is recorded
_MISSED = 0.01  # fraction of single readings lost


class Tray(NamedTuple):
    """What `tray` returns.

    Attributes:
        recording: glow of every region, counts, sampled each half hour for six days; time in hours.
        params: the true dynamics, in units of the state, per hour.
        readout: the true gain and offset before fading, counts.
        reading_noise: standard deviation of a reading, counts, shape `(channel,)`.
        treated: whether a channel belongs to a treated slice, one bool a channel.
    """

    recording: Recording
    params: NoisyParams
    readout: ReadoutParams
    reading_noise: Float[Array, " channel"]
    treated: tuple[bool, ...]


def tray(
    *,
    key: Array,
    slices: int = 2,
    regions: int = 3,
    effect: Literal["uncoupled", "damped"] = "uncoupled",
) -> Tray:
    """Simulate a tray of tissue slices, every second one treated, with known truth.

    Every region of an untreated slice is a self-sustained noisy Hopf unit with a period near 24
    hours, and pulls the other regions of its slice. Treatment either cuts the coupling and leaves
    the units as they are, or damps the units, which then ring on noise alone, and leaves the
    coupling. The glow fades slowly, readings are noisy, three hours are missing while the medium is
    changed, and a hundredth of the readings is lost.

    Arguments:
        key: random key; the same key gives the same tray.
        slices: number of slices, every second one treated; default 2.
        regions: regions recorded in each slice; default 3.
        effect: what treatment does: `"uncoupled"` (default) or `"damped"`. Both trays of a key have
            the same periods, gains and draws of noise.

    Returns:
        The recording and the truth behind it.

    Raises:
        ValueError: a count is below 1; `effect` is neither.
        TypeError: a count is not an int.

    Example:
        >>> import jax
        >>> from oscillib.demo import tray
        >>> out = tray(key=jax.random.key(0))
        >>> out.recording.channels[0], out.recording.values.shape
        ('slice 1 untreated, region 1', (283, 6))

    Source: invented.
    """
    check_count("slices", slices)
    check_count("regions", regions)
    if effect not in ("uncoupled", "damped"):
        raise ValueError(f"`effect` must be 'uncoupled' or 'damped'; got {effect!r}.")
    spread_key, start_key, path_key, reading_key, missed_key = jax.random.split(key, 5)
    treated = jnp.arange(slices).repeat(regions) % 2 == 1
    params = _dynamics(spread_key, treated, regions, effect)
    n = slices * regions
    gain = 250 + 100 * jax.random.uniform(jax.random.fold_in(spread_key, 1), (n,))
    readout = ReadoutParams(gain, offset=3 * gain)
    reading_noise = 0.08 * gain

    field = HopfNetwork()
    step = noisy_strang(field.saturation_flow, field.linear_matrix)
    count = round(_DAYS * 24 / _HOURS_PER_SAMPLE)
    start = jax.random.normal(start_key, (2, n))
    states = noisy_rollout(
        step, params, start, _HOURS_PER_SAMPLE, _SETTLE + count - 1, key=path_key
    )[_SETTLE:]
    times = _HOURS_PER_SAMPLE * jnp.arange(count).astype(gain.dtype)
    glow = jax.vmap(linear_readout, in_axes=(0, None))(states, readout)
    glow = glow - readout.offset[None] * (1 - jnp.exp(-_FADING * times))[:, None] / 2
    glow = glow + reading_noise[None] * jax.random.normal(reading_key, glow.shape)
    missed = jax.random.uniform(missed_key, glow.shape) < _MISSED
    kept = (times <= _GAP[0]) | (times >= _GAP[1])
    names = [
        f"slice {k // regions + 1} {'treated' if treated[k] else 'untreated'}, "
        f"region {k % regions + 1}"
        for k in range(n)
    ]
    values = jnp.where(missed, jnp.nan, glow)
    return Tray(
        recording(times[kept], values[kept], channels=names),
        params,
        readout,
        reading_noise,
        tuple(bool(t) for t in treated),
    )


def _dynamics(key: Array, treated: Array, regions: int, effect: str) -> NoisyParams:
    n = treated.shape[0]
    period = _PERIOD + 1.5 * jax.random.uniform(key, (n,), minval=-1.0)
    of_slice = jnp.arange(n) // regions
    within = of_slice[:, None] == of_slice[None, :]
    growth = saturation = jnp.full(n, _GROWTH)
    if effect == "uncoupled":
        within = within & ~treated[:, None]
    else:
        growth = jnp.where(treated, jnp.full_like(growth, _DAMPED), growth)
    coupling = jnp.where(within & ~jnp.eye(n, dtype=bool), _COUPLING / regions, 0.0)
    field = HopfParams(growth, 2 * jnp.pi / period, saturation=saturation, coupling=coupling)
    return NoisyParams(field, noise=jnp.full(n, _NOISE))
