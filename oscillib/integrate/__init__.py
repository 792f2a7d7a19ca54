"""Through time: steps, rollout over a fixed grid, windows, and the door to adaptive steps."""

from ._adaptive import AdaptiveRollout as AdaptiveRollout, adaptive_rollout as adaptive_rollout
from ._bias import StepBias as StepBias, step_bias as step_bias
from ._delay import delay_rollout as delay_rollout
from ._noise import (
    NoisyParams as NoisyParams,
    covariance_factor as covariance_factor,
    linear_transition as linear_transition,
    noise_key as noise_key,
    planar_rate as planar_rate,
)
from ._noisy_rollout import diffrax_terms as diffrax_terms, noisy_rollout as noisy_rollout
from ._noisy_step import (
    NoisyAdvance as NoisyAdvance,
    NoisyStep as NoisyStep,
    euler_maruyama as euler_maruyama,
    noisy_strang as noisy_strang,
    split_noise as split_noise,
    without_noise as without_noise,
)
from ._rollout import rollout as rollout, segmented_scan as segmented_scan
from ._runge_kutta import heun as heun, rk4 as rk4
from ._splitting import strang as strang, suzuki as suzuki
from ._state_noise import state_noise_terms as state_noise_terms
from ._windows import (
    WindowRollout as WindowRollout,
    Windows as Windows,
    cut as cut,
    gather as gather,
    join as join,
    roll_windows as roll_windows,
)
