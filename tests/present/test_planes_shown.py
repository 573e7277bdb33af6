"""Every plane of several stations is drawn by its station, and what is left out of a report is said."""

import dataclasses
import re

import numpy as np
import pytest
from matplotlib.image import AxesImage

from wakeledger.ledger.ledger import Combined
from wakeledger.present import figures
from wakeledger.present.figures import gallery
from wakeledger.present.figures.drawing import Drawing
from wakeledger.present.products import OF_LEDGER
from wakeledger.present.report import report_html


def surveyed(ledger, count):
    """Planes 0.5 m apart, each with its own fields: the loss of plane k is k + 1 times that of the first."""
    planes = []
    for k in range(count):
        fields = ledger.plane.assign_coords(x=0.5 * (k + 1))
        fields = fields.assign(total_pressure_loss=fields["total_pressure_loss"] * (k + 1))
        planes.append(dataclasses.replace(ledger, plane=fields, comparisons=()))
    lost = (0.1,) * count
    combined = Combined("weighted_mean", "no trend", 0.01, 0.004, 1.3, 3, lost, lost)
    return dataclasses.replace(ledger, plane=planes[0].plane, stations=tuple(planes), combined=combined, estimates=())


@pytest.fixture(scope="module")
def two(ledger):
    return surveyed(ledger, 2)


@pytest.fixture
def marks_only(monkeypatch):
    """Of each plane an empty figure, the wider the further its station; two planes fill a report."""
    from matplotlib.figure import Figure

    def mark(ledger):
        return Figure(figsize=(1 + ledger.station, 1))

    monkeypatch.setattr(gallery, "MOST_PLANES", 2)
    monkeypatch.setattr(gallery, "OF_PLANE", {"total_pressure_loss": Drawing(mark, lambda _: True, "The loss.")})
    monkeypatch.setattr(gallery, "OF_LEDGER", {})


def field(figure):
    return next(child for child in figure.axes[0].get_children() if isinstance(child, AxesImage)).get_array()


def test_every_plane_is_drawn_with_its_own_fields(two, monkeypatch):
    few = {"total_pressure_loss": gallery.OF_PLANE["total_pressure_loss"]}
    monkeypatch.setattr(gallery, "OF_PLANE", few)
    monkeypatch.setattr(gallery, "OF_LEDGER", {})
    drawn = figures.draw(two)
    assert list(drawn) == ["total_pressure_loss_plane_1", "total_pressure_loss_plane_2"]
    first, second = map(field, drawn.values())
    assert np.allclose(second, 2 * first, rtol=1e-12)
    assert first.max() > 0


def test_the_report_has_a_section_for_every_plane(two):
    document = report_html(two)
    headings = re.findall(r"<h2>(.*?)</h2>", document)
    at = [heading for heading in headings if " at " in heading]
    assert at == [
        "The plane at 0.5 m", "Vortices at 0.5 m", "Along the span at 0.5 m",
        "The plane at 1 m", "Vortices at 1 m", "Along the span at 1 m",
    ]  # fmt: skip
    # Stations and budget, compared values, and four figures of each plane.
    assert document.count("<figure>") == 3 + 2 * 4
    assert "not drawn here" not in document


@pytest.mark.parametrize(
    ("count", "most", "expected"),
    [(1, 6, (0,)), (2, 6, (0, 1)), (6, 6, (0, 1, 2, 3, 4, 5)), (9, 3, (0, 4, 8)), (12, 6, (0, 2, 4, 7, 9, 11))],
)
def test_many_planes_are_thinned_and_both_ends_kept(ledger, monkeypatch, count, most, expected):
    monkeypatch.setattr(gallery, "MOST_PLANES", most)
    assert gallery.planes_drawn(surveyed(ledger, count)) == expected
    assert gallery.planes_drawn(surveyed(ledger, count), every=True) == tuple(range(count))


def test_what_the_report_leaves_out_is_said_and_written_with_the_figures(ledger, marks_only, tmp_path):
    many = surveyed(ledger, 3)
    document = report_html(many)
    assert document.count("<figure>") == 2
    assert re.findall(r"<h2>The plane at ([\d.]+ m)", document) == ["0.5 m", "1.5 m"]
    assert "The plane at 1 m is not drawn here" in document
    names = OF_LEDGER.write(many, tmp_path, figures=("svg",))
    pictures = [name.name for name in names if name.parts[0] == "figures"]
    widths = [
        float(re.search(r'width="([\d.]+)pt"', (tmp_path / "figures" / name).read_text())[1]) for name in pictures
    ]
    assert np.allclose(widths, [72 * (1 + 0.5 * k) for k in range(1, 4)], rtol=1e-6)
    assert pictures == [f"total_pressure_loss_plane_{k}.svg" for k in range(1, 4)]
    # With the figures the report shows the same planes as without.
    assert (tmp_path / "report.html").read_text("utf-8") == document
    # Those of an earlier run go when they are replaced.
    assert len(OF_LEDGER.existing(tmp_path)) == 4 + 3
    OF_LEDGER.write(many, tmp_path, overwrite=True)
    assert not (tmp_path / "figures").exists()
