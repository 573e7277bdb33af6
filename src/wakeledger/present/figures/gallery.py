"""Which figures a ledger has."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.present.figures import budget, crosschecks, maps, section, spanwise, stations, traverse
from wakeledger.present.figures.drawing import Drawing, drawn

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.ledger import Ledger

#: So many planes of several stations are drawn at the most, unless all are asked for.
MOST_PLANES = 6


def _in_plane(*names: str) -> Callable[[Ledger], bool]:
    def has(ledger: Ledger) -> bool:
        if traverse.is_traverse(ledger):
            return False
        return all(name in ledger.plane and bool(ledger.plane[name].notnull().any()) for name in names)

    return has


def _of_stations(ledger: Ledger) -> bool:
    return ledger.combined is not None and bool(stations.stations_rows(ledger))


#: Figures of a ledger as a whole, by the names of their files.
OF_LEDGER: dict[str, Drawing[Ledger]] = {
    "stations": Drawing(
        stations.stations_figure,
        _of_stations,
        "Each drag against the station of the plane, bars U95. Where a trend is resolved, the ledger's drags are those "
        "at the trailing edge, and what the vortices lose on their way goes from induced to profile drag.",
    ),
    "section": Drawing(
        section.section_figure,
        section.has_section,
        "The window of the plane, its wake region and vortices in what surrounds them, seen from behind, looking "
        "upstream.",
    ),
    "estimates": Drawing(
        crosschecks.estimates_figure,
        lambda ledger: bool(crosschecks.offsets(ledger)),
        "Every estimate and compared value beside its primary row; the short stroke is the difference that is to be "
        "expected of the method at this station.",
    ),
    "budget": Drawing(
        budget.budget_figure,
        lambda ledger: bool(ledger.budget),
        "Share of each source in the variance of the main rows.",
    ),
}

#: Figures of one plane.
OF_PLANE: dict[str, Drawing[Ledger]] = {
    "total_pressure_loss": Drawing(
        maps.loss_map,
        _in_plane("total_pressure_loss"),
        "Total-pressure loss, seen from behind, looking upstream. Profile drag is integrated inside the outlined wake "
        "region; hatched cells hold no measurement that can be trusted and were filled.",
    ),
    "axial_vorticity": Drawing(
        maps.vorticity_map,
        _in_plane("axial_vorticity", "v", "w"),
        "Axial vorticity with arrows of the crossflow, cut at twice the length of the one in the key. "
        "Counter-clockwise is positive; the colours are centred at zero.",
    ),
    "axial_velocity": Drawing(
        maps.axial_velocity_map, _in_plane("u"), "Velocity along the stream as a part of the stream's speed."
    ),
    "traverse": Drawing(
        traverse.traverse_figure,
        traverse.is_traverse,
        "Loss, static pressure and speed along the traverse. The drag is integrated over the shaded wake; open circles "
        "were not measured but filled in.",
    ),
    "span_loading": Drawing(
        spanwise.span_figure,
        lambda ledger: ledger.span is not None,
        "Loading along the span and the drag of each strip.",
    ),
}


def planes_of(ledger: Ledger) -> tuple[Ledger, ...]:
    """The ledger of each plane: those of its stations, or the ledger itself where there is one plane."""
    return ledger.stations or (ledger,)


def planes_drawn(ledger: Ledger, *, every: bool = False) -> tuple[int, ...]:
    """Which of a ledger's planes are drawn.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
    every : bool
        Whether more than `MOST_PLANES` are.

    Returns
    -------
    tuple of int
        Numbers from 0, the first and the last plane among them.
    """
    count = len(planes_of(ledger))
    shown = count if every else min(count, MOST_PLANES)
    return tuple(int(k) for k in np.unique(np.linspace(0, count - 1, shown).round()))


def name_in(ledger: Ledger, name: str, number: int) -> str:
    """Name of a figure of one plane among all figures of the ledger: with the plane's number where there are several.

    Parameters
    ----------
    ledger : Ledger
        The whole ledger.
    name : str
        A name of `OF_PLANE`.
    number : int
        Which plane, from 0.

    Returns
    -------
    str
    """
    return f"{name}_plane_{number + 1}" if ledger.stations else name


def draw(ledger: Ledger, *, every: bool = False) -> dict[str, Figure]:
    """Every figure the ledger has what is needed for.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
    every : bool
        Whether more than `MOST_PLANES` planes are drawn.

    Returns
    -------
    dict of str to Figure
        By the names of `OF_LEDGER` and `OF_PLANE`; with several planes, the latter by `name_in`.
    """
    planes = planes_of(ledger)
    found = drawn(OF_LEDGER, ledger)
    for k in planes_drawn(ledger, every=every):
        found |= {name_in(ledger, name, k): figure for name, figure in drawn(OF_PLANE, planes[k]).items()}
    return found
