"""Noisy systems: filter and smoother, transition density, stationary description."""

from ._filter import Filtered as Filtered, gaussian_filter as gaussian_filter
from ._forecast import Forecast as Forecast, forecast as forecast
from ._gaussian import Gaussian as Gaussian, wide_start as wide_start
from ._joint import JointNoise as JointNoise, joint_noise as joint_noise
from ._params import StateSpaceParams as StateSpaceParams
from ._smooth import Smoothed as Smoothed, smooth as smooth
from ._transition import transition_log_density as transition_log_density
