"""Checks that anyone can run on a field, step, loss, readout or model: None or AssertionError."""

from ._claim import (
    Symmetry as Symmetry,
    check_autonomy as check_autonomy,
    check_conserved as check_conserved,
    check_fixed_point as check_fixed_point,
    check_period as check_period,
    check_symmetry as check_symmetry,
    relabelling as relabelling,
    rotation as rotation,
    time_shift as time_shift,
)
from ._derivative import check_derivatives as check_derivatives
from ._field import (
    check_batch as check_batch,
    check_gradients as check_gradients,
    check_output as check_output,
    check_purity as check_purity,
    check_traces_once as check_traces_once,
)
from ._flow import check_flow as check_flow
from ._loss import check_mask as check_mask, check_minimum as check_minimum
from ._model import check_calibration as check_calibration, check_recovery as check_recovery
from ._noise import check_noise as check_noise
from ._problems import Problem as Problem, problems as problems
from ._readout import check_readout as check_readout
from ._report import Finding as Finding, Report as Report
from ._stability import check_stability as check_stability, check_step_bias as check_step_bias
from ._step import check_agreement as check_agreement, check_order as check_order
from ._suite import check_field as check_field
