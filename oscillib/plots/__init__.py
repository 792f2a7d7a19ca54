"""Pictures. Optional: needs the extra `plots`; `import oscillib` does not import this room."""

from ._fit import plot_fit as plot_fit
