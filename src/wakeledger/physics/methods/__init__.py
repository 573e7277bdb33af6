"""One file per published method."""

from wakeledger.physics.methods.betz_area import betz_area
from wakeledger.physics.methods.energy_area import energy_area
from wakeledger.physics.methods.entropy_area import entropy_area
from wakeledger.physics.methods.momentum_area import momentum_area
from wakeledger.physics.methods.section_drag import section_drag
from wakeledger.physics.methods.station_fit import station_fit
from wakeledger.physics.methods.velocity_defect import drag_split
from wakeledger.physics.methods.vorticity_area import vorticity_area
from wakeledger.physics.methods.wake_line import wake_line
from wakeledger.physics.methods.wave_split import wave_split

__all__ = [
    "betz_area",
    "drag_split",
    "energy_area",
    "entropy_area",
    "momentum_area",
    "section_drag",
    "station_fit",
    "vorticity_area",
    "wake_line",
    "wave_split",
]
