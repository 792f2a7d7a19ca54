"""What moves: vector fields `field(t, y, params)`, their parameters and their exact flows."""

from ._correction import (
    CorrectedParams as CorrectedParams,
    Correction as Correction,
    corrected as corrected,
)
from ._coupled import (
    CoupledNetwork as CoupledNetwork,
    CoupledParams as CoupledParams,
    coupled as coupled,
)
from ._coupling import Edges as Edges, received as received
from ._fitzhugh_nagumo import (
    FitzHughNagumoParams as FitzHughNagumoParams,
    fitzhugh_nagumo as fitzhugh_nagumo,
    fitzhugh_nagumo_onset as fitzhugh_nagumo_onset,
)
from ._goodwin import (
    GoodwinParams as GoodwinParams,
    goodwin as goodwin,
    goodwin_loop_gain as goodwin_loop_gain,
    goodwin_rest as goodwin_rest,
)
from ._hopf import HopfNetwork as HopfNetwork, HopfParams as HopfParams
from ._hopf_unit import HopfUnitParams as HopfUnitParams, hopf_unit as hopf_unit
from ._input import (
    ForcedParams as ForcedParams,
    Input as Input,
    forced as forced,
    hold_input as hold_input,
)
from ._kuramoto import (
    KuramotoParams as KuramotoParams,
    kuramoto as kuramoto,
    lorentzian_order as lorentzian_order,
    order_parameter as order_parameter,
)
from ._linear import LinearNetwork as LinearNetwork, LinearParams as LinearParams
from ._van_der_pol import (
    VanDerPolParams as VanDerPolParams,
    van_der_pol as van_der_pol,
    weak_van_der_pol_frequency as weak_van_der_pol_frequency,
)
from ._wilson_cowan import WilsonCowanParams as WilsonCowanParams, wilson_cowan as wilson_cowan
