"""The picture of a fit: written, and nothing global changed."""

import sys

import jax.numpy as jnp

from oscillib.plots import plot_fit
from oscillib.recordings import recording


def test_writes_a_picture_of_every_channel(tmp_path):
    times = jnp.arange(20.0)
    values = jnp.stack([jnp.sin(times), jnp.cos(times)], axis=1).at[3, 0].set(jnp.nan)
    made = recording(times, values)
    ahead = jnp.arange(20.0, 25.0)
    band = jnp.zeros((5, 2))
    plot_fit(
        tmp_path / "fit.png", made, fitted=(times, made.values), joints=times[5::5],
        forecast=(ahead, band, band - 1, band + 1),
    )  # fmt: skip
    written = (tmp_path / "fit.png").read_bytes()
    assert written[:8] == b"\x89PNG\r\n\x1a\n"
    height = int.from_bytes(written[20:24], "big")
    assert height > 400  # two panels at 120 dots an inch
    pyplot = sys.modules.get("matplotlib.pyplot")
    assert pyplot is None or not pyplot.get_fignums()  # no figure is left open
