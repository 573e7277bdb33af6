"""Exact data with known answers, for tests and planning.

The truth shares no code with what it judges: this room imports only the vocabulary and the stream.
"""

from wakeledger.synthetic.aircraft import wing_and_tail_wake, wing_wake
from wakeledger.synthetic.elements import GaussianElements, mutual_drag, vortex_pair
from wakeledger.synthetic.expanded_wake import ExpandedWake
from wakeledger.synthetic.lifting_line import LiftingLine
from wakeledger.synthetic.loadings import LOADINGS, THIN_SHEET_EFFICIENCY, shed, straight_edge, thin_sheet_limit, v_edge
from wakeledger.synthetic.losses import GaussianLosses, no_losses, sheet_losses, tip_cores
from wakeledger.synthetic.optimum import OptimumLoading, optimum_efficiency, optimum_loading
from wakeledger.synthetic.recordings import Errors, Positions, Recording, grid_positions, record
from wakeledger.synthetic.rollup import RolledUpWake, Sheet, roll_up, rolled_up_wing
from wakeledger.synthetic.shock_losses import ShockedWake, normal_shock_entropy, stream_tube_wave_drag
from wakeledger.synthetic.tunnel import EmptyTunnel, TunnelTruth, TunnelWake, root_bending_moment
from wakeledger.synthetic.wakes import FlowState, SyntheticWake, Truth
from wakeledger.synthetic.walls import RectangularDuct, RoundDuct

__all__ = [
    "LOADINGS",
    "THIN_SHEET_EFFICIENCY",
    "EmptyTunnel",
    "Errors",
    "ExpandedWake",
    "FlowState",
    "GaussianElements",
    "GaussianLosses",
    "LiftingLine",
    "OptimumLoading",
    "Positions",
    "Recording",
    "RectangularDuct",
    "RolledUpWake",
    "RoundDuct",
    "Sheet",
    "ShockedWake",
    "SyntheticWake",
    "Truth",
    "TunnelTruth",
    "TunnelWake",
    "grid_positions",
    "mutual_drag",
    "no_losses",
    "normal_shock_entropy",
    "optimum_efficiency",
    "optimum_loading",
    "record",
    "roll_up",
    "rolled_up_wing",
    "root_bending_moment",
    "shed",
    "sheet_losses",
    "straight_edge",
    "stream_tube_wave_drag",
    "thin_sheet_limit",
    "tip_cores",
    "v_edge",
    "vortex_pair",
    "wing_and_tail_wake",
    "wing_wake",
]
