"""What a field does in the long run: fixed points, cycles, exponents, phases, regimes."""

from ._fixed_point import (
    FixedPoint as FixedPoint,
    FixedPoints as FixedPoints,
    fixed_point as fixed_point,
    fixed_points as fixed_points,
)
from ._floquet import Floquet as Floquet, floquet as floquet
from ._limit_cycle import (
    CycleGuess as CycleGuess,
    LimitCycle as LimitCycle,
    cycle_guess as cycle_guess,
    limit_cycle as limit_cycle,
)
from ._lyapunov import (
    Lyapunov as Lyapunov,
    kaplan_yorke as kaplan_yorke,
    lyapunov_spectrum as lyapunov_spectrum,
)
from ._phase import (
    PhaseAmplitude as PhaseAmplitude,
    analytic_phase as analytic_phase,
    hopf_phase as hopf_phase,
    mean_frequency as mean_frequency,
    planar_phase as planar_phase,
)
from ._regime import (
    Estimate as Estimate,
    Regime as Regime,
    Regimes as Regimes,
    describe_regimes as describe_regimes,
    regimes as regimes,
)
from ._root import RootStatus as RootStatus, describe_root as describe_root
from ._spectrum import (
    Spectrum as Spectrum,
    jacobian as jacobian,
    spectrum as spectrum,
    stability_margin as stability_margin,
)
