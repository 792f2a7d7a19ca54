"""Where a network looked: recordings with the weights of attention beneath."""

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from ..recordings import Recording


def plot_attention(
    path: Path | str,
    recordings: Sequence[Recording],
    weights: Sequence[Any],
    *,
    times: Sequence[Any] | None = None,
    titles: Sequence[str] | None = None,
) -> None:
    """Draw recordings with the weights of each head beneath, as PNG. Host-side; extra `plots`.

    Arguments:
        path: file to write.
        recordings: what was recorded; missing samples are left out.
        weights: of each recording `Proposal.weights`, shape `(head, row)`.
        times: of each recording the times of the rows, `(row,)`; default: a row a sample.
        titles: one a recording; default: its number.

    Raises:
        ImportError: matplotlib is not installed.
        ValueError: no recording; numbers of recordings, weights, times and titles differ; weights
            that have not a column for each row.

    Example:
        >>> import tempfile, pathlib
        >>> import jax.numpy as jnp
        >>> from oscillib.plots import plot_attention
        >>> from oscillib.recordings import recording
        >>> times = jnp.arange(4.0)
        >>> made = recording(times, jnp.sin(times)[:, None])
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     file = pathlib.Path(folder) / "attention.png"
        ...     plot_attention(file, [made], [jnp.full((2, 4), 0.25)])
        ...     file.exists()
        True
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    count = len(recordings)
    times = [r.times for r in recordings] if times is None else times
    titles = [f"recording {i + 1}" for i in range(count)] if titles is None else titles
    if not count or not count == len(weights) == len(times) == len(titles):
        raise ValueError(
            "`recordings`, `weights`, `times` and `titles` must have one entry a recording, at "
            f"least one; got {count}, {len(weights)}, {len(times)} and {len(titles)}."
        )
    figure = Figure(figsize=(9, 0.6 + 2.2 * count), layout="constrained")
    FigureCanvasAgg(figure)
    panels = figure.subplots(2 * count, 1, sharex=True, height_ratios=[2, 1] * count)
    for i, (made, weight, when, title) in enumerate(
        zip(recordings, weights, times, titles, strict=True)
    ):
        weight, when = np.asarray(weight), np.asarray(when)
        if weight.ndim != 2 or weight.shape[1:] != when.shape:
            raise ValueError(
                f"`weights[{i}]` must have shape (head, row), a row for each of its "
                f"{when.shape} times; got {weight.shape}."
            )
        above, below = panels[2 * i : 2 * i + 2]
        above.plot(made.times, made.nan_values, lw=1)
        above.set_title(title, loc="left", fontsize=9)
        for h, row in enumerate(weight):
            below.plot(
                when, row, lw=1, drawstyle="steps-mid", color=f"C{h + 5}", label=f"head {h + 1}"
            )
        below.axhline(1 / max(weight.shape[1], 1), color="0.8", lw=0.8, zorder=0)
        below.set_ylim(bottom=0)
        below.set_ylabel("weight", fontsize=8)
        for panel in (above, below):
            panel.spines[["top", "right"]].set_visible(False)
    handles, labels = panels[1].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside upper right", ncols=4, fontsize=8, frameon=False)
    panels[-1].set_xlabel("time")
    figure.savefig(path, dpi=120)
