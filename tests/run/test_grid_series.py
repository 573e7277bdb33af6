"""Grid series of ledgers whose values follow closed forms: the public function, the command and the products."""

import dataclasses
import json
import math
import runpy
from pathlib import Path

import numpy as np
import pytest

import wakeledger as wl
from wakeledger.cli import exits, wakeledger
from wakeledger.core.errors import DataError, InputError
from wakeledger.ledger.archive import write_archive
from wakeledger.ledger.crosscheck import compare
from wakeledger.ledger.grid_series import FAR_FIELD, grid_series_csv, grid_series_json
from wakeledger.ledger.tabular import json_text
from wakeledger.present import products
from wakeledger.present.figures.grid_series import drawn_rows
from wakeledger.present.grid_series_text import grid_series_text
from wakeledger.present.report.grid_series import grid_series_html

EXAMPLE = Path(__file__).resolve().parents[1] / "ledger" / "example.py"
CELLS = (80_000, 220_000, 667_000)
NEAR = "surface integral"
SURVEY = """title = "wing"
[reference]
speed = "42 m/s"
density = "1.185 kg/m^3"
[model]
reference_area = "0.18 m^2"
[boundary]
kind = "free_air"
[plane]
file = "slice.csv"
station = "0.9 m"
primary = "velocity"
[plane.columns]
y = { column = "y", unit = "m" }
z = { column = "z", unit = "m" }
u = { column = "u", unit = "m/s" }
v = { column = "v", unit = "m/s" }
w = { column = "w", unit = "m/s" }
"""


@pytest.fixture(scope="module")
def base():
    ledger = runpy.run_path(str(EXAMPLE))["example_ledger"](spacing=0.06)
    passing = tuple(check for check in ledger.checks if check.verdict != "fail")
    return dataclasses.replace(ledger, survey_text=SURVEY, comparisons=(), checks=passing)


def size(cells, dimensions=3):
    return (cells / CELLS[-1]) ** (-1 / dimensions)


@pytest.fixture(scope="module")
def on_grid(base):
    """A ledger with given factors on some rows, and given near-field values."""

    def make(number, factors, near=(), **changes):
        rows = tuple(
            dataclasses.replace(
                row,
                value=row.value * factors.get(row.name, 1.0),
                coefficient=row.coefficient * factors.get(row.name, 1.0),
            )
            for row in base.rows
        )
        by_name = {row.name: row for row in rows}
        compared = tuple(
            compare(by_name[row], name=name, value=value, standard_uncertainty=u) for name, row, value, u in near
        )
        inputs = {"survey.toml": f"{number:064d}", "slice.csv": f"{number + 7:064d}"}
        ledger = dataclasses.replace(base, rows=rows, comparisons=compared, inputs=inputs, title=f"grid of {number}")
        return dataclasses.replace(ledger, **changes)

    return make


@pytest.fixture(scope="module")
def power_law(base, on_grid):
    """Ledgers with total drag of order 2 above its limit, profile drag of 1.5 below, and a near field of order 1.2."""
    total = base.row("total_drag").value

    def make(number, **changes):
        h = size(number)
        factors = {"total_drag": 1 + 0.03 * h**2, "profile_drag": 1 - 0.02 * h**1.5}
        near = ((NEAR, "total_drag", total * (1 - 0.004 * h**1.2), math.nan),)
        return on_grid(number, factors, near, **changes)

    return make


@pytest.fixture(scope="module")
def found(power_law):
    return wl.grid_series([power_law(number) for number in CELLS], cells=CELLS)


@pytest.fixture(scope="module")
def room(power_law, tmp_path_factory):
    folder = tmp_path_factory.mktemp("grids")
    for number in CELLS:
        write_archive(power_law(number), folder / f"{number}.nc")
    return folder


@pytest.fixture
def cli(capfd):
    def call(*arguments):
        status = exits.run(wakeledger, [str(argument) for argument in arguments])
        out, err = capfd.readouterr()
        return status, out, err

    return call


