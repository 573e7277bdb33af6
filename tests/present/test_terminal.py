"""The ledger as text reads well at any width, without colour too."""

import dataclasses
import math
from unicodedata import east_asian_width

import pytest

from wakeledger.core.flags import Flag
from wakeledger.ledger.inspection import AngleRange, ChannelSummary, EdgeState, Inspection, Recommendation, Repeats
from wakeledger.ledger.rows import Check
from wakeledger.present.terminal import inspection_text, ledger_text
from wakeledger.present.wording import STATEMENT, signed, words

ESCAPE = "\x1b"


@pytest.fixture(scope="module")
def inspection():
    return Inspection(
        title="Clean wing, α = 6°",
        source="traverse.csv",
        points=9211,
        arrangement="tensor grid, uniform",
        shape=(151, 61),
        spacing=(0.01, 0.01),
        window=(-0.75, 0.75, -0.3, 0.3),
        coverage=0.9987,
        station=0.9,
        flags={"missing": 12, "averaged": 0},
        channels=(
            ChannelSummary("u", "m s-1", 37.2, 42.3, 0.11, 2),
            ChannelSummary("total_pressure", "Pa", -240.0, 3.1),
        ),
        edges=(EdgeState("lower", 0.031, 0.02), EdgeState("port")),
        checks=(Check("missing_points", "pass", 0.0013, 0.02, "0.13 % of the cells are missing."),),
        recommendations=(Recommendation("widen", "Lower the window's edge by 40 mm.", side="lower", distance=0.04),),
        test={"run": "117"},
        reference={"speed": 42.0},
    )


def columns(line):
    return sum(2 if east_asian_width(character) in "WF" else 1 for character in line)


@pytest.mark.parametrize("width", [60, 80, 100, 140, 200])
def test_no_line_is_wider_than_the_terminal(ledger, inspection, width):
    for text in (ledger_text(ledger, width=width), inspection_text(inspection, width=width)):
        assert max(map(columns, text.splitlines())) <= width
        assert not any(line != line.rstrip() for line in text.splitlines())
        assert ESCAPE not in text


@pytest.mark.parametrize("width", [80, 100, 200])
def test_figures_are_never_broken_or_cut(ledger, width):
    text = ledger_text(ledger, width=width)
    assert "…" not in text
    induced = next(line for line in text.splitlines() if line.startswith("induced drag"))
    assert induced.split() == ["induced", "drag", "1.940", "±", "0.049", "N", "0.024", "103.1", "±", "2.6", "counts"]
    total = next(line for line in text.splitlines() if line.startswith("total drag"))
    assert total.index("±") == induced.index("±")
    energy = next(line for line in text.splitlines() if "energy area" in line)
    assert energy.split()[-5:] == ["+0.060", "+0.054", "N", "0.17", "agrees"]
    balance = next(line for line in text.splitlines() if line.startswith("balance  total drag"))
    assert balance.split()[-4:] == ["+0.040", "N", "0.44", "agrees"]


def test_everything_is_said(ledger):
    text = " ".join(ledger_text(ledger, width=100).split())
    for check in ledger.checks:
        assert words(check.name) in text
        assert check.message in text
    for note in ledger.notes:
        assert note in text
    assert STATEMENT in text
    assert "FAIL core resolution" in text
    assert "WARN edge vorticity" in text
    assert "side force: the wake is cut at the window's lower edge" in text
    assert "DISAGREES" in text
    assert "same algebra" in text
    assert "run 117 · configuration clean" in text


def test_order_is_rows_estimates_comparisons_checks_notes(ledger):
    text = ledger_text(ledger)
    places = [text.index(part) for part in ("profile drag", "Other methods", "Comparison with", "Checks", "Notes")]
    assert places == sorted(places)


def test_colour_adds_only_colour(ledger):
    import re

    coloured = ledger_text(ledger, colour=True)
    assert ESCAPE in coloured
    bare = re.sub(r"\x1b\[[0-9;]*m", "", coloured)
    assert [line.rstrip() for line in bare.splitlines()] == ledger_text(ledger).splitlines()


def test_texts_of_the_user_are_text(ledger):
    """Neither markup nor control characters of a title or a name act on the terminal."""
    comparison = dataclasses.replace(ledger.comparisons[0], name="[red]balance :smile:")
    awkward = dataclasses.replace(
        ledger, title="[bold]a[/bold] \x1b[31m\x07 翼", comparisons=(comparison,), notes=("[N] and [/N]",)
    )
    text = ledger_text(awkward)
    assert ESCAPE not in text and "\x07" not in text
    assert "[bold]a[/bold]" in text and "翼" in text
    assert "[red]balance :smile:" in text
    assert "[N] and [/N]" in text


def test_a_bare_ledger_prints(ledger):
    bare = dataclasses.replace(ledger, estimates=(), comparisons=(), checks=(), notes=(), test={})
    text = ledger_text(bare)
    assert "Checks" not in text and "Notes" not in text
    assert "lift" in text
    empty = dataclasses.replace(bare, rows=(), covariance=ledger.covariance[:0, :0])
    assert "Clean wing" in ledger_text(empty)


def test_inspection_says_what_was_found(inspection):
    text = inspection_text(inspection, width=80)
    for part in (
        "traverse.csv", "9211, tensor grid, uniform", "151 × 61 points (y × z), 10.0 × 10.0 mm apart",
        "y -0.75 … 0.75 m, z -0.3 … 0.3 m", "99.9 %", "12 missing", "total pressure", "lower", "What to do",
        "Lower the window's edge by 40 mm.", "pass  missing points",
    ):  # fmt: skip
        assert part in text, part


def test_inspection_document_has_no_nan(inspection):
    import json

    document = inspection.to_dict()
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert document["channels"][1]["noise"] is None
    assert document["shape"] == [151, 61]
    assert not inspection.failed


def test_signs_of_differences():
    assert signed(0.031, 0.01) == "+0.031"
    assert signed(-0.031, 0.01) == "-0.031"
    assert signed(math.nan, 0.01) == "–"


def test_every_flag_has_a_printed_name():
    assert all(words(str(flag.name).lower()) for flag in Flag)
