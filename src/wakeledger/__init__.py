"""From a plane of flow data behind a body to drag, with error bars and cross-checks.

Everything below is imported when it is first used, so ``import wakeledger`` is cheap.

Examples
--------
>>> import wakeledger as wl
>>> stream = wl.Reference(speed=42.0, density=1.185)
>>> round(stream.dynamic_pressure, 2)
1045.17
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from wakeledger import methods
    from wakeledger.core.estimate import Estimate
    from wakeledger.core.plane import plane
    from wakeledger.ledger.archive import open_archive as open_ledger
    from wakeledger.ledger.ledger import Budget, Ledger
    from wakeledger.physics.fields.boundary import Circle, ClosedWalls, FreeAir, OpenJet, Polygon, Rectangle
    from wakeledger.physics.fields.flow import find_wake
    from wakeledger.physics.fields.wall_correction import wall_stream_function
    from wakeledger.run.ledgers.grid_series import grid_series
    from wakeledger.run.ledgers.increment import increment
    from wakeledger.run.ledgers.repeats import combine
    from wakeledger.run.load import load as read_survey
    from wakeledger.run.planning import plan
    from wakeledger.run.survey import reduce
    from wakeledger.stream.reference import Reference

_BOUNDARY = "wakeledger.physics.fields.boundary"
_HOMES = {
    "Circle": (_BOUNDARY, "Circle"),
    "ClosedWalls": (_BOUNDARY, "ClosedWalls"),
    "FreeAir": (_BOUNDARY, "FreeAir"),
    "OpenJet": (_BOUNDARY, "OpenJet"),
    "Polygon": (_BOUNDARY, "Polygon"),
    "Rectangle": (_BOUNDARY, "Rectangle"),
    "Budget": ("wakeledger.ledger.ledger", "Budget"),
    "combine": ("wakeledger.run.ledgers.repeats", "combine"),
    "Estimate": ("wakeledger.core.estimate", "Estimate"),
    "plan": ("wakeledger.run.planning.planner", "plan"),
    "plane": ("wakeledger.core.plane", "plane"),
    "open_ledger": ("wakeledger.ledger.archive", "open_archive"),
    "Ledger": ("wakeledger.ledger.ledger", "Ledger"),
    "find_wake": ("wakeledger.physics.fields.flow", "find_wake"),
    "grid_series": ("wakeledger.run.ledgers.grid_series", "grid_series"),
    "increment": ("wakeledger.run.ledgers.increment", "increment"),
    "methods": ("wakeledger.methods", None),
    "read_survey": ("wakeledger.run.load", "load"),
    "wall_stream_function": ("wakeledger.physics.fields.wall_correction", "wall_stream_function"),
    "reduce": ("wakeledger.run.survey", "reduce"),
    "Reference": ("wakeledger.stream.reference", "Reference"),
}

__all__ = [
    "Budget",
    "Circle",
    "ClosedWalls",
    "Estimate",
    "FreeAir",
    "Ledger",
    "OpenJet",
    "Polygon",
    "Rectangle",
    "Reference",
    "combine",
    "find_wake",
    "grid_series",
    "increment",
    "methods",
    "open_ledger",
    "plan",
    "plane",
    "read_survey",
    "reduce",
    "wall_stream_function",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'wakeledger' has no attribute {name!r}; it has {', '.join(__all__)}")
    module, attribute = _HOMES[name]
    home = importlib.import_module(module)
    return home if attribute is None else getattr(home, attribute)


def __dir__() -> list[str]:
    return sorted([*globals(), *__all__])
