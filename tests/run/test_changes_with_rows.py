"""What moves a row moves its coefficients, that on the corrected dynamic pressure among them, in proportion."""

import math
import runpy
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from wakeledger.run.chain.outputs import OUTPUTS, coefficient_of, corrected_coefficient_of
from wakeledger.run.load import load
from wakeledger.run.prepared import prepare
from wakeledger.run.uncertainty.changes import changes_with, with_induced_drag
from wakeledger.run.uncertainty.numerics import _pair_term
from wakeledger.synthetic import RectangularDuct

VALUES = {
    "induced_drag": 2.0,
    "induced_drag_free_air": 2.5,
    "total_drag": 5.0,
    "residual_drag": 0.0,
    "residual_drag coefficient": 0.0,
    "total_drag coefficient": 0.05,
    "total_drag corrected coefficient": 0.04,
    "span_efficiency": 0.9,
    "lift": math.nan,
    "lift coefficient": math.nan,
}


def test_coefficients_follow_their_rows():
    found = changes_with({"total_drag": -0.5, "residual_drag": 0.1, "lift": 1.0}, VALUES, tuple(VALUES))
    moved = dict(zip(VALUES, found, strict=True))
    assert moved["total_drag"] == -0.5
    assert moved["total_drag coefficient"] == pytest.approx(-0.005, rel=1e-12)
    assert moved["total_drag corrected coefficient"] == pytest.approx(-0.004, rel=1e-12)
    # A row of zero does not tell its coefficient's scale; one without a value is in no doubt.
    assert math.isnan(moved["residual_drag coefficient"])
    assert moved["lift"] == moved["lift coefficient"] == moved["induced_drag"] == 0.0


def test_the_efficiency_goes_against_the_induced_drag_of_free_air():
    moved = with_induced_drag(0.1, VALUES)
    assert moved["induced_drag"] == moved["induced_drag_free_air"] == moved["total_drag"] == 0.1
    assert moved["span_efficiency"] == pytest.approx(-0.9 * 0.1 / 2.5, rel=1e-12)
    assert with_induced_drag(0.1, VALUES | {"induced_drag_free_air": math.nan})["span_efficiency"] == pytest.approx(
        -0.9 * 0.1 / 2.0, rel=1e-12
    )


def test_between_walls_the_doubt_of_the_residual_is_in_the_corrected_total(kit, tmp_path):
    tunnel = SimpleNamespace(**runpy.run_path(str(Path(__file__).with_name("tunnel_kit.py"))))
    duct = RectangularDuct((-0.8, 0.8), (-0.48, 0.56))
    y, z = tunnel.points((-0.72, 0.72), (-0.28, 0.36))
    content = tunnel.description(kit, tunnel.table(duct), plane={"station": "0.4 m"})
    prepared = prepare(load(kit.write(tmp_path, tunnel.columns(tunnel.wing(duct).state(y, z), y, z), content)))
    nominal = prepared.nominal
    moved = dict(zip(OUTPUTS, _pair_term(prepared.chain, nominal).standard_uncertainty, strict=True))
    assert moved["total_drag"] > 0
    for name in (coefficient_of("total_drag"), corrected_coefficient_of("total_drag")):
        assert np.isfinite(nominal.values[name])
        expected = moved["total_drag"] * nominal.values[name] / nominal.values["total_drag"]
        assert moved[name] == pytest.approx(expected, rel=1e-12)
