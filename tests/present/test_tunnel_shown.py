"""What the walls do is said beside its classical value, and the survey is drawn in its section."""

import dataclasses
import math

import numpy as np
import pytest
from matplotlib.patches import Polygon, Rectangle

from wakeledger.ledger.rows import TunnelFigure
from wakeledger.present import figures
from wakeledger.present.figures.section import has_section, section_figure
from wakeledger.present.report import report_html
from wakeledger.present.terminal import ledger_text
from wakeledger.present.tunnel_text import corrected_cells, tunnel_cells

Y, Z = np.array([-1.2, 1.2, 1.2, -1.2]), np.array([-0.5, -0.5, 0.7, 0.7])
FIGURES = (
    TunnelFigure("boundary_factor", 0.1231, "1", 0.0011, "boundary factor <delta>"),
    TunnelFigure("wake_blockage", 0.00387, "1", 0.00005, "velocity that the wake adds, as a share"),
    TunnelFigure("wall_upwash", math.radians(0.51), "1", math.radians(0.01), "upwash, positive up"),
    TunnelFigure("angle_correction", math.radians(0.42), "rad", math.radians(0.008), "to be added"),
    TunnelFigure("classical_small", 0.1186, "1", 0.0, "of a small wing"),
    TunnelFigure("classical_elliptic", 0.1094, "1", 0.0, "elliptic"),
    TunnelFigure("expected_wake_blockage", 0.00383, "1", math.nan, "C_D S/4C", reason="beside the measured one only"),
)


def between_walls(ledger, *, boundary="closed_walls", reflection="", found=FIGURES):
    plane = ledger.plane.assign_attrs(boundary=boundary, reflection=reflection)
    if boundary != "free_air":
        plane = plane.assign_attrs(section_y=Y, section_z=Z)
    rows = tuple(
        row if math.isnan(row.coefficient) else dataclasses.replace(row, coefficient_corrected=0.98 * row.coefficient)
        for row in ledger.rows
    )
    return dataclasses.replace(ledger, tunnel=found, plane=plane, rows=rows)


@pytest.fixture(scope="module")
def tunnel(ledger):
    return between_walls(ledger)


def lines_of(text):
    start = text.index("What the walls do")
    return text[start : text.index("Coefficients on the")].splitlines()


def test_each_figure_stands_above_its_classical_value_in_its_printed_unit(tunnel):
    lines = [line.split() for line in lines_of(ledger_text(tunnel)) if line.strip()][3:]
    assert lines == [
        ["boundary", "factor", "δ", "0.1231", "±", "0.0022"],
        ["classical,", "small", "wing", "0.119"],
        ["classical,", "elliptic", "loading", "0.109"],
        ["upwash", "of", "the", "walls", "at", "the", "model", "0.510", "±", "0.020", "deg"],
        ["incidence", "to", "be", "added", "0.420", "±", "0.016", "deg"],
        ["wake", "blockage", "0.387", "±", "0.010", "%", "of", "the", "speed"],
        ["classical,", "C_D", "S/4C", "0.383", "%", "of", "the", "speed"],
    ]


@pytest.mark.parametrize("width", [60, 80, 100, 140])
def test_tables_fit_the_terminal(tunnel, width):
    text = ledger_text(tunnel, width=width)
    assert max(map(len, text.splitlines())) <= width
    assert any(line.split()[:3] == ["wake", "blockage", "0.387"] for line in text.splitlines())


def test_an_unknown_uncertainty_says_why(ledger):
    unknown = dataclasses.replace(FIGURES[0], standard_uncertainty=math.nan, reason="the survey has no source")
    text = ledger_text(between_walls(ledger, found=(unknown, *FIGURES[4:])))
    assert any(line.split()[-3:] == ["0.1231", "±", "?"] for line in text.splitlines())
    assert "boundary factor δ: the survey has no source" in text
    # A classical value has none to be known.
    assert "beside the measured one only" not in text


def test_figures_of_another_name_are_shown_all_the_same(ledger):
    other = TunnelFigure("slot_factor", 0.31, "m2", 0.02, "how open the walls are")
    line = tunnel_cells(between_walls(ledger, found=(other,)))[0]
    assert (line["label"], line["value"], line["expanded"], line["unit"]) == ("slot factor", "0.310", "0.040", "m²")


