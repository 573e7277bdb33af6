"""The change of every plane that two ledgers have in common is drawn at its station, and kept in the archive."""

import dataclasses
import re

import numpy as np
import pytest
import xarray as xr
from matplotlib.image import AxesImage

from wakeledger.ledger.increment import Figure, Increment, IncrementRow, Side, write_increment_archive
from wakeledger.ledger.plane_difference import plane_differences
from wakeledger.present.figures.increment import OF_PLANES, draw_increment
from wakeledger.present.products import OF_INCREMENT
from wakeledger.present.report.increment import increment_html


def increment(planes, notes=()):
    figure = Figure(5.0, 5.1, 0.1, 0.02, 0.04, 2.0, 200.0, 0.05)
    rows = (IncrementRow("total_drag", "N", figure, dataclasses.replace(figure, a=0.025, b=0.0255, difference=5e-4)),)
    return Increment(
        Side("clean"), Side("with strip"), rows, np.array([[4e-4]]), plane=planes[0], further_planes=planes[1:],
        notes=notes,
    )  # fmt: skip


@pytest.fixture(scope="module")
def several(ledger):
    """Two ledgers of planes at 1 m and 2 m, the loss of B being twice and four times that of A."""
    sides = []
    for factors in ((1, 1), (2, 4)):
        fields = [
            ledger.plane.assign(total_pressure_loss=factor * ledger.plane["total_pressure_loss"]).assign_coords(x=x)
            for x, factor in zip((1.0, 2.0), factors, strict=True)
        ]
        planes = tuple(dataclasses.replace(ledger, plane=one) for one in fields)
        sides.append(dataclasses.replace(ledger, plane=fields[0], stations=planes))
    reference = dict(ledger.reference)
    assert reference["dynamic_pressure"] > 0
    return increment(*plane_differences(*sides))


@pytest.fixture
def losses_only(monkeypatch):
    for name in set(OF_PLANES) - {"loss_difference"}:
        monkeypatch.delitem(OF_PLANES, name)


def test_each_difference_is_drawn_with_its_own_fields(several, losses_only):
    drawn = draw_increment(several)
    maps = [figure for name, figure in drawn.items() if name.startswith("loss_difference")]
    assert [name for name in drawn if name.startswith("loss")] == ["loss_difference_plane_1", "loss_difference_plane_2"]
    first, second = (
        next(child for child in figure.axes[0].get_children() if isinstance(child, AxesImage)).get_array()
        for figure in maps
    )
    # Once and three times A's loss is added.
    assert np.allclose(second, 3 * first, rtol=1e-12)
    assert first.max() > 0.1


def test_the_report_names_the_stations(several, losses_only):
    document = increment_html(several)
    assert re.findall(r"<h2>(What changed.*?)</h2>", document) == [
        "What changed in the flow at 1 m", "What changed in the flow at 2 m"
    ]  # fmt: skip
    one = dataclasses.replace(several, further_planes=())
    assert "<h2>What changed in the flow</h2>" in increment_html(one)
    assert "What changed in the flow" not in increment_html(dataclasses.replace(one, plane=None))


def test_the_archive_and_the_figures_hold_every_difference(several, losses_only, tmp_path):
    write_increment_archive(several, tmp_path / "increment.nc")
    for group, plane in (("plane", several.plane), ("plane_2", several.further_planes[0])):
        with xr.open_dataset(tmp_path / "increment.nc", group=group) as kept:
            assert float(kept["x"]) == float(plane["x"])
            assert np.array_equal(kept["total_pressure_loss"], plane["total_pressure_loss"])
    OF_INCREMENT.write(several, tmp_path / "out", figures=("svg",))
    assert {path.name for path in (tmp_path / "out" / "figures").iterdir()} == {
        "increments.svg", "loss_difference_plane_1.svg", "loss_difference_plane_2.svg"
    }  # fmt: skip
    assert len(OF_INCREMENT.existing(tmp_path / "out")) == 4 + 3
