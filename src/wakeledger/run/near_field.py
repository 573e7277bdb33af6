"""The drag of a computed plane held against the solver's surface forces, with what is known to make them differ."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace

from wakeledger.ledger.closure import Cause, Closure, NearField, close
from wakeledger.ledger.crosscheck import COVERAGE_FACTOR
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.rows import COUNT, Comparison
from wakeledger.run.computed import MESH
from wakeledger.run.stations import TREND
from wakeledger.run.uncertainty import numerics

#: Budget lines behind each cause whose size is in the row's own uncertainty.
_BEHIND: dict[str, tuple[str, ...]] = {
    "station": (TREND,),
    "mask": (numerics.MASK,),
    "reference_level": (numerics.LOSS_ZERO,),
    "resolution": (numerics.RESOLUTION, numerics.RESAMPLING, numerics.GAPS, MESH),
}
#: Rows between which the decay of the trailing vortices moves drag.
_DECAYING = ("induced_drag", "profile_drag", "total_drag")


def with_closures(ledger: Ledger) -> Ledger:
    """The ledger of computed planes with every compared drag taken apart.

    Parameters
    ----------
    ledger : Ledger
        With its comparisons, which are taken as the solver's surface forces.

    Returns
    -------
    Ledger
        With `closures`, and a note about each.
    """
    found = [one for one in (_closure(ledger, entry) for entry in ledger.comparisons) if one is not None]
    if not found:
        return ledger
    return replace(ledger, closures=tuple(found), notes=(*ledger.notes, *(_note(one) for one in found)))


def _closure(ledger: Ledger, entry: Comparison) -> Closure | None:
    if not entry.row.endswith("_drag") or entry.row == "numerical_drag":
        return None
    row = ledger.row(entry.row)
    if not (math.isfinite(row.standard_uncertainty) and math.isfinite(entry.standard_uncertainty)):
        return None
    scale = row.value / row.coefficient if math.isfinite(row.coefficient) and row.coefficient else math.nan
    others = (_numerical(ledger, entry.row), _walls(ledger, entry.row, scale), _decay(ledger, entry.row, scale))
    each = _each_station(ledger, entry, scale)
    within = [
        replace(one, note=f"{each}; {one.note}") if each and one.name == "station" else one
        for one in _in_its_uncertainty(ledger, entry.row, scale)
    ]
    if each and all(one.name != "station" for one in within):
        within.append(Cause("station", 0.0, 0.0, each))
    causes = [*within, *(one for one in others if one is not None)]
    return close(
        entry.row,
        far=row.value,
        far_uncertainty=row.standard_uncertainty,
        near=NearField(entry.value, entry.standard_uncertainty),
        causes=causes,
        coefficient_scale=scale,
    )


def _sized(value: float, scale: float, unit: str, *, sign: str = "") -> str:
    """A drag in counts, where it has a coefficient, else in its unit."""
    return f"{value / scale / COUNT:{sign}.2f} counts" if math.isfinite(scale) else f"{value:{sign}.3g} {unit}"


def _each_station(ledger: Ledger, entry: Comparison, scale: float) -> str:
    """Each plane by itself against the near field; empty where there is one plane."""
    found = []
    for one in ledger.stations:
        row = one.row(entry.row)
        difference = row.value - entry.value
        error = abs(difference) / (COVERAGE_FACTOR * math.hypot(row.standard_uncertainty, entry.standard_uncertainty))
        found.append(f"{_sized(difference, scale, row.unit, sign='+')} at {one.station:g} m (E_n {error:.2f})")
    return ", ".join(found)


def _in_its_uncertainty(ledger: Ledger, name: str, scale: float) -> Iterator[Cause]:
    lines = {line.source: line.standard_uncertainty for line in ledger.budget if line.row == name}
    for cause, sources in _BEHIND.items():
        size = math.hypot(*(lines.get(source, 0.0) for source in sources))
        if size > 0:
            said = f"± {_sized(2 * size, scale, ledger.row(name).unit)} (k = 2) in its uncertainty"
            yield Cause(cause, 0.0, 0.0, said)


def _numerical(ledger: Ledger, name: str) -> Cause | None:
    names = [each.name for each in ledger.rows]
    if name not in ("total_drag", "profile_drag") or "numerical_drag" not in names:
        return None
    outside = ledger.row("numerical_drag")
    if not math.isfinite(outside.standard_uncertainty):
        return None
    # What moves both, such as the reference level, counts with the sign with which it does.
    both = float(ledger.covariance[names.index(name), names.index("numerical_drag")])
    beyond = math.sqrt(max(outside.standard_uncertainty**2 + 2 * both, 0.0))
    note = "loss away from wake and shock is in the surface forces, in no other row here"
    return Cause("numerical", -outside.value, beyond, note)


def _walls(ledger: Ledger, name: str, scale: float) -> Cause | None:
    names = [row.name for row in ledger.rows]
    if name not in ("total_drag", "induced_drag") or "induced_drag_free_air" not in names:
        return None
    induced = ledger.row("induced_drag")
    walls = _sized(induced.value - ledger.row("induced_drag_free_air").value, scale, induced.unit, sign="+")
    return Cause("walls", 0.0, 0.0, f"{walls} that the walls make are in both")


def _decay(ledger: Ledger, name: str, scale: float) -> Cause | None:
    combined = ledger.combined
    if combined is None or name not in _DECAYING or not all(math.isfinite(lost) for lost in combined.decay):
        return None
    places = zip(combined.decay, ledger.stations, strict=True)
    unit = ledger.row(name).unit
    lost = ", ".join(f"{_sized(each, scale, unit)} by {one.station:g} m" for each, one in places)
    if name == "total_drag":
        return Cause("decay", 0.0, 0.0, f"{lost} turned from induced into profile drag; the sum stays")
    if combined.method == "extrapolated":
        moved = "added back to it" if name == "induced_drag" else "taken back from it"
        return Cause("decay", 0.0, 0.0, f"{lost}, {moved}")
    mean = sum(combined.decay) / len(combined.decay)
    return Cause("decay", -mean if name == "induced_drag" else mean, 0.0, f"{lost}, not resolved")


def _note(found: Closure) -> str:
    scale, unit = (found.counts_per_unit, "counts") if math.isfinite(found.counts_per_unit) else (1.0, "N")
    parts = ", ".join(
        f"{cause.name.replace('_', ' ')} {scale * cause.difference:+.2f}" for cause in found.causes if cause.difference
    )
    said = (
        f"Far field less near field, {found.row.replace('_', ' ')}: {scale * found.difference:+.2f} ±"
        f" {2 * scale * found.standard_uncertainty:.2f} {unit} (E_n {found.normalised_error:.2f})"
    )
    if parts:
        said += f"; explained by {parts}; left over {scale * found.left_over:+.2f} ±"
        said += f" {2 * scale * found.left_over_uncertainty:.2f} {unit} (E_n {found.left_over_error:.2f})"
    notes = "".join(f"; {cause.name.replace('_', ' ')}: {cause.note}" for cause in found.causes)
    return f"{said}{notes}."
