"""Several planes beside each other: every figure is said, in one unit, at any width, and drawn at its station."""

import dataclasses
import math
from unicodedata import east_asian_width

import numpy as np
import pytest

from wakeledger.ledger.ledger import Combined
from wakeledger.present import figures
from wakeledger.present.figures.stations import decay_curve, stations_figure, stations_rows
from wakeledger.present.report import report_html
from wakeledger.present.stations_text import DECAY, scale_of, stations_lines, verdict_lines
from wakeledger.present.terminal import ledger_text

STATIONS = (0.9, 1.8, 2.7)
#: Induced drag lost by each station, N, and its standard uncertainty.
DECAY_AT, DOUBT = (0.10, 0.16, 0.20), (0.02, 0.03, 0.04)


def moved(ledger, **changes):
    """The ledger with other rows, changed in value and coefficient alike."""

    def row(one):
        change = changes.get(one.name)
        if change is None:
            return one
        scale = (one.value + change) / one.value
        return dataclasses.replace(one, value=one.value + change, coefficient=one.coefficient * scale)

    return dataclasses.replace(ledger, rows=tuple(map(row, ledger.rows)))


def several(ledger, method="extrapolated", stations=STATIONS, decay=DECAY_AT, doubt=DOUBT):
    """Planes whose induced drag falls by the decay and whose profile drag rises by it."""
    planes = []
    for x, lost in zip(stations, decay, strict=True):
        lost = 0.0 if math.isnan(lost) else lost
        plane = moved(ledger, induced_drag=-lost, profile_drag=lost)
        planes.append(dataclasses.replace(plane, plane=plane.plane.assign_coords(x=x), comparisons=()))
    unknown = math.isnan(decay[0])
    combined = Combined(
        method,
        "no trend" if method == "weighted_mean" else "the trend is resolved",
        math.nan if unknown else 0.012,
        math.nan if unknown else 0.004,
        1.3,
        3,
        decay,
        doubt,
    )
    return dataclasses.replace(ledger, stations=tuple(planes), combined=combined, estimates=())


@pytest.fixture(scope="module")
def planes(ledger):
    return several(ledger)


def columns(line):
    return sum(2 if east_asian_width(character) in "WF" else 1 for character in line)


@pytest.mark.parametrize("width", [60, 80, 100, 140])
@pytest.mark.parametrize("count", [2, 3, 9])
def test_tables_fit_the_terminal_and_break_no_figure(ledger, width, count):
    x = tuple(0.5 + 0.25 * k for k in range(count))
    many = several(ledger, stations=x, decay=(0.1,) * count, doubt=(0.02,) * count)
    text = ledger_text(many, width=width)
    assert max(map(columns, text.splitlines())) <= width
    part = text[text.index(f"The {count} planes") : text.index("Comparison with")]
    assert not any(line.startswith(("decay", "drag")) for line in part.splitlines())
    lost = [line for line in part.splitlines() if line.startswith(DECAY)]
    assert sum(line.count(" ± ") for line in lost) == count
    assert sum(line.count(f"{100 * x[-1]:g}") for line in lost) == 0
    heads = " ".join(line for line in part.splitlines() if line.endswith(("m", "combined")) and "±" not in line).split()
    assert [float(head) for head in heads if head not in ("m", "combined", "method")][:count] == list(x)


def test_every_row_stands_at_its_station_in_counts(planes):
    lines = {line.label: line for line in stations_lines(planes)}
    induced = lines["induced drag"]
    row = planes.row("induced_drag")
    per_newton = row.counts / row.value
    assert induced.unit == "counts"
    assert induced.how == "trailing edge"
    for (shown, u), lost in zip(induced.stations, DECAY_AT, strict=True):
        # One tenth of a count is the last printed digit.
        assert float(shown) == pytest.approx(103.1 - per_newton * lost, abs=0.05)
        assert float(u) == pytest.approx(2.6, abs=0.05)
    assert induced.combined == ("103.1", "2.6")
    assert lines["lift"].unit == ""
    assert lines["lift"].how == "mean"
    decay = lines[DECAY]
    assert decay.unit == "counts"
    assert [float(shown) for shown, _ in decay.stations] == pytest.approx(
        [per_newton * lost for lost in DECAY_AT], abs=0.05
    )
    assert [float(u) for _, u in decay.stations] == pytest.approx([2 * per_newton * u for u in DOUBT], abs=0.05)
    assert decay.how == "added back"


