"""Starting, staging and checking fits of oscillators to recordings."""

from ._bootstrap import Bootstrap as Bootstrap, bootstrap as bootstrap
from ._collapse import Collapse as Collapse, collapse as collapse
from ._density import Density as Density, log_density as log_density
from ._flat import parameter_names as parameter_names
from ._guard import GuardState as GuardState, guarded as guarded
from ._information import (
    fisher_gaussian as fisher_gaussian,
    fisher_simulated as fisher_simulated,
    observed_information as observed_information,
    outer_product_information as outer_product_information,
)
from ._laplace import Laplace as Laplace, laplace as laplace
from ._many import (
    Agreement as Agreement,
    ManyResult as ManyResult,
    shoot_many as shoot_many,
    shoot_memory as shoot_memory,
)
from ._periodogram import (
    Periodogram as Periodogram,
    default_frequencies as default_frequencies,
    periodogram as periodogram,
)
from ._profile import Profile as Profile, profile as profile
from ._refine import (
    Refinement as Refinement,
    RefineState as RefineState,
    refine as refine,
    refine_init as refine_init,
    refine_step as refine_step,
)
from ._shooting import (
    GaussianPrior as GaussianPrior,
    Shooting as Shooting,
    ShootingResult as ShootingResult,
    shoot as shoot,
)
from ._shooting_continuity import (
    AugmentedContinuity as AugmentedContinuity,
    HardContinuity as HardContinuity,
    SoftContinuity as SoftContinuity,
)
from ._shooting_solver import ShootingRecord as ShootingRecord, ShootingState as ShootingState
from ._spectrum_start import SpectrumStart as SpectrumStart, spectrum_start as spectrum_start
from ._status import Status as Status, describe as describe
from ._trace import NonFinite as NonFinite, trace_nonfinite as trace_nonfinite
from ._weak import (
    Directions as Directions,
    describe_directions as describe_directions,
    weak_directions as weak_directions,
)
from ._window import longest_window as longest_window, window_lengths as window_lengths