def test_corrected_coefficients_stand_beside_the_tested_ones(tunnel, ledger):
    cells = {cell["row"]: cell for cell in corrected_cells(tunnel)}
    assert cells["total drag"] == {
        "row": "total drag", "coefficient": "250.9", "corrected": "245.9", "unit": "counts",
    }  # fmt: skip
    assert cells["lift"]["corrected"] == "0.4912"
    assert not corrected_cells(ledger)
    assert "corrected for blockage" not in ledger_text(ledger)


def test_planes_of_several_stations_have_a_column_each(tunnel):
    second = dataclasses.replace(
        tunnel,
        plane=tunnel.plane.assign_coords(x=1.8),
        tunnel=(dataclasses.replace(FIGURES[0], value=0.1302), *FIGURES[1:-1]),
    )
    both = dataclasses.replace(tunnel, tunnel=(), stations=(tunnel, second))
    text = "\n".join(lines_of(ledger_text(both)))
    assert "0.9 m" in text and "1.8 m" in text
    line = next(line for line in text.splitlines() if line.startswith("boundary factor"))
    assert line.split()[3:] == ["0.1231", "±", "0.0022", "0.1302", "±", "0.0022"]
    classical = next(line for line in text.splitlines() if "C_D S/4C" in line)
    assert classical.split()[3:5] == ["0.383", "–"]
    html = report_html(both)
    assert html.count("boundary factor δ") == 2


def test_section_figure_has_walls_window_and_wake(tunnel):
    figure = section_figure(tunnel)
    axes = figure.axes[0]
    assert axes.get_aspect() == 1.0
    assert axes.get_xlabel() == "y to starboard, m (seen from behind)"
    assert axes.get_title(loc="left") == "The plane between walls"
    walls = next(patch for patch in axes.patches if isinstance(patch, Polygon))
    assert np.allclose(walls.get_xy()[:4], np.column_stack([Y, Z]))
    window = next(patch for patch in axes.patches if isinstance(patch, Rectangle))
    assert window.get_bbox().extents == pytest.approx([-0.75, -0.3, 0.75, 0.3])
    texts = [text.get_text() for text in figure.legends[0].get_texts()]
    assert texts == [
        "walls", "window", "wake region", "vortex, counter-clockwise", "vortex, clockwise",
    ]  # fmt: skip
    turning = {line.get_label(): line for line in axes.lines}
    assert turning["vortex, counter-clockwise"].get_xdata()[0] > 0 > turning["vortex, clockwise"].get_xdata()[0]


@pytest.mark.parametrize("reflection", ["y", "z"])
def test_the_mirrored_side_was_not_surveyed(ledger, reflection):
    figure = section_figure(between_walls(ledger, reflection=reflection))
    boxes = {patch.get_label(): patch for patch in figure.axes[0].patches}
    low = {"y": (0.0, -0.3), "z": (-0.75, 0.0)}[reflection]
    assert boxes["window"].get_xy() == pytest.approx(low)
    mirrored = boxes["mirrored"].get_bbox().extents
    assert mirrored == pytest.approx([-1.2, -0.5, 0.0, 0.7] if reflection == "y" else [-1.2, -0.5, 1.2, 0.0])
    assert "reflection plane" in [text.get_text() for text in figure.legends[0].get_texts()]


def test_ground_alone_and_open_jet(ledger):
    jet = section_figure(between_walls(ledger, boundary="open_jet")).axes[0]
    assert jet.get_title(loc="left") == "The plane in the open jet"
    ground = between_walls(ledger, boundary="free_air", reflection="z", found=())
    axes = section_figure(ground).axes[0]
    assert not any(isinstance(patch, Polygon) and patch.get_label() == "walls" for patch in axes.patches)
    assert "<h2>The reflection plane</h2>" in report_html(ground)


def test_report_and_gallery(tunnel, ledger):
    html = report_html(tunnel)
    for part in ("<h2>The tunnel</h2>", "boundary factor &lt;delta&gt;", "wake blockage", "% of the speed"):
        assert part in html, part
    assert "section" in figures.draw(tunnel)
    assert not has_section(ledger)
    assert "section" not in figures.draw(ledger)
    assert "<h2>The tunnel</h2>" not in report_html(ledger)
