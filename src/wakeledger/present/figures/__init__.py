"""Figures of a finished ledger."""

from wakeledger.present.figures.budget import budget_figure
from wakeledger.present.figures.canvas import FORMATS, figure_bytes
from wakeledger.present.figures.crosschecks import estimates_figure
from wakeledger.present.figures.drawing import save
from wakeledger.present.figures.gallery import draw
from wakeledger.present.figures.maps import axial_velocity_map, loss_map, vorticity_map
from wakeledger.present.figures.section import section_figure
from wakeledger.present.figures.spanwise import span_figure
from wakeledger.present.figures.stations import stations_figure
from wakeledger.present.figures.traverse import traverse_figure

__all__ = [
    "FORMATS",
    "axial_velocity_map",
    "budget_figure",
    "draw",
    "estimates_figure",
    "figure_bytes",
    "loss_map",
    "save",
    "section_figure",
    "span_figure",
    "stations_figure",
    "traverse_figure",
    "vorticity_map",
]
