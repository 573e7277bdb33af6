"""What cannot be known is said to be unknown, with its reason, and never agrees with anything."""

import math
from pathlib import Path

import pytest

from wakeledger.run.survey import load, reduce

SAMPLE = Path(__file__).parents[2] / "sample_surveys" / "wing_and_tail"


def changed(tmp_path, *, keep=lambda line: True, replace=()):
    """The sample survey with some of its points and other words in its survey file."""
    lines = (SAMPLE / "traverse.csv").read_text().splitlines()
    (tmp_path / "traverse.csv").write_text("\n".join([lines[0], *filter(keep, lines[1:])]))
    text = (SAMPLE / "survey.toml").read_text()
    for old, new in replace:
        assert old in text
        text = text.replace(old, new)
    (tmp_path / "survey.toml").write_text(text)
    return reduce(load(tmp_path / "survey.toml"), draws=100)


def test_half_a_wake_has_no_known_induced_drag(tmp_path):
    ledger = changed(tmp_path, keep=lambda line: float(line.split(",")[0]) > 0)
    check = next(check for check in ledger.checks if check.name == "net_circulation")
    assert check.verdict == "fail"
    for name in ("induced_drag", "total_drag"):
        row = ledger.row(name)
        assert math.isnan(row.standard_uncertainty)
        assert "net circulation" in row.reason
    assert {found.verdict for found in ledger.estimates if found.row == "induced_drag"} == {"unknown"}
    assert not any(line.row == "induced_drag" for line in ledger.budget)
    # The profile drag of the half that was measured is known.
    assert ledger.row("profile_drag").standard_uncertainty > 0


def test_without_span_and_chord_the_bound_vortex_is_unknown(tmp_path):
    words = (('span = "1.20 m"\n', ""), ('mean_chord = "0.15 m"\n', ""))
    ledger = changed(tmp_path, replace=words)
    for found in ledger.estimates:
        if (found.row, found.method) in {("induced_drag", "energy_area"), ("induced_drag", "wake_line")}:
            assert found.verdict == "unknown"
            assert "bound vortex" in found.reason
            assert math.isnan(found.expected_difference)
    assert ledger.row("induced_drag").standard_uncertainty > 0
    assert math.isnan(ledger.row("rolling_moment").coefficient)


@pytest.mark.parametrize("level", ["5000.0"])
def test_without_a_wake_nothing_is_certain(tmp_path, level):
    ledger = changed(tmp_path, replace=(("[uncertainty]\n", f"[wake]\nlevel = {level}\n\n[uncertainty]\n"),))
    assert ledger.failed
    assert all(math.isnan(row.standard_uncertainty) for row in ledger.rows)
    assert {found.verdict for found in ledger.estimates} <= {"unknown", "not_independent"}
