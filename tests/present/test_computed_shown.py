"""Closures on the near field and diagnostics of computed planes are shown, in counts, with their signs and verdicts."""

import dataclasses
import math
import re

import pytest

from wakeledger.ledger.closure import Cause, NearField, close
from wakeledger.ledger.rows import Comparison, Diagnostic
from wakeledger.present.computed_text import (
    LEFT_OVER,
    closure_lines,
    closure_notes,
    diagnostic_lines,
)
from wakeledger.present.report import report_html
from wakeledger.present.terminal import ledger_text

#: Far field less near field, the cause's part of it, and the uncertainties (k = 1), counts.
DIFFERENCE, CAUSED, NEAR_U, CAUSE_U = -1.5, -1.8, 0.4, 3.0


@pytest.fixture
def no_figures(monkeypatch):
    import wakeledger.present.figures as figures

    monkeypatch.setattr(figures, "draw", lambda ledger, **_: {})


def closed(ledger, *, caused=CAUSED, cause_u=CAUSE_U):
    row = ledger.row("total_drag")
    newton = row.value / row.counts
    near = row.value - DIFFERENCE * newton
    closure = close(
        "total_drag",
        far=row.value,
        far_uncertainty=row.standard_uncertainty,
        near=NearField(near, NEAR_U * newton),
        causes=[
            Cause("numerical", caused * newton, cause_u * newton, "loss away from the wake"),
            Cause("mask", 0.0, 0.0, "± 2.00 counts (k = 2) in its uncertainty"),
        ],
        coefficient_scale=row.value / row.coefficient,
    )
    surface = Comparison("surface drag", "total_drag", near, "N", NEAR_U * newton, DIFFERENCE * newton, 0.2, "agrees")
    return dataclasses.replace(ledger, comparisons=(surface,), closures=(closure,))


def test_lines_are_the_difference_its_causes_and_what_is_left(ledger):
    whole, mask, numerical, left = closure_lines(closed(ledger))
    assert (whole.label, whole.difference, whole.unit, whole.part) == (
        "total drag − surface drag", "-1.5", "counts", False
    )  # fmt: skip
    own = 1.8  # of the example's total drag, counts, k = 1
    assert float(whole.expanded) == pytest.approx(2 * math.hypot(own, NEAR_U), abs=0.05)
    assert float(whole.error) == pytest.approx(1.5 / (2 * math.hypot(own, NEAR_U)), abs=0.005)
    # A cause that is in the uncertainty already has words, and no figure that would be a zero.
    assert (mask.label, mask.difference, mask.expanded) == ("mask", "", "")
    assert mask.note == "± 2.00 counts (k = 2) in its uncertainty"
    assert (numerical.difference, numerical.expanded) == ("-1.8", "6.0")
    assert (left.label, left.difference, left.verdict) == (LEFT_OVER, "+0.3", "agrees")
    assert float(left.expanded) == pytest.approx(2 * math.hypot(own, NEAR_U, CAUSE_U), abs=0.05)


@pytest.mark.parametrize("width", [60, 80, 140])
def test_the_terminal_has_the_table(ledger, width):
    text = ledger_text(closed(ledger), width=width)
    assert max(map(len, text.splitlines())) <= width
    part = text[text.index("Far field less near field") : text.index("\nChecks")]
    first = next(line for line in part.splitlines() if line.startswith("total drag − "))
    assert first.split()[-5:] == ["-1.5", "±", "3.7", "counts", "0.41"]
    left = next(line for line in part.splitlines() if LEFT_OVER in line)
    assert left.split() == ["left", "over", "+0.3", "±", "7.0", "counts", "0.04", "agrees"]
    assert "mask: ± 2.00 counts" in " ".join(part.split())


def test_a_difference_that_is_not_explained_is_called_so(ledger):
    odd = closed(ledger, caused=60.0, cause_u=0.1)
    assert closure_lines(odd)[-1].verdict == "disagrees"
    assert re.search(r"left over +-61\.5 .*DISAGREES", ledger_text(odd))


def test_an_unknown_cause_leaves_a_dash_and_no_verdict(ledger):
    unknown = closed(ledger, cause_u=math.nan)
    left = closure_lines(unknown)[-1]
    assert (left.expanded, left.error, left.verdict) == ("–", "–", "unknown")
    assert "± ?" in ledger_text(unknown)


def test_without_a_coefficient_it_is_in_newtons(ledger):
    bare = closed(ledger)
    scaled = dataclasses.replace(bare.closures[0], counts_per_unit=math.nan)
    whole = closure_lines(dataclasses.replace(bare, closures=(scaled,)))[0]
    newton = ledger.row("total_drag").value / ledger.row("total_drag").counts
    assert whole.unit == "N"
    assert float(whole.difference) == pytest.approx(DIFFERENCE * newton, rel=0.01)


def test_the_report_has_the_closure(ledger, no_figures):
    document = report_html(closed(ledger))
    table = document[document.index("<h2>Far field less near field</h2>") :].split("</section>")[0]
    for part in ("total drag − surface drag", "left over", "agrees", "loss away from the wake", "counts"):
        assert part in table, part
    assert "Far field less near field" not in report_html(ledger)
    assert "Far field less near field" not in ledger_text(ledger)
    assert closure_notes(ledger) == []


def diagnosed(ledger):
    figures = (
        Diagnostic("oswatitsch", 7.53, "N", "drag by the entropy outflow"),
        Diagnostic("dissipation", 1209.9658, "W", "power dissipated upstream of the plane"),
    )
    return dataclasses.replace(ledger, diagnostics=figures)


def test_diagnostics_are_in_counts_and_watts(ledger, no_figures):
    drag, power = diagnostic_lines(diagnosed(ledger))
    row = ledger.row("total_drag")
    assert drag.unit == "counts"
    assert float(drag.planes[0]) == pytest.approx(7.53 * row.counts / row.value, rel=5e-4)
    assert (power.label, power.unit, power.planes) == ("dissipation", "W", ("1210",))
    text = ledger_text(diagnosed(ledger))
    assert "that are in no row" in text
    assert "dissipation: power dissipated upstream of the plane" in text
    document = report_html(diagnosed(ledger))
    assert "are in no row</h2>" in document
    assert "power dissipated upstream" in document
    assert "in no row" not in report_html(ledger) + ledger_text(ledger)


def test_diagnostics_of_several_planes_stand_beside_each_other(ledger):
    first = diagnosed(ledger)
    second = dataclasses.replace(first, plane=ledger.plane.assign_coords(x=1.8), diagnostics=first.diagnostics[1:])
    both = dataclasses.replace(first, stations=(first, second))
    drag, power = diagnostic_lines(both)
    assert drag.planes[1] == "–"
    assert power.planes == ("1210", "1210")
