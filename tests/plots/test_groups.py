"""The picture of groups: written, missing numbers left out, and mistakes named."""

import numpy as np
import pytest

from oscillib.plots import plot_groups


NUMBERS = np.array([[0.1, 0.0, 0.2], [np.nan] * 3, [0.3, 0.2, 0.4]])


def test_writes_a_panel_of_each_quantity(tmp_path):
    path = tmp_path / "groups.png"
    plot_groups(
        path, {"growth": NUMBERS, "coupling": NUMBERS}, groups=["a", "b", "a"],
        means={k: {"a": (0.2, 0.1, 0.3), "b": (np.nan,) * 3} for k in ("growth", "coupling")},
    )  # fmt: skip
    written = path.read_bytes()
    assert written[:8] == b"\x89PNG\r\n\x1a\n"
    assert int.from_bytes(written[20:24], "big") > 600  # two panels at 120 dots an inch


def test_shapes_are_checked(tmp_path, user_errors):
    with pytest.raises(ValueError, match=r"`quantities\['growth'\]` must have shape \(2, 3\)"):
        plot_groups(tmp_path / "x.png", {"growth": NUMBERS}, groups=["a", "b"])
    with pytest.raises(ValueError, match="at least one quantity"):
        plot_groups(tmp_path / "x.png", {}, groups=["a"])
