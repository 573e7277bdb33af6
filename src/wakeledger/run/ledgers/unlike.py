"""What makes two ledgers unlike, so that part of their difference may come from that."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

from wakeledger.confidence.components import MEASURED
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.units import SCALAR_UNITS
from wakeledger.run.config import Survey

#: Scalars of stream and model that two ledgers should have alike, with the relative difference from which it is said.
_REFERENCES = {
    "reference_area": 1e-6,
    "span": 1e-6,
    "mean_chord": 1e-6,
    "chord": 1e-6,
    "dynamic_pressure": 2e-3,
    "mach": 2e-2,
}


def unlike(
    a: Ledger,
    b: Ledger,
    surveys_a: Sequence[Survey],
    surveys_b: Sequence[Survey],
    *,
    names: tuple[str, str] = ("A", "B"),
) -> list[str]:
    """What makes two ledgers unlike, in sentences.

    Parameters
    ----------
    a, b : Ledger
        The ledgers.
    surveys_a, surveys_b : sequence of Survey
        Their survey files.
    names : (str, str)
        What the sentences call them.

    Returns
    -------
    list of str
    """
    one_name, other_name = names
    found = []
    for name, slack in _REFERENCES.items():
        one, other = ({**ledger.model, **ledger.reference}.get(name, math.nan) for ledger in (a, b))
        if math.isnan(one) and math.isnan(other):
            continue
        if not abs(other - one) <= slack * abs(one):
            effect = (
                "the coefficients are each on its own; the differences of forces are those of two streams"
                if name == "dynamic_pressure"
                else "the coefficients are each on its own"
                if name in ("reference_area", "span", "mean_chord", "chord")
                else "the two flows are not alike"
            )
            shown = [_scalar_text(name, value) for value in (one, other)]
            found.append(
                f"The {name.replace('_', ' ')} is {shown[0]} in {one_name} and {shown[1]} in {other_name}: {effect}."
            )
    if a.compressible != b.compressible:
        ways = ["compressible" if ledger.compressible else "incompressible" for ledger in (a, b)]
        found.append(
            f"{one_name} was reduced by the {ways[0]}, {other_name} by the {ways[1]} relations: "
            "their rows are not the same."
        )
    for what, read in (
        ("boundary", lambda survey: None if survey.boundary is None else survey.boundary.kind),
        ("reflection", lambda survey: None if survey.boundary is None else survey.boundary.reflection),
        ("primary measurement", lambda survey: survey.plane.primary),
        ("station", _stations),
    ):
        texts = [
            " or ".join(sorted({str(read(survey) or "none") for survey in surveys}))
            for surveys in (surveys_a, surveys_b)
        ]
        if texts[0] != texts[1]:
            found.append(
                f"The {what} is {texts[0]} in {one_name} and {texts[1]} in {other_name}: "
                "part of the difference may be its doing."
            )
    for side, ledger in ((one_name, a), (other_name, b)):
        if ledger.contributions is None and any(math.isfinite(row.standard_uncertainty) for row in ledger.rows):
            found.append(
                f"The archive of {side} does not hold what each error does, so nothing cancels: reduce it again."
            )
    common = sorted(set(a.inputs.values()) & set(b.inputs.values()) & (_data(a, surveys_a) | _data(b, surveys_b)))
    if common:
        what = (
            "what its numerical errors have in common cancels, which the uncertainty does not know"
            if is_computed(a) and is_computed(b)
            else "their random errors are the same ones, which the uncertainty takes as independent"
        )
        found.append(f"{one_name} and {other_name} are made from the same data: {what}.")
    return found


def is_computed(ledger: Ledger) -> bool:
    """Whether nothing was measured: the flow is computed, and all that is known are numerical terms.

    Parameters
    ----------
    ledger : Ledger
        A ledger.

    Returns
    -------
    bool
    """
    kept = ledger.contributions
    measured = kept is not None and (bool(kept.points) or any(one.kind == MEASURED for one in kept.components))
    return bool(ledger.diagnostics) and not measured


def _data(ledger: Ledger, surveys: Iterable[Survey]) -> set[str]:
    """Digests of the data files; a combined ledger's names have the run before them."""
    names = {name for survey in surveys for plane in survey.planes for name in plane.files}
    return {digest for name, digest in ledger.inputs.items() if name.rpartition(": ")[2] in names}


def _stations(survey: Survey) -> str | None:
    """Where the planes of a survey stand; None where it does not say."""
    known = [f"{plane.station:g} m" for plane in survey.planes if not math.isnan(plane.station)]
    return ", ".join(known) or None


def _scalar_text(name: str, value: float) -> str:
    """A scalar of stream or model as it is printed."""
    if math.isnan(value):
        return "not given"
    unit = SCALAR_UNITS.get(name, "1").replace("m2", "m²")
    return f"{value:.6g}" + ("" if unit == "1" else f" {unit}")
