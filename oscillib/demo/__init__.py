"""The invented scenario of the examples: glowing tissue slices, treated and untreated."""

from ._tray import Tray as Tray, tray as tray