def test_a_coefficient_that_is_unknown_at_one_station_is_printed_nowhere(planes):
    first = planes.stations[0]
    rows = tuple(dataclasses.replace(row, coefficient_standard_uncertainty=math.nan) for row in first.rows)
    mixed = dataclasses.replace(planes, stations=(dataclasses.replace(first, rows=rows), *planes.stations[1:]))
    assert scale_of(mixed, "induced_drag").unit == "N"
    line = next(line for line in stations_lines(mixed) if line.label == "induced drag")
    assert line.unit == "N"
    assert float(line.combined[0]) == pytest.approx(planes.row("induced_drag").value, abs=5e-4)


def test_the_mean_is_called_a_mean(ledger):
    mean = several(ledger, "weighted_mean")
    lines = {line.label: line for line in stations_lines(mean)}
    assert {line.how for label, line in lines.items() if label != DECAY} == {"mean"}
    assert lines[DECAY].how == "not resolved"
    nan = (math.nan,) * 3
    bare = several(ledger, "weighted_mean", decay=nan, doubt=nan)
    assert DECAY not in {line.label for line in stations_lines(bare)}
    text = ledger_text(bare)
    assert DECAY not in text and "diffusivity" not in text


def test_verdicts_of_all_planes_are_in_one_table(planes):
    odd = dataclasses.replace(planes.stations[1].estimates[1], verdict="disagrees", normalised_error=2.41)
    estimates = list(planes.stations[1].estimates)
    estimates[1] = odd
    fewer = dataclasses.replace(planes.stations[2], estimates=planes.stations[2].estimates[:1])
    second = dataclasses.replace(planes.stations[1], estimates=tuple(estimates))
    mixed = dataclasses.replace(planes, stations=(planes.stations[0], second, fewer))
    found = {(line.row, line.method): line.stations for line in verdict_lines(mixed)}
    assert [verdict for verdict, _ in found["induced drag", "energy area"]] == ["agrees", "disagrees", ""]
    assert found["induced drag", "energy area"][1][1] == "2.41"
    text = ledger_text(mixed, width=140)
    line = next(line for line in text.splitlines() if line.startswith("induced drag") and "energy area" in line)
    assert line.split()[4:] == ["agrees", "0.17", "DISAGREES", "2.41", "–"]
    # Why one is not independent is said once, not once per plane.
    assert text.count("same algebra as the sum of rows") == 1
    html = report_html(mixed)
    assert "At 1.8 m energy area disagrees with the primary induced drag (E_n = 2.41)." in html


def test_the_fit_is_said(planes, ledger):
    text = " ".join(ledger_text(planes, width=100).split())
    assert "Effective diffusivity of the trailing vortices 0.0120 ± 0.0080 m²/s (k = 2)" in text
    assert "chi-square 1.3 with 3 degrees of freedom" in text
    assert "planes" not in ledger_text(ledger)


def test_figure_shows_each_plane_at_its_station(planes):
    figure = stations_figure(planes)
    assert stations_rows(planes) == ("total_drag", "induced_drag", "profile_drag")
    assert [axes.get_title(loc="left") for axes in figure.axes] == ["total drag", "induced drag", "profile drag"]
    assert {axes.get_ylabel() for axes in figure.axes} == {"counts"}
    assert figure.axes[-1].get_xlabel() == "distance of the plane behind the trailing edge, m"
    induced = figure.axes[1]
    drawn = next(line for line in induced.lines if len(line.get_xdata()) == 3)
    row = planes.row("induced_drag")
    expected = [row.counts * (1 - lost / row.value) for lost in DECAY_AT]
    assert np.allclose(drawn.get_xdata(), STATIONS)
    assert np.allclose(drawn.get_ydata(), expected, rtol=1e-9)
    # The fitted curve begins at the ledger's row at the trailing edge and falls through the planes; profile rises.
    curves = [next(line for line in axes.lines if len(line.get_xdata()) > 50) for axes in figure.axes[1:]]
    for curve, name, sign in zip(curves, ("induced_drag", "profile_drag"), (-1, 1), strict=True):
        x, y = curve.get_xdata(), curve.get_ydata()
        assert x[0] == 0
        assert y[0] == pytest.approx(planes.row(name).counts, rel=1e-9)
        assert (sign * np.diff(y) > 0).all()
        lost = sign * (y - y[0]) * planes.row(name).value / planes.row(name).counts
        # The curve goes through the decays; 200 points are joined by straight lines.
        assert np.interp(STATIONS, x, lost) == pytest.approx(DECAY_AT, rel=1e-3)
    star = next(line for line in induced.lines if line.get_marker() == "*")
    assert (star.get_xdata()[0], star.get_ydata()[0]) == (0, pytest.approx(103.1))
    texts = [text.get_text() for text in figure.legends[0].get_texts()]
    assert texts == [
        "one plane ± U95", "row of the ledger ± U95", "balance (band: k = 2)",
        "row of the ledger, at the trailing edge", "fitted vortex decay",
    ]  # fmt: skip


