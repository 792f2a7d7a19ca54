"""How well forecasts do: rolling origins, simple statistics as rivals, scores, surrogates."""

from ._autoregression import (
    Autoregression as Autoregression,
    fit_autoregression as fit_autoregression,
    forecast_autoregression as forecast_autoregression,
    forecast_covariance as forecast_covariance,
)
from ._baselines import persistence as persistence, time_average as time_average
from ._comparison import (
    DieboldMariano as DieboldMariano,
    diebold_mariano as diebold_mariano,
    skill as skill,
)
from ._modes import (
    AutoregressionModes as AutoregressionModes,
    autoregression_modes as autoregression_modes,
    autoregression_spectrum as autoregression_spectrum,
)
from ._order import OrderCriteria as OrderCriteria, order_criteria as order_criteria
from ._origins import rolling_origins as rolling_origins, targets as targets
from ._rayleigh import RayleighTest as RayleighTest, rayleigh_test as rayleigh_test
from ._scores import (
    average_by_horizon as average_by_horizon,
    coverage as coverage,
    crps_gaussian as crps_gaussian,
    error_by_horizon as error_by_horizon,
    interval_score as interval_score,
)
from ._selection import (
    AutoregressionChoice as AutoregressionChoice,
    choose_autoregression as choose_autoregression,
)
from ._surrogate import (
    amplitude_adjusted_surrogate as amplitude_adjusted_surrogate,
    phase_surrogate as phase_surrogate,
)
from ._whiteness import Portmanteau as Portmanteau, portmanteau as portmanteau
