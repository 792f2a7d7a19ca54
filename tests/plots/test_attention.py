"""The picture of attention: written, with a panel pair a recording, and mistakes named."""

import jax.numpy as jnp
import pytest

from oscillib.plots import plot_attention
from oscillib.recordings import recording


TIMES = jnp.arange(8.0)
MADE = recording(TIMES, jnp.stack([jnp.sin(TIMES), jnp.cos(TIMES)], axis=1).at[3, 0].set(jnp.nan))


def height(path):
    written = path.read_bytes()
    assert written[:8] == b"\x89PNG\r\n\x1a\n"
    return int.from_bytes(written[20:24], "big")


def test_a_recording_more_makes_the_picture_taller(tmp_path):
    flat = jnp.full((3, 8), 1 / 8)
    plot_attention(tmp_path / "one.png", [MADE], [flat])
    rows = TIMES[:4] * 2
    plot_attention(
        tmp_path / "two.png", [MADE, MADE], [flat, jnp.full((1, 4), 0.25)],
        times=[TIMES, rows], titles=["a", "b"],
    )  # fmt: skip
    assert height(tmp_path / "two.png") > height(tmp_path / "one.png") + 200


def test_numbers_that_differ_are_refused(tmp_path, user_errors):
    flat = jnp.full((3, 8), 1 / 8)
    with pytest.raises(ValueError, match=r"`recordings`, `weights`.*got 1, 2, 1 and 1"):
        plot_attention(tmp_path / "x.png", [MADE], [flat, flat])
    with pytest.raises(ValueError, match=r"`weights\[0\]` must have shape \(head, row\)"):
        plot_attention(tmp_path / "x.png", [MADE], [flat[:, :4]])
