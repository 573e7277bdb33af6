"""Figures hold what they are meant to hold, and their files are the same bytes each time."""

import dataclasses
import io
import math
import subprocess
import sys

import numpy as np
import pytest
from matplotlib.image import AxesImage

from wakeledger.core.flags import Flag
from wakeledger.ledger.rows import BudgetLine
from wakeledger.present import figures
from wakeledger.present.figures import gallery
from wakeledger.present.figures.budget import pooled_shares
from wakeledger.present.figures.crosschecks import offsets


@pytest.fixture(scope="module")
def drawn(ledger):
    return figures.draw(ledger)


def image_of(figure):
    return next(child for child in figure.axes[0].get_children() if isinstance(child, AxesImage))


def labels(axes):
    return axes.get_xlabel(), axes.get_ylabel()


def test_every_figure_is_drawn(drawn):
    assert list(drawn) == [
        "estimates", "budget", "total_pressure_loss", "axial_vorticity", "axial_velocity", "span_loading",
    ]  # fmt: skip


@pytest.mark.parametrize("name", ["total_pressure_loss", "axial_vorticity", "axial_velocity"])
def test_maps_are_seen_from_behind_in_equal_scale_with_units(drawn, ledger, name):
    axes = drawn[name].axes[0]
    assert axes.get_aspect() == 1.0
    left, right = axes.get_xlim()
    low, high = axes.get_ylim()
    assert left < right and low < high  # y to starboard is to the right, z is up
    assert labels(axes) == ("y to starboard, m (seen from behind)", "z up, m")
    image = image_of(drawn[name])
    assert image.origin == "lower"
    # Each cell is drawn around its own point: the edges lie half a cell outside the outermost points.
    assert image.get_extent() == pytest.approx([-0.755, 0.755, -0.305, 0.305], rel=1e-9)
    bar = drawn[name].axes[1]
    assert bar.get_ylabel() in ("total-pressure loss / q", "axial vorticity, 1/s", "u / U − 1")


def test_diverging_colours_are_centred_at_zero(drawn):
    for name in ("axial_vorticity", "axial_velocity"):
        low, high = image_of(drawn[name]).get_clim()
        assert low == -high < 0


def test_cells_of_a_map_are_pixels_of_its_file(drawn, ledger):
    """The file holds one pixel a cell, in the colour of its value; the viewer enlarges them without smoothing."""
    import base64
    import re

    from PIL import Image

    svg = figures.figure_bytes(drawn["axial_vorticity"], "svg").decode()
    (found,) = re.findall(r'<image[^>]*href="data:image/png;base64,([^"]*)"[^>]*image-rendering:[^>]*pixelated', svg)
    with Image.open(io.BytesIO(base64.b64decode(found))) as file:
        pixels = np.asarray(file.convert("RGBA"))
    assert pixels.shape[:2] == ledger.plane["axial_vorticity"].shape
    image = image_of(drawn["axial_vorticity"])
    expected = np.round(255 * image.cmap(image.norm(ledger.plane["axial_vorticity"].values)))
    # The first row of pixels is the lowest, the file turns the image over; colours are rounded once more on their way.
    assert re.search(r'<image[^>]*transform="scale\(1 -1\)[^"]*"[^>]*/?>', svg)
    assert np.abs(pixels.astype(float) - expected).max() <= 1


def test_the_longest_arrows_are_cut_and_keep_their_direction(ledger):
    from matplotlib.quiver import Quiver, QuiverKey

    plane = ledger.plane.copy(deep=True)
    # Two of the places that have an arrow.
    plane["v"][12, 2:12:5] = 3e3
    plane["w"][12, 2:12:5] = -4e3
    axes = figures.vorticity_map(dataclasses.replace(ledger, plane=plane)).axes[0]
    (arrows,) = (child for child in axes.get_children() if isinstance(child, Quiver))
    length = np.hypot(arrows.U, arrows.V)
    (shown,) = (child for child in axes.get_children() if isinstance(child, QuiverKey))
    key = float(shown.label.split()[0])
    assert length.max() == pytest.approx(2 * key, rel=1e-12)
    longest = np.isclose(length, 2 * key)
    assert longest.sum() == 2
    assert np.allclose(arrows.V[longest] / arrows.U[longest], -4 / 3, rtol=1e-12)


