"""``wakeledger calibrate``: products whole or not at all, bad points named, one line for what is wrong."""

import hashlib

import numpy as np
import pytest
import xarray as xr

from wakeledger.cli import exits, wakeledger
from wakeledger.intake.probe.stored import read_calibration
from wakeledger.present.calibration_text import calibration_text
from wakeledger.present.figures.calibration import calibration_figure
from wakeledger.run.traverse.calibrate import load_calibration

Q = 600.0


@pytest.fixture
def cli(capfd):
    def call(*arguments):
        status = exits.run(wakeledger, [str(argument) for argument in arguments])
        out, err = capfd.readouterr()
        return status, out, err

    return call


def write_probe(folder, *, spoil=()):
    """A five-hole sphere, Cp = 1 - (9/4) sin^2(theta), holes 45 degrees off axis, on a grid of +-30 degrees."""
    side = np.radians(np.arange(-30.0, 30.1, 6.0))
    pitch, yaw = (np.ravel(part) for part in np.meshgrid(side, side))
    direction = np.stack([np.cos(yaw) * np.cos(pitch), np.sin(yaw), np.cos(yaw) * np.sin(pitch)])
    s = np.sqrt(0.5)
    normals = np.array([[-1, 0, 0], [-s, -s, 0], [-s, s, 0], [-s, 0, -s], [-s, 0, s]])
    holes = 100.0 + Q * (1.0 - 2.25 * (1.0 - (normals @ direction) ** 2))
    holes += np.random.default_rng(1).normal(0.0, 0.001 * Q, holes.shape)
    for hole, point, change in spoil:
        holes[hole, point] += change * Q
    lines = ["pitch;yaw;p1;p2;p3;p4;p5;pt;ps"]
    columns = [np.degrees(pitch), np.degrees(yaw), *holes, np.full(pitch.size, 100.0 + Q), np.full(pitch.size, 100.0)]
    lines += [";".join(f"{value:.6f}" for value in row) for row in zip(*columns, strict=True)]
    (folder / "table.csv").write_text("\n".join(lines) + "\n")
    text = 'title = "Probe 17, sphere"\nholes = 5\n[data]\nfile = "table.csv"\n[data.columns]\n'
    text += "".join(f'{name} = {{ column = "{name}", unit = "deg" }}\n' for name in ("pitch", "yaw"))
    text += "".join(f'p{k} = {{ column = "p{k}", unit = "Pa" }}\n' for k in range(1, 6))
    text += 'total_pressure = { column = "pt", unit = "Pa" }\nstatic_pressure = { column = "ps", unit = "Pa" }\n'
    (folder / "probe.toml").write_text(text)
    return folder / "probe.toml"


def test_calibration_file_and_figure_are_written(cli, tmp_path):
    probe = write_probe(tmp_path, spoil=[(2, 40, 0.05)])
    status, out, err = cli("calibrate", probe)
    assert (status, err) == (exits.DONE, "")
    assert "Five-hole probe, 121 points, 120 used; pitch -30 to 30 deg, yaw -30 to 30 deg." in out
    assert "Bad point, line 42 (pitch 12.0 deg, yaw -12.0 deg): p3 lies +0.0" in out
    assert "Written to" in out
    assert (tmp_path / "probe.svg").read_text().startswith("<?xml")
    stored = read_calibration(tmp_path / "probe.nc")
    assert stored.text == probe.read_text()
    assert stored.inputs == {
        name: hashlib.sha256((tmp_path / name).read_bytes()).hexdigest() for name in ("probe.toml", "table.csv")
    }
    assert stored.provenance["command"].startswith("wakeledger calibrate")
    with xr.open_dataset(tmp_path / "probe.nc") as product:
        assert product.attrs["Conventions"].startswith("CF-1")
        assert product.attrs["title"] == "Probe 17, sphere"
        assert product["left_out_pitch"].attrs["units"] == "rad"
        assert int(product["bad"].sum()) == 1
    # The stored file and the probe file it came from reduce readings to the same digits.
    totals = [load_calibration(path).read(stored.table.holes).total for path in (probe, tmp_path / "probe.nc")]
    assert np.array_equal(*totals)


