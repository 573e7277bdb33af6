"""The flow that a planned survey is expected to meet, with the rows it must lead to."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Literal

from wakeledger.core.grid import Array
from wakeledger.run.chain.outputs import MOMENTS, ROWS, coefficient_of
from wakeledger.run.config.stream import ModelTable
from wakeledger.stream.reference import Reference

#: What a survey reads at each point.
VARIABLES = ("u", "v", "w", "total_pressure", "static_pressure")

State = Callable[[Array, Array], dict[str, Array]]


@dataclass(frozen=True, eq=False)
class ExpectedFlow:
    """A flow with known rows.

    Attributes
    ----------
    state : callable
        From places y, z (m, shape (n,)) to `VARIABLES` by name, SI, pressures above the stream's total and static
        pressure.
    values : mapping of str to float
        The chain's outputs it must lead to; NaN where one is not known.
    box : tuple of float
        Where the wake is: y and z of its port lower and its starboard upper corner, m.
    limits : tuple of float or None
        The same of the window in which the flow is known; None where it is known everywhere.
    tables : mapping of str to dict
        ``[reference]``, ``[model]``, ``[boundary]`` and ``[wake]`` of the survey, as a file writes them.
    station : float
        Of the plane, m.
    notes : tuple of str
        What the flow is.
    reflection : {"y", "z"} or None
        Plane that the survey stands on one side of.
    nearest : float
        Distance from that plane within which no point counts, m.
    circle : tuple of float or None
        y and z of the centre and radius of a round section, outside which there is no flow, m.
    lines : (ndarray, ndarray) or None
        y and z of the plane that it was taken from, m, between which nothing more is known of it.
    """

    state: State
    values: Mapping[str, float]
    box: tuple[float, float, float, float]
    limits: tuple[float, float, float, float] | None
    tables: Mapping[str, Mapping[str, Any]]
    station: float
    notes: tuple[str, ...]
    reflection: Literal["y", "z"] | None = None
    nearest: float = 0.0
    circle: tuple[float, float, float] | None = None
    lines: tuple[Array, Array] | None = None

    @property
    def finest(self) -> float:
        """Spacing below which nothing more is known of it, m; zero where there is none."""
        if self.lines is None:
            return 0.0
        return max(float((places[1:] - places[:-1]).min()) for places in self.lines)

    def holds(self, y: Array, z: Array) -> bool:
        """Whether a rectangle of lines lies within a round section."""
        if self.circle is None:
            return True
        across, up, radius = self.circle
        return math.hypot(max(abs(y[0] - across), abs(y[-1] - across)), max(abs(z[0] - up), abs(z[-1] - up))) < radius


def with_coefficients(rows: Mapping[str, float], reference: Reference, model: ModelTable) -> dict[str, float]:
    """Rows with their coefficients and the span efficiency, by the names of the chain's outputs.

    Parameters
    ----------
    rows : mapping of str to float
        Rows, N and N m.
    reference : Reference
        The stream.
    model : ModelTable
        Area and span.

    Returns
    -------
    dict of str to float
        NaN where a row is not known.
    """
    q, span = reference.dynamic_pressure, math.nan if model.span is None else model.span
    values = {name: rows.get(name, math.nan) for name in ROWS}
    free = values["induced_drag_free_air"]
    free = values["induced_drag"] if math.isnan(free) else free
    if math.isnan(values["span_efficiency"]) and free > 0:
        values["span_efficiency"] = values["lift"] ** 2 / (math.pi * q * span**2 * free)
    for name in ROWS:
        if name != "span_efficiency":
            length = span if name in MOMENTS else 1.0
            values[coefficient_of(name)] = values[name] / (q * model.reference_area * length)
    return values
