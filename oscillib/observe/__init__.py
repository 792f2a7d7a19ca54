"""From states to channels: readouts `readout(y, params)` of one state."""

from ._linear import ReadoutParams as ReadoutParams, linear_readout as linear_readout
from ._waveform import WaveformParams as WaveformParams, waveform_readout as waveform_readout
