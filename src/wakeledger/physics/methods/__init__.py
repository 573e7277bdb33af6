"""One file per published method."""

from wakeledger.physics.methods.betz_area import betz_area
from wakeledger.physics.methods.energy_area import energy_area
from wakeledger.physics.methods.entropy_area import entropy_area
from wakeledger.physics.methods.momentum_area import momentum_area
from wakeledger.physics.methods.section_drag import section_drag
from wakeledger.physics.methods.vorticity_area import vorticity_area
from wakeledger.physics.methods.wake_line import wake_line

__all__ = [
    "betz_area",
    "energy_area",
    "entropy_area",
    "momentum_area",
    "section_drag",
    "vorticity_area",
    "wake_line",
]