def test_exact_series_give_order_limit_and_index(base, found):
    total = base.row("total_drag").value
    far = found.of("total_drag")
    # Differences of 1e-2 of the value round at 1e-14.
    assert far.found.order == pytest.approx(2.0, rel=1e-9)
    assert far.extrapolated == pytest.approx(total, rel=1e-11)
    # Roache: 1.25 of the distance to the limit; the standard uncertainty is half of it.
    assert far.found.index == pytest.approx(1.25 * 0.03 / 1.03, rel=1e-8)
    assert far.standard_uncertainty == pytest.approx(0.5 * 1.25 * 0.03 * total, rel=1e-8)
    assert far.found.ratios == pytest.approx([(667 / 220) ** (1 / 3), (220 / 80) ** (1 / 3)], rel=1e-12)
    assert far.values == pytest.approx([total * (1 + 0.03 * size(n) ** 2) for n in CELLS], rel=1e-14)
    assert far.verdict == "monotone" and far.trusted
    near = found.of("total_drag", NEAR)
    assert near.found.order == pytest.approx(1.2, rel=1e-8)
    assert near.extrapolated == pytest.approx(total, rel=1e-11)
    below = found.of("profile_drag")
    assert below.found.order == pytest.approx(1.5, rel=1e-9)
    assert below.extrapolated == pytest.approx(base.row("profile_drag").value, rel=1e-11)
    assert [grid.cells for grid in found.grids] == list(CELLS) and found.grids[-1].size == 1.0
    assert found.ratios == pytest.approx(far.found.ratios[::-1], rel=1e-12)


def test_far_field_less_near_field(base, found):
    (pair,) = found.pairs
    total = base.row("total_drag").value
    expected = [total * (0.03 * size(n) ** 2 + 0.004 * size(n) ** 1.2) for n in CELLS]
    assert pair.differences == pytest.approx(expected, rel=1e-10)
    assert pair.extrapolated == pytest.approx(0.0, abs=1e-9 * total)
    own = base.row("total_drag").standard_uncertainty
    u = math.hypot(0.625 * 0.03 * total, 0.625 * 0.004 * total, own)
    assert pair.standard_uncertainty == pytest.approx(u, rel=1e-8)
    assert pair.normalised_error == pytest.approx(expected[-1] / (2 * u), rel=1e-8)
    assert pair.agreement == "agrees" and "they agree" in pair.statement and "0 extrapolated" in pair.statement


def test_the_order_of_the_files_does_not_matter(power_law, found):
    turned = wl.grid_series([power_law(number) for number in CELLS[::-1]], cells=CELLS[::-1])
    assert grid_series_json(turned) == grid_series_json(found)


# Celik, Ghia, Roache, Freitas & Raad, J. Fluids Eng. 130 (2008) 078001, Table 1. Cells of the second and third column
# from memory; they give the printed ratios.
TABLE = (
    ((4500, 8000, 18000), (5.863, 5.972, 6.063), 1.53, 6.1685, 1.5, 2.2, "monotone"),
    ((980, 4500, 18000), (10.6050, 10.7250, 10.7880), 0.75, 10.8801, 0.6, 1.1, "monotone"),
    ((980, 4500, 18000), (6.0909, 5.9624, 6.0042), 1.51, 6.0269, 0.7, 0.5, "oscillatory"),
)


@pytest.mark.parametrize(("cells", "values", "order", "extrapolated", "error", "index", "verdict"), TABLE)
def test_published_table(base, on_grid, cells, values, order, extrapolated, error, index, verdict):
    lift = base.row("lift").value
    ledgers = [
        on_grid(number, {"lift": value / lift}, [(NEAR, "lift", -value, 0.01)])
        for number, value in zip(cells, values, strict=True)
    ]
    found = wl.grid_series(ledgers, cells=cells, dimensions=2)
    for source, sign in ((FAR_FIELD, 1), (NEAR, -1)):
        one = found.of("lift", source)
        assert round(one.found.order, 2) == order
        assert round(one.extrapolated, 4) == sign * extrapolated
        assert round(100 * one.found.approximate_error, 1) == error
        assert round(100 * one.found.index, 1) == index
        assert one.verdict == verdict
    # A near field of the other sign does not agree.
    assert found.pairs[0].agreement == "disagrees" and "they disagree" in found.pairs[0].statement