def test_a_compared_value_is_a_line_in_its_own_panel(planes):
    figure = stations_figure(planes)
    row, balance = planes.row("total_drag"), planes.comparisons[0]
    at = balance.value * row.counts / row.value
    dashed = [line for line in figure.axes[0].lines if line.get_label().startswith("balance")]
    assert [line.get_ydata()[0] for line in dashed] == pytest.approx([at])
    assert not any(str(line.get_label()).startswith("balance") for axes in figure.axes[1:] for line in axes.lines)


def test_means_have_bands_and_no_curve(ledger):
    figure = stations_figure(several(ledger, "weighted_mean"))
    for axes in figure.axes:
        assert all(len(line.get_xdata()) <= 3 and line.get_marker() != "*" for line in axes.lines)
    assert figure.axes[-1].get_xlim()[0] > 0.7
    texts = [text.get_text() for text in figure.legends[0].get_texts()]
    assert "row of the ledger ± U95" in texts and "fitted vortex decay" not in texts


def test_figure_without_uncertainty_and_in_newtons(planes):
    def bare(one):
        unknown = {"standard_uncertainty": math.nan, "expanded_uncertainty": math.nan}
        rows = tuple(
            dataclasses.replace(
                row, **unknown, coefficient=math.nan, coefficient_standard_uncertainty=math.nan, reason="no source"
            )
            for row in one.rows
        )
        return dataclasses.replace(one, rows=rows)

    poor = dataclasses.replace(bare(planes), stations=tuple(map(bare, planes.stations)))
    figure = stations_figure(poor)
    assert {axes.get_ylabel() for axes in figure.axes} == {"N"}
    assert figures.figure_bytes(figure, "png")
    assert "± ?" in ledger_text(poor)


def test_a_residual_is_drawn_only_where_it_can_be_seen(planes):
    assert "residual_drag" not in stations_rows(planes)
    large = tuple(moved(one, residual_drag=0.5) for one in planes.stations)
    assert "residual_drag" in stations_rows(dataclasses.replace(planes, stations=large))


def test_decay_begins_at_nothing_at_the_trailing_edge_in_any_order_of_planes(ledger):
    shuffled = several(ledger, stations=(1.8, 0.9, 2.7), decay=(0.16, 0.10, 0.20))
    x, lost = decay_curve(shuffled)
    assert (x[0], lost[0]) == (0, 0)
    assert (np.diff(lost) > 0).all()
    assert np.interp([0.9, 1.8, 2.7], x, lost) == pytest.approx([0.10, 0.16, 0.20], rel=1e-3)


def test_report_has_the_planes_and_says_which_one_is_mapped(planes, ledger):
    html = report_html(planes)
    for part in ("<h2>The planes</h2>", "at 0.9 m", "at 2.7 m", "added back", "The plane at 0.9 m", figures_caption()):
        assert part in html, part
    assert "<h2>The planes</h2>" not in report_html(ledger)


def figures_caption():
    return "Each drag against the station of the plane, bars U95."


def test_gallery_has_the_figure_where_there_are_planes(planes, ledger):
    assert next(iter(figures.draw(planes))) == "stations"
    assert "stations" not in figures.draw(ledger)
