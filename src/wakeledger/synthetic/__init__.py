"""Exact data with known answers, for tests and planning.

The truth shares no code with what it judges: this room imports only the vocabulary and the stream.
"""

from wakeledger.synthetic.elements import GaussianElements, mutual_drag, vortex_pair
from wakeledger.synthetic.lifting_line import LiftingLine
from wakeledger.synthetic.loadings import LOADINGS, THIN_SHEET_EFFICIENCY, shed, straight_edge, thin_sheet_limit, v_edge
from wakeledger.synthetic.optimum import OptimumLoading, optimum_efficiency, optimum_loading
from wakeledger.synthetic.rollup import RolledUpWake, Sheet, roll_up, rolled_up_wing

__all__ = [
    "LOADINGS",
    "THIN_SHEET_EFFICIENCY",
    "GaussianElements",
    "LiftingLine",
    "OptimumLoading",
    "RolledUpWake",
    "Sheet",
    "mutual_drag",
    "optimum_efficiency",
    "optimum_loading",
    "roll_up",
    "rolled_up_wing",
    "shed",
    "straight_edge",
    "thin_sheet_limit",
    "v_edge",
    "vortex_pair",
]