def test_what_is_not_trusted_is_said(on_grid):
    shapes = {
        "total_drag": (1.0, 1.1, 1.3),  # differences grow
        "profile_drag": (1.3, 1.001, 1.0),  # order 15.8 on halved cells
        "induced_drag": (1.1, 0.96, 1.0),  # from side to side
        "lift": (1.2, 1.0, 1.0),  # finest two equal
    }
    cells = (1000, 8000, 64000)
    ledgers = [on_grid(number, {name: values[k] for name, values in shapes.items()}) for k, number in enumerate(cells)]
    found = wl.grid_series(ledgers, cells=cells)
    expected = {
        "total_drag": ("divergent", "no order", "the grids diverge"),
        "profile_drag": ("out_of_range", "observed order 8.22", "outside 0.5 to 4"),
        "induced_drag": ("oscillatory", "observed order 1.81", "oscillate from grid to grid"),
        "lift": ("unchanged", "not trusted", "no order can be observed"),
    }
    for name, (verdict, *parts) in expected.items():
        one = found.of(name)
        assert (one.verdict, one.trusted) == (verdict, False)
        assert all(part in one.statement for part in parts), one.statement
        assert one.standard_uncertainty >= np.ptp(shapes[name]) / 2 * abs(one.fine) / shapes[name][-1] * (1 - 1e-12)
    unknown = found.of("side_force")
    assert unknown.verdict == "unknown" and "unknown on grids 1, 2, 3: the wake is cut" in unknown.statement
    # What does not change at all has no known error, and nothing is zero.
    same = found.of("span_efficiency")
    assert same.verdict == "unchanged" and math.isnan(same.standard_uncertainty)
    assert "far field alone" in found.notes[0]
    near = (1000, 1300, 2000)
    close = wl.grid_series([on_grid(n, {"lift": 1 + 0.2 * n ** (-2 / 3)}) for n in near], cells=near)
    assert close.of("lift").found.order == pytest.approx(2.0, rel=1e-8)
    assert close.of("lift").verdict == "close_grids" and "below 1.3" in close.of("lift").statement


def test_changes_below_the_rows_own_uncertainty_are_said(on_grid):
    ledgers = [on_grid(number, {"lift": 1 + 1e-4 * size(number) ** 2}) for number in CELLS]
    one = wl.grid_series(ledgers, cells=CELLS).of("lift")
    assert one.within_own and "may be that of the reduction" in one.statement


def test_of_more_grids_the_finest_three_count(power_law, found):
    more = wl.grid_series([power_law(number) for number in (30_000, *CELLS)], cells=(30_000, *CELLS))
    assert len(more.of("total_drag").values) == 4
    assert more.of("total_drag").found == found.of("total_drag").found
    assert any("finest three" in note for note in more.notes)
    assert "value_4" in more.to_dataframe()


def test_two_grids_with_an_assumed_order(base, power_law):
    pair = [power_law(number) for number in CELLS[1:]]
    found = wl.grid_series(pair, cells=CELLS[1:], order=2)
    far = found.of("total_drag")
    # The order is the true one: the limit is exact. The index has Roache's factor of 3 for two grids.
    assert far.extrapolated == pytest.approx(base.row("total_drag").value, rel=1e-12)
    assert far.found.index == pytest.approx(3 * 0.03 / 1.03, rel=1e-9)
    assert far.verdict == "assumed" and not far.trusted and "assumed order 2.00" in far.statement
    assert any("2 is assumed" in note for note in found.notes)


def test_values_that_only_some_ledgers_have_are_left_out_and_named(power_law):
    ledgers = [power_law(number) for number in CELLS]
    ledgers[0] = dataclasses.replace(ledgers[0], comparisons=())
    found = wl.grid_series(ledgers, cells=CELLS)
    assert not found.pairs and any(f"{NEAR} (total drag)" in note for note in found.notes)
    ledgers[0] = dataclasses.replace(ledgers[0], rows=ledgers[0].rows[:5], covariance=np.zeros((5, 5)))
    notes = wl.grid_series(ledgers, cells=CELLS).notes
    assert any("side force, span efficiency" in note for note in notes)


