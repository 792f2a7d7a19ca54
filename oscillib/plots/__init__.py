"""Pictures. Optional: needs the extra `plots`; `import oscillib` does not import this room."""

from ._attention import plot_attention as plot_attention
from ._fit import plot_fit as plot_fit
from ._groups import plot_groups as plot_groups
