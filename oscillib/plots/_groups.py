"""Numbers with their intervals, by group: what was estimated of every recording."""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np


def plot_groups(
    path: Path | str,
    quantities: Mapping[str, Any],
    *,
    groups: Sequence[str],
    means: Mapping[str, Mapping[str, Any]] | None = None,
) -> None:
    """Draw a panel a quantity, with a point and an interval a recording, as PNG; extra `plots`.

    Host-side. Recordings stand group by group, in the order in which groups first appear.

    Arguments:
        path: file to write.
        quantities: name of each quantity, and its values and ends of intervals, shape
            `(recording, 3)`: value, lower, upper. A NaN is left out.
        groups: group of each recording.
        means: of each quantity, by group: value, lower and upper end for the group, drawn as a
            line and a band; default none.

    Raises:
        ImportError: matplotlib is not installed.
        ValueError: no quantity, or one of another shape.

    Example:
        >>> import tempfile, pathlib
        >>> from oscillib.plots import plot_groups
        >>> numbers = {"growth": [[0.1, 0.0, 0.2], [0.3, 0.2, 0.4]]}
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     file = pathlib.Path(folder) / "groups.png"
        ...     plot_groups(file, numbers, groups=["untreated", "treated"])
        ...     file.exists()
        True
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    if not quantities:
        raise ValueError("`quantities` must hold at least one quantity; got none.")
    figure = Figure(figsize=(9, 0.6 + 2.6 * len(quantities)), layout="constrained")
    FigureCanvasAgg(figure)
    panels = figure.subplots(len(quantities), 1, sharex=True, squeeze=False)[:, 0]
    order = list(dict.fromkeys(groups))
    sides = np.concatenate([np.flatnonzero([g == name for g in groups]) for name in order])
    for panel, (title, numbers) in zip(panels, quantities.items(), strict=True):
        numbers = np.asarray(numbers, float)
        if numbers.shape != (len(groups), 3):
            raise ValueError(
                f"`quantities[{title!r}]` must have shape ({len(groups)}, 3): value, lower and "
                f"upper for each entry of `groups`; got {numbers.shape}."
            )
        for k, name in enumerate(order):
            at = np.flatnonzero([groups[i] == name for i in sides])
            value, lower, upper = numbers[sides[at]].T
            panel.vlines(at, lower, upper, color=f"C{k}", lw=1.5)
            panel.plot(at, value, "o", ms=4, color=f"C{k}", label=name)
            if means is not None:
                middle, low, high = means[title][name]
                ends = [at[0] - 0.4, at[-1] + 0.4]
                panel.plot(ends, [middle] * 2, lw=1, color=f"C{k}")
                panel.fill_between(ends, [low] * 2, [high] * 2, color=f"C{k}", alpha=0.2, lw=0)
        panel.axhline(0, color="0.8", lw=0.8, zorder=0)
        panel.set_title(title, loc="left", fontsize=9)
        panel.spines[["top", "right"]].set_visible(False)
    panels[0].legend(loc="upper right", fontsize=8, frameon=False)
    panels[-1].set_xticks(range(len(groups)), [str(i + 1) for i in sides])
    panels[-1].set_xlabel("recording")
    figure.savefig(path, dpi=120)