def test_what_is_refused(power_law, base, found):
    good = [power_law(number) for number in CELLS]

    def refused(match, ledgers=good, cells=CELLS, error=InputError, **options):
        with pytest.raises(error, match=match):
            wl.grid_series(ledgers, cells=cells, **options)

    refused("no ledger was given", [], ())
    refused("1 ledger given", good[:1], CELLS[:1])
    refused("two grids show no order", good[:2], CELLS[:2])
    refused("which show their own", order=2.0)
    refused("an order of -1", good[:2], CELLS[:2], order=-1.0)
    refused("2 numbers of cells are given for 3", cells=CELLS[:2])
    refused("neither rise nor fall", cells=(80_000, 667_000, 220_000))
    refused("neither rise nor fall", cells=(80_000, 80_000, 220_000))
    refused("-5 cells are no grid", cells=(-5, 80_000, 220_000))
    refused("nan cells are no grid", cells=(5, math.nan, 220_000))
    refused("4 dimensions", dimensions=4)
    refused("ledger 2 is made from the same data as ledger 1", [good[0], good[0], good[2]])

    def other(**changes):
        return [good[0], dataclasses.replace(good[1], **changes), good[2]]

    refused("ledger 2 has reference_area 0.2", other(model={**base.model, "reference_area": 0.2}))
    refused("ledger 2 has speed 43", other(reference={**base.reference, "speed": 43.0}))
    refused("same relations", other(compressible=True))
    refused(
        "boundary open_jet",
        other(survey_text=SURVEY.replace('"free_air"', '"open_jet"\ny = ["-1 m", "1 m"]\nz = ["-1 m", "1 m"]')),
    )
    refused("reflection y", other(survey_text=SURVEY.replace('"free_air"', '"free_air"\nreflection = "y"')))
    refused("plane at 1.2 m, ledger 1 of that at 0.9 m", other(plane=base.plane.assign_coords(x=1.2)))
    refused("mean of runs", other(repeats=base.plane.assign_attrs(survey_texts=json.dumps([SURVEY]))))
    renamed = (dataclasses.replace(good[1].row("lift"), name="rolling_moment"),)
    refused("no row in common", other(rows=renamed, covariance=np.zeros((1, 1)), comparisons=()), error=DataError)
    with pytest.raises(KeyError, match="there is no series of 'wave_drag'"):
        found.of("wave_drag")
    angles = [power_law(number, test={"alpha": f"{k} deg"}) for k, number in enumerate(CELLS)]
    assert "alpha is 0 deg and 1 deg and 2 deg" in wl.grid_series(angles, cells=CELLS).warnings[0]


def test_document_and_table(found, base):
    document = grid_series_json(found)
    json_text(document)  # refuses NaN
    line = next(one for one in document["series"] if (one["row"], one["source"]) == ("total_drag", FAR_FIELD))
    assert line["values"] == list(found.of("total_drag").values) and line["verdict"] == "monotone"
    assert line["counts"] == pytest.approx(250.9 * 1.03, rel=1e-12)
    assert line["counts_extrapolated"] == pytest.approx(250.9, rel=1e-10)
    assert line["own_uncertainty"] == base.row("total_drag").standard_uncertainty
    assert document["differences"][0]["source"] == NEAR
    nulls = [one for one in document["series"] if None in (one["order"], one["standard_uncertainty"])]
    assert nulls and all(one["reason"] for one in nulls)
    rows = grid_series_csv(found).splitlines()
    assert len(rows) == 1 + len(document["series"]) and rows[0].startswith("row,source,unit,value_1,value_2,value_3,")
    assert "monotone" in found._repr_html_()


@pytest.mark.parametrize("width", [60, 100, 140])
def test_text(found, width):
    text = grid_series_text(found, width=width)
    assert all(len(line) <= width for line in text.splitlines())
    flat = " ".join(text.split())
    assert "80000 cells" in flat and "Far field less near field" in text and "monotone" in text
    assert "surface integral" in flat
    if width >= 100:
        line = next(line for line in text.splitlines() if line.startswith("total drag, counts"))
        assert line.split()[3:] == ["281.8", "266.7", "258.4", "250.9", "2.00", "3.2", "3.6", "4.7", "monotone"]


