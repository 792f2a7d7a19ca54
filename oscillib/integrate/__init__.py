"""Through time: steps, rollout over a fixed grid, windows, and the door to adaptive steps."""

from ._adaptive import AdaptiveRollout as AdaptiveRollout, adaptive_rollout as adaptive_rollout
from ._rollout import rollout as rollout, segmented_scan as segmented_scan
from ._runge_kutta import heun as heun, rk4 as rk4
from ._splitting import strang as strang, suzuki as suzuki
from ._windows import (
    WindowRollout as WindowRollout,
    Windows as Windows,
    cut as cut,
    gather as gather,
    join as join,
    roll_windows as roll_windows,
)
