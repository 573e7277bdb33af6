"""A survey of two planes from file to terminal, report and figure: what was made wrong or right is what is shown."""

import numpy as np
import pytest

from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.present.figures.stations import stations_figure
from wakeledger.present.report import report_html
from wakeledger.present.stations_text import stations_lines
from wakeledger.present.terminal import ledger_text
from wakeledger.run.survey import load, reduce

#: Coarse cores: the figures are held against what was made, not against what a fine survey would give.
CORE, SPACING, DRAWS = 0.08, 0.04, 100
DIFFUSIVITY = 0.04
STATIONS = (1.0, 2.0)


@pytest.fixture(scope="module")
def made(kit, tmp_path_factory):
    """Exact drags of the planes, and the survey's ledger as its archive gives it back."""
    folder = tmp_path_factory.mktemp("planes")
    rng = np.random.default_rng(11)
    truths, planes = [], []
    for number, x in enumerate(STATIONS, start=1):
        core = np.sqrt(CORE**2 + 4 * DIFFUSIVITY * (x - STATIONS[0]) / kit.SPEED)
        wake = kit.wing(core=core)
        truths.append(wake.truth.rows())
        data = kit.table(wake, *kit.axes(spacing=SPACING))
        for name in ("v", "w", "total_pressure"):
            data[name] = data[name] + 0.05 * rng.standard_normal(data[name].size)
        kit.write_csv(folder / f"plane{number}.csv", data)
        of_one = {"file": f"plane{number}.csv", "station": f"{x} m", "primary": "total_pressure"}
        planes.append(of_one | {"columns": kit.columns()})
    compare = {"name": "near field", "row": "total_drag", "value": "4.70 N", "standard_uncertainty": "0.05 N"}
    content = kit.description(title="Two planes") | {"plane": planes, "compare": [compare]}
    text = kit.toml(content) + f"\n[uncertainty]\ndraws = {DRAWS}\nseed = 5\n"
    for name, unit in (("v", "m/s"), ("w", "m/s"), ("total_pressure", "Pa")):
        text += (
            f'[[uncertainty.source]]\nname = "noise of {name}"\napplies_to = ["plane.{name}"]\neffect = "random"\n'
            f'standard_uncertainty = "0.05 {unit}"\n'
        )
    (folder / "survey.toml").write_text(text, encoding="utf-8")
    write_archive(reduce(load(folder / "survey.toml")), folder / "ledger.nc")
    return truths, open_archive(folder / "ledger.nc")


def test_each_plane_is_shown_with_its_own_drag(made):
    truths, ledger = made
    lines = {line.label: line for line in stations_lines(ledger)}
    induced = lines["induced drag"]
    assert induced.unit == "counts"
    per_newton = ledger.row("lift").coefficient / ledger.row("lift").value * 1e4
    for truth, (shown, _) in zip(truths, induced.stations, strict=True):
        # The grid of half a core costs 1 %; the two planes differ by 6 %.
        assert float(shown) == pytest.approx(per_newton * truth["induced_drag"], rel=0.015)
    assert truths[1]["induced_drag"] < 0.95 * truths[0]["induced_drag"]
    text = ledger_text(ledger, width=120)
    assert "The 2 planes, ± U95" in text
    assert "near field" in text


def test_figure_and_report_show_the_decay(made):
    truths, ledger = made
    panel = next(axes for axes in stations_figure(ledger).axes if axes.get_title(loc="left") == "induced drag")
    drawn = next(line for line in panel.lines if np.array_equal(np.asarray(line.get_xdata(), float), STATIONS))
    exact = np.array([truth["induced_drag"] for truth in truths])
    ratio = np.asarray(drawn.get_ydata(), float) / exact
    assert ratio[1] == pytest.approx(ratio[0], rel=0.01)
    html = report_html(ledger)
    assert "<h2>The planes</h2>" in html
    assert "The plane at 1 m" in html
