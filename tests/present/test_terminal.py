"""The ledger as text reads well at any width, without colour too."""

import dataclasses
import math
from unicodedata import east_asian_width

import numpy as np
import pytest

from wakeledger.core.flags import Flag
from wakeledger.present.terminal import inspection_text, ledger_text
from wakeledger.present.wording import ABOUT_COUNTS, ABOUT_ERROR, ABOUT_U, ABOUT_U95, STATEMENT, signed, words

ESCAPE = "\x1b"


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
        "Lower the window's edge by 40 mm.", "pass  missing points", "2, of them 1 in the wake region",
        "4 places measured 9 times; 1 of them left and visited again", "Map of the points, seen from behind", "▒", "○",
    ):  # fmt: skip
        assert part in text, part


def test_noise_stands_beside_the_declared_one_and_the_repeats(inspection):
    lines = inspection_text(inspection).splitlines()
    head = next(line for line in lines if line.startswith("variable"))
    assert head.split() == ["variable", "from", "to", "unit", "noise", "declared", "repeats", "missing"]
    u = next(line for line in lines if line.startswith("u "))
    assert u.split() == ["u", "37.20", "42.30", "m/s", "0.11", "0.15", "0.14", "2"]
    bare = tuple(dataclasses.replace(x, declared_noise=math.nan, repeatability=math.nan) for x in inspection.channels)
    assert "declared" not in inspection_text(dataclasses.replace(inspection, channels=bare))


def test_flow_angles_are_in_degrees_with_their_places(inspection):
    line = next(line for line in inspection_text(inspection).splitlines() if line.startswith("pitch"))
    assert line.split() == ["pitch", "-5.7", "-0.6,", "0.012", "2.9", "0.61,", "0", "deg"]


def test_edges_that_are_touched_stand_out(inspection):
    lines = inspection_text(inspection).splitlines()
    lower, port = (next(line for line in lines if line.startswith(side)) for side in ("lower ", "port "))
    assert lower.endswith("TOUCHED") and "4.0 %" in lower
    assert port.endswith("quiet")


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


def test_the_signs_of_the_tables_are_explained_where_they_stand(ledger):
    text = " ".join(ledger_text(ledger).split())
    for sentence in (ABOUT_U95, ABOUT_U, ABOUT_COUNTS, ABOUT_ERROR):
        assert text.count(sentence) == 1
    assert text.endswith(STATEMENT)
    rows = tuple(row for row in ledger.rows if row.name in ("lift", "span_efficiency"))
    bare = dataclasses.replace(ledger, rows=rows, covariance=np.zeros((2, 2)), estimates=(), comparisons=())
    text = " ".join(ledger_text(bare).split())
    assert ABOUT_U95 in text
    assert ABOUT_COUNTS not in text
    assert "E_n" not in text
