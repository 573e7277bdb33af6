"""The map of a survey in characters: the right way round, nothing lost, readable without colour and without Unicode."""

import dataclasses
import re

import numpy as np
import pytest

from wakeledger.ledger.plane_map import SYMBOLS, PlaneMap, plane_map
from wakeledger.present.map_text import MAP_WIDTH, map_lines, plain
from wakeledger.present.terminal import inspection_text

NZ, NY = 60, 150


def chart(shape=(NZ, NY), y=(-0.75, 0.75), z=(-0.3, 0.3), **places):
    """A map with single places (iz, iy) by what they are; iz counts upwards, iy to starboard."""
    fields = {name: np.zeros(shape, dtype=bool) for name in ("wake", "missing", "flagged", "repeated", "uncovered")}
    for name, chosen in places.items():
        for place in chosen:
            fields[name][place] = True
    return plane_map(**fields, y=y, z=z)


def text(lines):
    return [line.plain for line in lines]


def test_places_are_seen_from_behind():
    """The uppermost row first, port to the left."""
    found = chart(missing=[(NZ - 1, 0)], flagged=[(0, NY - 1)], repeated=[(NZ - 1, NY - 1)], uncovered=[(0, 0)])
    assert found.rows[0][0] == "o" and found.rows[-1][-1] == "!"
    assert found.rows[0][-1] == "=" and found.rows[-1][0] == " "
    assert len(found.rows) == NZ and {len(row) for row in found.rows} == {NY}


def test_what_matters_most_is_shown():
    place = (3, 4)
    assert chart(wake=[place]).rows[-4][4] == "#"
    assert chart(wake=[place], repeated=[place]).rows[-4][4] == "="
    assert chart(repeated=[place], missing=[place]).rows[-4][4] == "o"
    assert chart(missing=[place], flagged=[place]).rows[-4][4] == "!"


@pytest.mark.parametrize("columns", [20, 51, 68])
def test_a_drawn_map_keeps_every_lost_place(columns):
    generator = np.random.default_rng(4)
    lost = [(int(iz), int(iy)) for iz, iy in generator.integers(0, (NZ, NY), size=(9, 2))]
    drawn = chart(missing=lost).drawn(columns)
    nz, ny = len(drawn.rows), len(drawn.rows[0])
    assert ny == columns
    # A character is twice as tall as wide: 0.6 m over 1.5 m.
    assert nz == pytest.approx(columns * 0.6 / 1.5 / 2, abs=1)
    seen = {(nz - 1 - k, i) for k, row in enumerate(drawn.rows) for i, symbol in enumerate(row) if symbol == "o"}
    assert len(seen) <= len(lost)
    for iz, iy in lost:
        # Within one character of where it belongs.
        assert any(abs(k - iz * nz / NZ) <= 1.5 and abs(i - iy * ny / NY) <= 1.5 for k, i in seen)


def test_a_drawn_map_shows_what_is_more_of_wake_and_outer_flow():
    wake = [(iz, iy) for iz in range(20, 40) for iy in range(30, 120)]
    drawn = chart(wake=wake).drawn(68)
    share = sum(row.count("#") for row in drawn.rows) / (len(drawn.rows) * 68)
    # 1800 of 9000 places; the outline is rounded to half a character.
    assert share == pytest.approx(0.2, rel=0.15)


def test_tall_and_flat_maps_stay_small():
    tall = chart(shape=(400, 40), y=(-0.1, 0.1), z=(-1.0, 1.0)).drawn(68)
    assert 30 <= len(tall.rows) <= 40 and len(tall.rows[0]) < 20
    flat = chart(shape=(40, 400), y=(-1.0, 1.0), z=(-0.02, 0.02)).drawn(68)
    assert len(flat.rows) == 5 and len(flat.rows[0]) == 68
    few = chart(shape=(5, 5), y=(-0.1, 0.1), z=(-0.1, 0.1)).drawn(68)
    assert len(few.rows) == 5 and len(few.rows[0]) == 5


@pytest.mark.parametrize("width", [60, 78, 140])
@pytest.mark.parametrize("unicode", [True, False])
def test_lines_of_a_map(width, unicode):
    lines = text(map_lines(chart(missing=[(10, 20)], repeated=[(5, 5)]), width=width, unicode=unicode))
    assert all(len(part) <= min(width, MAP_WIDTH) for line in lines for part in line.splitlines())
    whole = "\n".join(lines)
    assert whole.isascii() is not unicode
    assert lines[1].startswith("    0.3 ") and lines[-4].startswith("   -0.3 ")
    assert re.search(r"^ +-0\.75 +y, m +0\.75$", lines[-2])
    legend = lines[-1]
    assert "measured" in legend and "missing" in legend and "averaged repeats" in legend
    assert "flagged" not in legend and "wake" not in legend


def test_a_line_traverse_is_one_line():
    found = chart(
        shape=(1, 121), y=(0.0, 0.0), z=(-0.25, 0.25), wake=[(0, k) for k in range(50, 70)], missing=[(0, 60)]
    )
    lines = text(map_lines(found, unicode=False))
    row = lines[0]
    assert row.count("o") == 1 and "..##" in row and row.endswith("|")
    assert re.search(r"-0\.25 +z, m +0\.25$", lines[1])


def test_symbols_differ_without_colour():
    assert len(set(SYMBOLS)) == 6
    assert "".join(SYMBOLS).isascii()


def test_plain_words():
    assert plain("9 × 9, 1 … 2 m², ± – ─ run 1 · x") == "9 x 9, 1 ... 2 m2, +- - - run 1 | x"


@pytest.mark.parametrize("width", [60, 80, 140])
def test_a_whole_inspection_in_ascii(inspection, width):
    found = inspection_text(dataclasses.replace(inspection, title="Clean wing"), width=width, unicode=False)
    assert found.isascii()
    assert max(map(len, found.splitlines())) <= width
    assert "Map of the points, seen from behind" in found and "o missing" in found


def test_colour_adds_only_colour_to_an_inspection(inspection):
    coloured = inspection_text(inspection, colour=True)
    bare = re.sub(r"\x1b\[[0-9;]*m", "", coloured)
    assert bare != coloured
    assert [line.rstrip() for line in bare.splitlines()] == inspection_text(inspection).splitlines()


def test_a_map_of_no_window_is_no_map(inspection):
    found = inspection_text(dataclasses.replace(inspection, map=None, angles=(), edges=(), channels=()))
    assert "Map" not in found and "Flow angles" not in found and "Edges" not in found
    assert isinstance(inspection.map, PlaneMap)
