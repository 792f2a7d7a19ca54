"""One picture of a fit: recording, fit, joints of the windows, forecast with its band."""

from pathlib import Path
from typing import Any

import numpy as np

from ..recordings import Recording


_RECORDED, _FITTED, _FORECAST = "0.45", "#1f6f8b", "#c8553d"


def plot_fit(
    path: Path | str,
    recording: Recording,
    *,
    fitted: tuple[Any, Any],
    joints: Any,
    forecast: tuple[Any, Any, Any, Any],
) -> None:
    """Draw one panel a channel and save it as PNG. Host-side; needs the extra `plots`.

    Arguments:
        path: file to write.
        recording: what was recorded; missing samples are left out.
        fitted: times `(time,)` and fitted channels `(time, channel)`, in the recording's units.
        joints: times at which windows meet, `(joint,)`; drawn as ticks below the curve.
        forecast: times `(horizon,)`, then mean, lower and upper end of the band, each
            `(horizon, channel)`.

    Raises:
        ImportError: matplotlib is not installed.

    Example:
        >>> import tempfile, pathlib
        >>> import jax.numpy as jnp
        >>> from oscillib.plots import plot_fit
        >>> from oscillib.recordings import recording
        >>> times = jnp.arange(4.0)
        >>> made = recording(times, jnp.sin(times)[:, None])
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     file = pathlib.Path(folder) / "fit.png"
        ...     plot_fit(file, made, fitted=(times, made.values), joints=times[1:2],
        ...              forecast=(times[2:], *[made.values[2:]] * 3))
        ...     file.exists()
        True
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    count = len(recording.channels)
    # A figure of its own, not pyplot's: nothing global changes in the user's notebook.
    figure = Figure(figsize=(9, 1.2 + 1.5 * count), layout="constrained")
    FigureCanvasAgg(figure)
    panels = figure.subplots(count, 1, sharex=True, squeeze=False)[:, 0]
    ahead, mean, lower, upper = (np.asarray(x) for x in forecast)
    for i, (panel, name) in enumerate(zip(panels, recording.channels, strict=True)):
        panel.plot(
            recording.times, recording.nan_values[:, i], ".", ms=2.5, color=_RECORDED,
            label="recorded",
        )  # fmt: skip
        panel.plot(fitted[0], np.asarray(fitted[1])[:, i], lw=1, color=_FITTED, label="fitted")
        panel.fill_between(ahead, lower[:, i], upper[:, i], color=_FORECAST, alpha=0.2, lw=0)
        panel.plot(ahead, mean[:, i], lw=1.2, color=_FORECAST, label="forecast, 90 % band")
        transform = panel.get_xaxis_transform()
        panel.vlines(
            np.asarray(joints), 0, 0.06, transform=transform, color=_FITTED, lw=1,
            label="windows meet",
        )  # fmt: skip
        panel.set_title(name, loc="left", fontsize=9)
        panel.spines[["top", "right"]].set_visible(False)
    panels[0].legend(loc="upper right", ncols=4, fontsize=8, frameon=False)
    panels[-1].set_xlabel("time")
    figure.savefig(path, dpi=120)
