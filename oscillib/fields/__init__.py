"""What moves: vector fields `field(t, y, params)`, their parameters and their exact flows."""

from ._hopf import HopfNetwork as HopfNetwork, HopfParams as HopfParams
