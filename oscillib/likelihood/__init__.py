"""Noisy systems: filter and smoother, transition density, stationary description."""

from ._filter import Filtered as Filtered, gaussian_filter as gaussian_filter
from ._forecast import Forecast as Forecast, forecast as forecast
from ._gaussian import Gaussian as Gaussian, wide_start as wide_start
from ._information import filter_information as filter_information
from ._joint import JointNoise as JointNoise, joint_noise as joint_noise
from ._params import StateSpaceParams as StateSpaceParams
from ._smooth import Smoothed as Smoothed, smooth as smooth
from ._spectrum import (
    CrossSpectrum as CrossSpectrum,
    SampleSpectrum as SampleSpectrum,
    coherence as coherence,
    cross_spectrum as cross_spectrum,
    sample_spectrum as sample_spectrum,
    see_spectrum as see_spectrum,
    whittle as whittle,
)
from ._stationary import (
    Stationary as Stationary,
    covariance_distance as covariance_distance,
    lagged_covariance as lagged_covariance,
    readout_matrix as readout_matrix,
    sample_lagged_covariance as sample_lagged_covariance,
    stationary_covariance as stationary_covariance,
    stationary_start as stationary_start,
)
from ._transition import transition_log_density as transition_log_density
