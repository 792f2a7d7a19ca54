"""Recordings: times, values and a mask; CSV files, regular grids, trend and scale, padding."""

from ._bucket import Buckets as Buckets, Group as Group, bucket as bucket, pad as pad
from ._grid import gaps as gaps, on_grid as on_grid, sampling_interval as sampling_interval
from ._recording import Recording as Recording, recording as recording, take as take
from ._scaling import (
    Scaling as Scaling,
    fit_scaling as fit_scaling,
    scale as scale,
    unscale as unscale,
    unscale_spread as unscale_spread,
)
from ._table import read_csv as read_csv, write_csv as write_csv
