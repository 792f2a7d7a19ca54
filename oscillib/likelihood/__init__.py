"""Noisy systems: filter and smoother, transition density, stationary description."""

from ._filter import Filtered as Filtered, gaussian_filter as gaussian_filter
from ._forecast import Forecast as Forecast, forecast as forecast
from ._gaussian import Gaussian as Gaussian, wide_start as wide_start
from ._params import StateSpaceParams as StateSpaceParams
