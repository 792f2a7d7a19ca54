"""From states to channels: readouts `readout(y, params)` of one state."""

from ._balloon import (
    BalloonParams as BalloonParams,
    BalloonReadout as BalloonReadout,
    balloon as balloon,
    balloon_steady as balloon_steady,
)
from ._driven import ObservedParams as ObservedParams, observed as observed
from ._light import LightParams as LightParams, light_readout as light_readout
from ._linear import ReadoutParams as ReadoutParams, linear_readout as linear_readout
from ._low_pass import (
    LowPassParams as LowPassParams,
    low_pass as low_pass,
    low_pass_readout as low_pass_readout,
)
from ._response import (
    auditory_response as auditory_response,
    convolve as convolve,
    double_gamma as double_gamma,
)
from ._spatial import (
    MapParams as MapParams,
    map_back as map_back,
    map_readout as map_readout,
)
from ._waveform import WaveformParams as WaveformParams, waveform_readout as waveform_readout