def test_maps_show_the_fields_unflipped(drawn, ledger):
    shown = image_of(drawn["axial_vorticity"]).get_array()
    assert np.array_equal(shown, ledger.plane["axial_vorticity"].values)
    starboard = ledger.plane["y"].values > 0.4
    assert shown[:, starboard].sum() > 0  # the starboard tip vortex turns counter-clockwise for lift up


def test_outline_vortices_trace_and_gaps_are_named(drawn):
    texts = [text.get_text() for text in drawn["axial_vorticity"].legends[0].get_texts()]
    assert texts == ["wake region", "no trusted measurement", "trace of the wake", "vortex centre and core radius"]


def test_gaps_in_the_fields_are_drawn(ledger):
    """Cells without a value stay blank; nothing warns."""
    hole = (ledger.plane["y"] > 0.3) & (ledger.plane["z"] > 0.1)
    gappy = dataclasses.replace(ledger, plane=ledger.plane.where(~hole).assign(flag=ledger.plane["flag"]))
    for figure in figures.draw(gappy).values():
        assert figures.figure_bytes(figure, "png")


def test_separate_chains_of_the_trace_are_not_joined(ledger):
    trace = ledger.wake_line
    chains = trace.assign(chain=("s", (trace["y"].values > 0).astype(np.int32)))
    axes = figures.loss_map(dataclasses.replace(ledger, wake_line=chains)).axes[0]
    dashed = [line for line in axes.lines if line.get_linestyle() == "--"]
    assert len(dashed) == 2
    assert max(dashed[0].get_xdata()) < min(dashed[1].get_xdata())


def test_hatched_boxes_cover_exactly_the_untrusted_cells(ledger, drawn):
    from matplotlib.collections import PatchCollection

    collections = [c for c in drawn["total_pressure_loss"].axes[0].collections if isinstance(c, PatchCollection)]
    area = sum(np.ptp(path.vertices[:, 0]) * np.ptp(path.vertices[:, 1]) for c in collections for path in c.get_paths())
    untrusted = (ledger.plane["flag"].values & (Flag.MISSING | Flag.FAR_FROM_DATA)) != 0
    assert area == pytest.approx(untrusted.sum() * 1e-4, rel=1e-9)


def test_what_a_ledger_lacks_is_left_out(ledger):
    poor = dataclasses.replace(
        ledger,
        plane=ledger.plane.drop_vars(["wake_mask", "flag"]).assign(
            total_pressure_loss=ledger.plane["total_pressure_loss"] * np.nan
        ),
        span=None,
        vortices=None,
        wake_line=None,
        estimates=(),
        comparisons=(),
        budget=(),
        reference={},
    )
    drawn = figures.draw(poor)
    assert list(drawn) == ["axial_vorticity", "axial_velocity"]
    assert drawn["axial_velocity"].axes[1].get_ylabel() == "u, m/s"
    assert not drawn["axial_vorticity"].legends
    assert figures.figure_bytes(drawn["axial_vorticity"], "png")


def test_estimates_are_offsets_in_per_cent(ledger):
    found = {offset.label: offset for offset in offsets(ledger)}
    energy = found["induced drag: energy area"]
    # The example's energy form reads 3.1 % high, 2.8 % is expected, u = 0.9 %, the row has U95 = 2.6 of 103.1 counts.
    assert (energy.offset, energy.expected, energy.half) == pytest.approx((3.1, 2.8, 1.8), rel=1e-9)
    assert energy.band == pytest.approx(100 * 2.6 / 103.1, rel=1e-9)
    balance = found["total drag: balance"]
    row = ledger.row("total_drag").value
    assert balance.offset == pytest.approx(100 * (4.68 - row) / row, rel=1e-9)  # below the row: to the left
    assert balance.offset < 0
    assert math.isnan(found["lift: balance"].half)


def test_axes_of_the_other_figures_have_units(drawn):
    upper, lower = drawn["span_loading"].axes
    assert upper.get_ylabel() == "Γ, m²/s"
    assert labels(lower) == ("y to starboard, m (seen from behind)", "drag, N/m")
    assert drawn["estimates"].axes[0].get_xlabel() == "difference from the primary row, % of the row"
    # One label for all panels: several beside each other would overlap where the names of the sources are long.
    assert {axes.get_xlabel() for axes in drawn["budget"].axes} == {""}
    assert drawn["budget"].get_supxlabel() == "share of the row's variance, %"
    assert [axes.get_title(loc="left") for axes in drawn["budget"].axes] == [
        "profile drag", "induced drag", "total drag", "lift",
    ]  # fmt: skip