def test_existing_products_are_kept_unless_told(cli, tmp_path):
    probe = write_probe(tmp_path)
    out = tmp_path / "elsewhere.nc"
    out.write_text("precious")
    status, printed, err = cli("calibrate", probe, "--out", out)
    assert (status, printed) == (exits.INPUT_WRONG, "")
    assert "elsewhere.nc exist already and nothing was changed" in err
    assert out.read_text() == "precious"
    status, printed, _ = cli("calibrate", probe, "--out", out, "--overwrite", "--quiet")
    assert (status, printed) == (exits.DONE, "")
    assert read_calibration(out).holes == 5


def test_many_bad_points_fail_the_command(cli, tmp_path):
    rng = np.random.default_rng(3)
    spoil = [(int(rng.integers(5)), int(point), 0.06) for point in rng.choice(121, 8, replace=False)]
    status, out, _ = cli("calibrate", write_probe(tmp_path, spoil=spoil))
    assert status == exits.CHECK_FAILED
    assert out.count("Bad point") == 8


def test_wrong_input_is_one_line_and_nothing_is_written(cli, tmp_path):
    probe = write_probe(tmp_path)
    lines = (tmp_path / "table.csv").read_text().splitlines()
    lines[4] = lines[4].replace("100.000000", "800.000000", 1)
    (tmp_path / "table.csv").write_text("\n".join(lines))
    status, out, err = cli("calibrate", probe)
    assert (status, out) == (exits.INPUT_WRONG, "")
    assert err.count("\n") == 1
    assert "line 5: the total pressure is not above the static pressure" in err
    assert not (tmp_path / "probe.nc").exists()
    assert not (tmp_path / "probe.svg").exists()
    status, _, err = cli("calibrate", tmp_path / "none.toml")
    assert status == exits.INPUT_WRONG
    assert "does not exist" in err
    status, _, err = cli("calibrate", probe, "--out", tmp_path)
    assert (status, "this is a directory" in err) == (exits.INPUT_WRONG, True)
    status, _, err = cli("calibrate", write_probe(tmp_path), "--out", tmp_path / "table.csv" / "such.nc")
    assert status == exits.INPUT_WRONG
    assert err.count("\n") == 1
    assert "is a file" in err


def test_calibration_and_figure_appear_together_or_not_at_all(cli, tmp_path, monkeypatch):
    probe = write_probe(tmp_path)
    before = sorted(tmp_path.rglob("*"))

    def full(*_):
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr("wakeledger.present.figures.canvas.figure_bytes", full)
        status, out, err = cli("calibrate", probe, "--out", tmp_path / "new" / "probe.nc")
    assert (status, out) == (exits.INPUT_WRONG, "")
    assert "No space left on device" in err
    assert str(tmp_path / "new") in err
    assert sorted(tmp_path.rglob("*")) == before
    assert cli("calibrate", probe, "--out", tmp_path / "new" / "probe.nc")[0] == exits.DONE
    assert {path.name for path in (tmp_path / "new").iterdir()} == {"probe.nc", "probe.svg"}


def test_figure_shows_grid_range_and_errors(tmp_path):
    calibration = load_calibration(write_probe(tmp_path, spoil=[(0, 60, 0.05)]))
    figure = calibration_figure(calibration)
    titles = [axes.get_title(loc="left") for axes in figure.axes]
    assert "Coefficient grid" in titles
    assert "Calibrated range" in titles
    grid = figure.axes[0]
    # 11 lines of constant pitch and 11 of constant yaw, the points, and the cross of the one that is not used.
    assert len(grid.lines) == 24
    assert (grid.get_xlabel(), grid.get_ylabel()) == ("C_yaw", "C_pitch")
    text = calibration_text(calibration, width=60)
    assert all(len(line) <= 100 for line in text.splitlines())
    assert "static pressure" in text
