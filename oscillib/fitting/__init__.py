"""Starting, staging and checking fits of oscillators to recordings."""

from ._collapse import Collapse as Collapse, collapse as collapse
from ._periodogram import (
    Periodogram as Periodogram,
    default_frequencies as default_frequencies,
    periodogram as periodogram,
)
from ._spectrum_start import SpectrumStart as SpectrumStart, spectrum_start as spectrum_start
from ._status import Status as Status, describe as describe
from ._window import longest_window as longest_window, window_lengths as window_lengths
