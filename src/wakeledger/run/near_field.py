"""The drag of a computed plane held against the solver's surface forces, with what is known to make them differ."""

from __future__ import annotations

import math
from dataclasses import replace

from wakeledger.ledger.closure import Cause, Closure, NearField, close
from wakeledger.ledger.rows import Comparison, Ledger
from wakeledger.run import numerics
from wakeledger.run.stations import TREND

#: Budget lines behind each cause whose size is in the row's own uncertainty.
_BEHIND: dict[str, tuple[str, ...]] = {
    "station": (TREND,),
    "mask": (numerics.MASK,),
    "reference_level": (numerics.LOSS_ZERO,),
    "resolution": (numerics.RESOLUTION, numerics.RESAMPLING, numerics.GAPS),
}


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
    if not entry.row.endswith("_drag"):
        return None
    row = ledger.row(entry.row)
    if not (math.isfinite(row.standard_uncertainty) and math.isfinite(entry.standard_uncertainty)):
        return None
    scale = row.value / row.coefficient if math.isfinite(row.coefficient) and row.coefficient else math.nan
    lines = {line.source: line.standard_uncertainty for line in ledger.budget if line.row == entry.row}
    causes = []
    for name, sources in _BEHIND.items():
        size = math.hypot(*(lines.get(source, 0.0) for source in sources))
        if size > 0:
            causes.append(Cause(name, 0.0, 0.0, f"{size:.3g} {row.unit} (k = 1), in the row's own uncertainty"))
    names = [each.name for each in ledger.rows]
    if entry.row in ("total_drag", "profile_drag") and "numerical_drag" in names:
        outside = ledger.row("numerical_drag")
        if math.isfinite(outside.standard_uncertainty):
            note = "loss away from wake and shock, which the surface forces hold where the body made it"
            causes.append(Cause("numerical", -outside.value, outside.standard_uncertainty, note))
    if "induced_drag_free_air" in names and entry.row in ("total_drag", "induced_drag"):
        walls = ledger.row("induced_drag").value - ledger.row("induced_drag_free_air").value
        note = f"the walls' {walls:+.3g} {row.unit} are in both; in free air the far field would have that much less"
        causes.append(Cause("walls", 0.0, 0.0, note))
    combined = ledger.combined
    if combined is not None and entry.row == "induced_drag" and combined.method == "weighted_mean":
        decay = sum(combined.decay) / len(combined.decay)
        doubt = sum(combined.decay_uncertainty) / len(combined.decay_uncertainty)
        if math.isfinite(decay + doubt):
            causes.append(Cause("decay", -decay, 0.0, f"decay of the vortices, {doubt:.2g} {row.unit} (k = 1)"))
    return close(
        entry.row,
        far=row.value,
        far_uncertainty=row.standard_uncertainty,
        near=NearField(entry.value, entry.standard_uncertainty),
        causes=causes,
        coefficient_scale=scale,
    )


def _note(found: Closure) -> str:
    scale, unit = (found.counts_per_unit, "counts") if math.isfinite(found.counts_per_unit) else (1.0, "N")
    parts = ", ".join(
        f"{cause.name.replace('_', ' ')} {scale * cause.difference:+.2f}" for cause in found.causes if cause.difference
    )
    sizes = ", ".join(cause.name.replace("_", " ") for cause in found.causes if not cause.difference)
    said = (
        f"Far field less near field, {found.row.replace('_', ' ')}: {scale * found.difference:+.2f} {unit}"
        f" (E_n {found.normalised_error:.2f})"
    )
    if parts:
        said += f"; explained by {parts}; left over {scale * found.left_over:+.2f} ±"
        said += f" {2 * scale * found.left_over_uncertainty:.2f} {unit} (E_n {found.left_over_error:.2f})"
    return said + (f"; in its uncertainty: {sizes}." if sizes else ".")