def test_report_and_figure(found, on_grid):
    assert drawn_rows(found)[0] == "total_drag"
    page = grid_series_html(found)
    assert page == grid_series_html(found)
    assert page.count("data:image/svg+xml") == 1 and NEAR in page and "In words" in page
    alone = wl.grid_series([on_grid(number, {"lift": 1 + 0.01 * size(number) ** 2}) for number in CELLS], cells=CELLS)
    assert "Far field less near field" not in grid_series_html(alone)


def test_command(cli, room, tmp_path, monkeypatch):
    from wakeledger.present.report import grid_series as report

    files = [room / f"{number}.nc" for number in CELLS]
    cells = ("--cells", "80000, 220000,667_000")
    out = tmp_path / "out"
    status, text, err = cli("grids", *files, *cells, "--out", out, "--figures", "svg")
    assert (status, err) == (0, "")
    assert "total drag, counts" in text and f"Written to {out}: grids.json, grids.csv, report.html, figures/" in text
    assert {path.name for path in out.iterdir()} == {*products.OF_GRID_SERIES.files, "figures"}
    assert [path.name for path in (out / "figures").iterdir()] == ["grid_series.svg"]
    status, text, err = cli("grids", *files, *cells, "--json")
    assert (status, text) == (0, (out / "grids.json").read_text("utf-8"))
    assert json.loads(text)["grids"][0]["file"] == str(files[0])
    status, text, err = cli("grids", *files, *cells, "--out", out)
    assert status == 2 and "exist already" in err and not text
    monkeypatch.setattr(report, "grid_series_html", lambda *_: "<!DOCTYPE html>")
    assert cli("grids", *files, *cells, "--out", out, "--overwrite")[0] == 0
    assert not (out / "figures").exists()  # none is left that is out of date
    assert cli("grids", *files[1:], "--cells", "220000,667000", "--order", "2", "--dimensions", "2")[0] == 0


def test_command_refuses_in_one_line(cli, room, tmp_path):
    files = [room / f"{number}.nc" for number in CELLS]
    before = sorted(tmp_path.rglob("*"))
    for arguments, message in (
        ((*files,), "Missing option '--cells'"),
        ((*files, "--cells", "1,2,x"), "'x' is no whole number"),
        ((*files, "--cells", "1,2"), "2 numbers of cells are given for 3 ledgers"),
        (
            (files[0], files[0], files[1], "--cells", "1,2,3"),
            "80000.nc: ledger 2 is made from the same data as ledger 1",
        ),
        ((*files, "--cells", "1,2,3", "--dimensions", "1"), "'1' is not one of '2', '3'"),
        ((*files, "--cells", "1,2,3", "--figures", "svg"), "--figures needs --out"),
        ((tmp_path / "none.nc", *files[1:], "--cells", "1,2,3"), "the archive does not exist"),
    ):
        status, text, err = cli("grids", *arguments)
        assert (status, text) == (2, ""), arguments
        assert err.startswith("wakeledger: ") and err.count("\n") == 1 and message in err, err
    assert sorted(tmp_path.rglob("*")) == before


def test_a_failed_check_is_status_1(cli, room, power_law, base, tmp_path):
    failing = (dataclasses.replace(base.checks[0], verdict="fail"),)
    write_archive(power_law(CELLS[0], checks=failing), tmp_path / "failing.nc")
    files = (tmp_path / "failing.nc", *(room / f"{number}.nc" for number in CELLS[1:]))
    status, text, _ = cli("grids", *files, "--cells", ",".join(map(str, CELLS)))
    assert status == 1 and "Failed checks" in text


def test_products_appear_whole_or_not_at_all(found, tmp_path, monkeypatch):
    from wakeledger.present.report import grid_series as report

    def fails(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(report, "grid_series_html", fails)
    with pytest.raises(DataError, match="No space left"):
        products.OF_GRID_SERIES.write(found, tmp_path / "a" / "b")
    assert list(tmp_path.iterdir()) == []