def test_budget_bars_are_the_shares(drawn):
    widths = [bar.get_width() for bar in drawn["budget"].axes[0].patches]
    assert widths == pytest.approx([42, 27, 16, 10, 4, 1], rel=1e-9)


def test_small_sources_are_pooled_and_unknown_ones_say_so(ledger):
    shares = {"noise": 0.981, "a": 0.006, "b": 0.009, "c": 0.004}
    lines = tuple(BudgetLine("lift", source, 0.1, share) for source, share in shares.items())
    unknown = BudgetLine("total_drag", "mask", math.nan, math.nan)
    poor = dataclasses.replace(ledger, budget=(*lines, unknown))
    rows, sources, pooled = pooled_shares(poor)
    assert rows == ["total_drag", "lift"]
    assert sources == ["mask", "noise", "3 smaller sources"]
    assert pooled["lift", "3 smaller sources"] == pytest.approx(1.9, rel=1e-9)
    assert sum(share for (row, _), share in pooled.items() if row == "lift") == pytest.approx(100, rel=1e-9)
    texts = [text.get_text() for text in figures.budget_figure(poor).axes[0].texts]
    assert "unknown" in texts


@pytest.mark.parametrize("kind", figures.FORMATS)
def test_files_are_the_same_bytes_each_time(ledger, kind):
    first, second = (figures.figure_bytes(figures.vorticity_map(ledger), kind) for _ in range(2))
    assert first == second
    assert first[:5] == {"pdf": b"%PDF-", "png": b"\x89PNG\r", "svg": b"<?xml"}[kind]


def test_svg_names_neither_date_nor_random_identifiers(ledger):
    text = figures.figure_bytes(figures.loss_map(ledger), "svg").decode()
    assert "<dc:date>" not in text
    assert "<image" in text
    script = (
        "import runpy, sys, hashlib; from wakeledger.present import figures\n"
        "ledger = runpy.run_path(sys.argv[1])['example_ledger']()\n"
        "print(hashlib.sha256(figures.figure_bytes(figures.loss_map(ledger), 'svg')).hexdigest())\n"
        "print('matplotlib.pyplot' in sys.modules)"
    )
    from hashlib import sha256
    from pathlib import Path

    example = str(Path(__file__).resolve().parents[1] / "ledger" / "example.py")
    done = subprocess.run([sys.executable, "-c", script, example], capture_output=True, text=True, check=True)
    assert done.stdout.split() == [sha256(text.encode()).hexdigest(), "False"]


def test_large_maps_stay_small_files(example_ledger):
    fine = example_ledger(spacing=0.002)
    assert fine.plane["u"].size > 200_000
    assert len(figures.figure_bytes(figures.vorticity_map(fine), "svg")) < 1_000_000


def test_names_of_the_user_are_no_formulas(ledger):
    line = dataclasses.replace(ledger.budget[0], source="zero drift $x_{ 翼")
    figure = figures.budget_figure(dataclasses.replace(ledger, budget=(line,)))
    assert b"<svg" in figures.figure_bytes(figure, "svg")


def test_the_style_leaves_no_trace(ledger):
    import matplotlib as mpl

    before = {name: repr(value) for name, value in mpl.rcParams.items()}
    figures.figure_bytes(figures.budget_figure(ledger), "svg")
    assert {name: repr(value) for name, value in mpl.rcParams.items()} == before


def test_saving(ledger, tmp_path, monkeypatch):
    monkeypatch.setattr(gallery, "OF_PLANE", {})
    names = [path.name for path in figures.save(figures.draw(ledger), tmp_path, ("png", "svg"))]
    assert len(names) == 4
    assert {path.name for path in tmp_path.iterdir()} == set(names)
    with pytest.raises(ValueError, match="allowed: pdf, png, svg"):
        figures.figure_bytes(figures.budget_figure(ledger), "bmp")


def test_png_has_the_stated_size(drawn):
    from PIL import Image

    with Image.open(io.BytesIO(figures.figure_bytes(drawn["budget"], "png"))) as image:
        assert image.width == pytest.approx(7.1 * 150, abs=1)
