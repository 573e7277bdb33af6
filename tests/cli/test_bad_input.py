"""Careless input, through the command line: one line that says where and what to do, and nothing half written."""

import errno
import json
import os
import re
import shutil
from pathlib import Path
from stat import S_ISDIR
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from wakeledger.cli import exits, wakeledger
from wakeledger.present.products import OF_LEDGER

SAMPLE = Path(__file__).resolve().parents[2] / "sample_surveys" / "wing_and_tail"
SURVEY = (SAMPLE / "survey.toml").read_text("utf-8").replace("draws = 300", "draws = 100")
HEADER = "Y,Z,U,V,W,pt,ps"
SPEED, DENSITY = 42.0, 1.185
WITHOUT_SOURCES = SURVEY[: SURVEY.index("[[uncertainty.source]]")]


def table(y, z, vortices=((0.3, 0.0, 2.0), (-0.3, 0.0, -2.0)), *, noise=0.15, seed=1):
    """Lines of a table: Gaussian vortices (y, z, circulation) of core length 60 mm with a loss in each core."""
    rng = np.random.default_rng(seed)
    v, w, loss = np.zeros_like(y), np.zeros_like(y), np.zeros_like(y)
    for y0, z0, circulation in vortices:
        square = (y - y0) ** 2 + (z - z0) ** 2 + 1e-12
        swirl = circulation / (2 * np.pi) * (1 - np.exp(-square / 0.06**2)) / square
        v, w, loss = v - swirl * (z - z0), w + swirl * (y - y0), loss + 40 * np.exp(-square / 0.06**2)
    v, w, loss = v + rng.normal(0, noise, y.shape), w + rng.normal(0, noise, y.shape), loss
    static = -0.5 * DENSITY * (v**2 + w**2)
    total = rng.normal(0, 10 * noise, y.shape) - loss
    u = np.sqrt(SPEED**2 + 2 * (total - static) / DENSITY - v**2 - w**2)
    columns = np.stack([1e3 * y, 1e3 * z, u, v, w, total, static], axis=-1).reshape(-1, 7)
    return [",".join(f"{value:.5f}" for value in row) for row in columns]


def lattice(ny=25, nz=17):
    return np.meshgrid(np.linspace(-0.72, 0.72, ny), np.linspace(-0.48, 0.48, nz))


ROWS = table(*lattice())


def replaced(rows, at, column, value):
    cells = rows[at].split(",")
    cells[column] = value
    return [*rows[:at], ",".join(cells), *rows[at + 1 :]]


def every(column, value):
    return [",".join(value if k == column else cell for k, cell in enumerate(row.split(","))) for row in ROWS]


def emptied(rows, empty):
    """Rows whose measurements are left out where `empty` says so."""
    return [",".join(row.split(",")[:2] + [""] * 5) if empty(k) else row for k, row in enumerate(rows)]


def without(start):
    """The survey file without the first line that starts so."""
    lines = SURVEY.splitlines()
    at = next(k for k, line in enumerate(lines) if line.startswith(start))
    return "\n".join(lines[:at] + lines[at + 1 :])


def edited(old, new, text=SURVEY):
    assert old in text
    return text.replace(old, new, 1)


def sources(*entries):
    """The survey file with these sources only: (applies_to, effect, standard uncertainty)."""
    return WITHOUT_SOURCES + "".join(
        f'[[uncertainty.source]]\nname = "{k}"\napplies_to = {json.dumps(names)}\neffect = "{effect}"\n'
        f'standard_uncertainty = "{size}"\n'
        for k, (names, effect, size) in enumerate(entries)
    )


def write(folder, text=SURVEY, rows=ROWS, header=HEADER):
    folder.mkdir(parents=True, exist_ok=True)
    survey = folder / "survey.toml"
    survey.write_bytes(text if isinstance(text, bytes) else text.encode())
    if rows is not None:
        data = rows if isinstance(rows, bytes) else "\n".join([header, *rows, ""]).encode()
        (folder / "traverse.csv").write_bytes(data)
    return survey


def contents(folder):
    """What stands in a folder: size, time and inode of each file by name, None for a folder."""
    found = {str(path.relative_to(folder)): path.lstat() for path in folder.rglob("*")}
    return {
        name: None if S_ISDIR(stat.st_mode) else (stat.st_size, stat.st_mtime_ns, stat.st_ino)
        for name, stat in found.items()
    }


@pytest.fixture
def cli(capfd, tmp_path, monkeypatch):
    """Runs a command; a log of a failed program comes along, so that a test shows the traceback."""
    logs = tmp_path.parent / f"{tmp_path.name}-logs"
    logs.mkdir()
    monkeypatch.setattr("tempfile.tempdir", str(logs))

    def call(*arguments):
        status = exits.run(wakeledger, [str(argument) for argument in arguments])
        out, err = capfd.readouterr()
        assert status != exits.PROGRAM_FAILED, "\n".join(log.read_text("utf-8") for log in logs.glob("*.log"))
        return SimpleNamespace(status=status, out=out, err=err)

    return call


@pytest.fixture
def refused(cli, tmp_path):
    """Runs a command that must refuse its input: status 2, one line with file and remedy, nothing written."""

    def call(*arguments, file="survey.toml"):
        before = contents(tmp_path)
        done = cli(*arguments)
        assert done.status == exits.INPUT_WRONG, done.err
        assert done.out == ""
        assert done.err.startswith("wakeledger: ") and done.err.count("\n") == 1 and "Traceback" not in done.err
        assert file in done.err and ";" in done.err
        assert contents(tmp_path) == before
        return done.err

    return call


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """A finished reduction, its ledger and its folder."""
    from wakeledger.run.survey import load, reduce

    folder = tmp_path_factory.mktemp("finished")
    ledger = reduce(load(write(folder)))
    OF_LEDGER.write(ledger, folder / "survey-ledger")
    return SimpleNamespace(folder=folder, ledger=ledger, archive=folder / "survey-ledger" / "ledger.nc")


@pytest.fixture
def quick(monkeypatch, finished):
    """The reduction replaced by its finished ledger, the report by a word: what is left is the writing."""
    import wakeledger.run.survey as room
    from wakeledger.present import report

    monkeypatch.setattr(room, "reduce", lambda *_, **__: finished.ledger)
    monkeypatch.setattr(report, "report_html", lambda *_: "<!DOCTYPE html>")
    return finished


SURVEY_FILES = [
    (without("speed"), "[reference]", "nothing gives the stream's speed", "give one of speed"),
    (without("density"), "[reference]", "cannot give the density", "give density"),
    (without("reference_area"), "[model]", "'reference_area' is missing", "add reference_area"),
    (without("file"), "[plane]", "'file' is missing", 'add file = "traverse.csv"'),
    (without("station"), "[plane]", "'station' is missing", "add station"),
    (without("primary"), "[plane]", "'primary' is missing", "add primary"),
    (without("kind"), "[boundary]", "'kind' is missing", "free_air"),
    (without("y = {"), "[plane.columns]", "position 'y' is missing", "two positions"),
    (without("u = {"), "applies_to item 1", "'plane.u' is nothing this survey gives", "give u in [plane.columns]"),
    (without("effect"), "[[uncertainty.source]] 1 (velocity noise)", "'effect' is missing", "per_row"),
    (
        without("standard_uncertainty"),
        "[[uncertainty.source]] 1 (velocity noise)",
        "'standard_uncertainty' is missing",
        "'0.1 m/s'",
    ),
    (without("value"), "[[compare]] 1 (balance drag)", "'value' is missing", "11.32 N"),
    (edited("speed =", "sped ="), "[reference] sped", "unknown key 'sped'", "did you mean 'speed'"),
    (edited("[reference]", "[referenz]"), "[referenz]", "unknown key", "did you mean 'reference'"),
    (edited('"42.0 m/s"', "42.0"), "[reference] speed", "the bare number 42.0", "with its unit"),
    (edited('"42.0 m/s"', '"42.0"'), "[reference] speed", "has no unit", "42.0 m/s"),
    (edited('"42.0 m/s"', '"42,0 m/s"'), "[reference] speed", "cannot be read", "decimal point"),
    (edited('"42.0 m/s"', '"42.0 kg"'), "[reference] speed", "measures a mass", "velocity"),
    (edited('"42.0 m/s"', '"1e400 m/s"'), "[reference] speed", "not a finite number", "42.0 m/s"),
    (edited('"42.0 m/s"', '"-42.0 m/s"'), "[reference] speed", "'-42.0 m/s' is not allowed", "greater than 0"),
    (edited('"1.185 kg/m^3"', '"-1 kg/m^3"'), "[reference] density", "is not allowed", "greater than 0"),
    (edited('"42.0 m/s"', '"42.0 m/s'), "line 11", "this is not TOML", "quotation marks"),
    (edited("speed =", 'speed = "1 m/s"\nspeed ='), "line 12", "this is not TOML", "each key once"),
    (edited('"traverse.csv"', '""'), "[plane] file", "the text is empty", "write some text"),
    (edited('"0.180 m^2"', '"0 m^2"'), "[model] reference_area", "'0 m^2' is not allowed", "greater than 0"),
    (edited('station = "1.50 m"', 'station = "-0.5 m"'), "[plane] station", "not behind", "quarter_chord_x"),
    (edited('unit = "mm"', 'unit = "kg"'), "[plane.columns] y.unit", "measures a mass", "length"),
    (edited('column = "Y", unit = "mm"', 'column = "Y"'), "[plane.columns] y.unit", "'unit' is missing", "SI"),
    (edited('column = "Y"', 'column = "Z"'), "[plane.columns] z", "for y and for z", "once"),
    (edited('relative_to = "total"', 'relative_to = "totl"'), "total_pressure.relative_to", "'totl'", "'total'"),
    (edited('x = "+x"', 'x = "+y"'), "[plane.axes]", "no set of axes", "each of x, y and z"),
    (edited('"free_air"', '"freeair"'), "[boundary] kind", "'freeair'", "did you mean 'free_air'"),
    (edited("draws = 100", "draws = 0"), "[uncertainty] draws", "bare number 0", "at least 100"),
    (edited('"0.17 m/s"', '"0.17 Pa"'), "standard_uncertainty", "does not fit plane.u", "velocity"),
    (edited('"0.17 m/s"', '"-0.17 m/s"'), "standard_uncertainty", "is not allowed", "at least 0"),
    (edited('["plane.u", ', '["plane.q", '), "applies_to item 1", "'plane.q' is nothing", "known here"),
    (edited('["plane.u", ', '["plane.y", '), "applies_to item 1", "'plane.y' is nothing", "'position.y'"),
    (edited('"total_drag"', '"totaldrag"'), "[[compare]] 1 (balance drag) row", "not known", "'total_drag'"),
    (edited('"total_drag"', '"wave_drag"'), "[[compare]] 1 (balance drag) row", "not in this ledger", "it has"),
    (edited("[boundary]", "[wake]\nlevel = 0\n[boundary]"), "[wake] level", "0 is not allowed", "greater than 0"),
    (
        edited("[boundary]", '[wake]\nexclude = [[["-9 m", "-9 m"], ["9 m", "9 m"]]]\n[boundary]'),
        "[wake] exclude",
        "cover the whole window",
        "leave some of it free",
    ),
    (
        edited("[boundary]", '[wake]\nexclude = [[["0 m", "0 m"], ["1 m", "0 m"]]]\n[boundary]'),
        "[wake] exclude item 1",
        "no area",
        "corners",
    ),
    (
        sources((["reference.speed"], "systematic", "100 m/s")),
        "[[uncertainty.source]]",
        "gives no stream (speed is",
        "smaller standard uncertainty",
    ),
    ("", "", "table [reference] is missing", "add [reference]"),
    (b"\x00\x01\xff", "", "not a text file", "not the data file"),
    (SURVEY.encode("utf-16"), "", "UTF-16", "save it as UTF-8"),
    (edited("(sample", "(Flügel,").encode("latin-1"), "line 2", "not UTF-8", "save it as UTF-8"),
    ("\n".join([HEADER, *ROWS]), "line 1", "this is not TOML", "[table]"),
]


@pytest.mark.parametrize(("text", "place", "found", "remedy"), SURVEY_FILES)
def test_a_wrong_survey_file(refused, tmp_path, text, place, found, remedy):
    err = refused("reduce", write(tmp_path, text))
    assert place in err and found in err and remedy in err


JUNK = np.random.default_rng(3).bytes(3000)
DATA_FILES = [
    ([], "", "no data", "one line for each point"),
    (b"", "", "empty", "points of the plane"),
    (ROWS[:1], "", "one usable point", "5 x 5"),
    (ROWS[:25], "", "one row, at z = -0.48 m", "5 x 5"),
    (ROWS[::25], "", "one row, at y = -0.72 m", "5 x 5"),
    (ROWS[:50], "", "2 row(s)", "5 x 5"),
    (replaced(ROWS, 99, 3, "abc"), "line 101, column 'V'", "'abc' is not a number", "leave the cell empty"),
    (replaced(ROWS, 99, 0, ""), "line 101, column 'Y'", "position y is missing", "every point"),
    (replaced(ROWS, 99, 3, "1e999"), "line 101, column 'V'", "infinite", "leave the cell empty"),
    ([*ROWS[:50], ROWS[50][: ROWS[50].rindex(",")], *ROWS[51:]], "line 52", "too short", "commas"),
    ([*ROWS[:50], ROWS[50] + ",1", *ROWS[51:]], "line 52", "too long", "commas"),
    ([row.replace(".", ",") for row in ROWS], "line 2", "too long", "decimal commas"),
    ([*ROWS, replaced(ROWS, 99, 3, "35.0")[99]], "lines 101 and 427", "contradict each other", "delete"),
    (emptied(ROWS, lambda k: True), "", "no value at any point", "right column"),
    (emptied(ROWS, lambda k: k > 0), "", "one usable point", "5 x 5"),
    (every(2, "-40"), "line 2", "runs upstream", "[plane.axes]"),
    (every(5, "-9000"), "line 2", "no real flow state", "relative_to"),
    (["mm,mm,m/s,m/s,m/s,kPa,Pa", *ROWS], "line 2", "unit of 'pt' as 'kPa'", "both say the same"),
    (JUNK, "", "binary data", "delimited text table"),
    (b"\x89PNG\r\n\x1a\n" + JUNK, "", "PNG picture", "delimited text table"),
    (b"\x89HDF\r\n\x1a\n" + JUNK, "", "HDF5 file", "netCDF"),
    (b"CDF\x01" + JUNK, "", "cannot be read", "write the file again"),
    ("\n".join([HEADER, *ROWS]).encode("utf-16"), "", "UTF-16", "UTF-8"),
    ("\n".join(["# Flügel", HEADER, *ROWS]).encode("latin-1"), "line 1", "not text in UTF-8", "UTF-8"),
    ("\n".join(ROWS).encode(), "", "no header line", "columns by number"),
    ("\n".join([HEADER.replace("pt", "ptot"), *ROWS]).encode(), "line 1", "no column 'pt'", "'ptot'"),
    (b"<html>404</html>", "line 1", "no column 'Y'", "file has"),
]


@pytest.mark.parametrize(("rows", "place", "found", "remedy"), DATA_FILES)
def test_a_wrong_data_file(refused, tmp_path, rows, place, found, remedy):
    err = refused("reduce", write(tmp_path, rows=rows), file="traverse.csv")
    assert place in err and found in err and remedy in err


def test_density_that_is_not_positive(refused, tmp_path):
    text = edited("static_pressure = {", 'density = { column = "rho", unit = "kg/m^3" }\nstatic_pressure = {')
    rows = [f"{row},{-1.185 if k == 40 else 1.185}" for k, row in enumerate(ROWS)]
    survey = write(tmp_path, text, rows, f"{HEADER},rho")
    assert "line 42: the density is not positive" in refused("reduce", survey, file="traverse.csv")


def test_a_data_file_that_is_no_file(refused, tmp_path):
    survey = write(tmp_path, rows=None)
    data = tmp_path / "traverse.csv"
    assert "no such file" in refused("reduce", survey, file="traverse.csv")
    data.symlink_to(data)
    assert "cannot be read" in refused("reduce", survey, file="traverse.csv")
    data.unlink()
    data.mkdir()
    assert "directory" in refused("reduce", survey, file="traverse.csv")
    for name, found in (("x" * 300, "too long"), ("a\\u0000b", "null byte"), (".", "directory")):
        survey = write(tmp_path, edited("traverse.csv", name), rows=None)
        assert found in refused("reduce", survey, file=str(tmp_path))


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="needs named pipes")
def test_a_pipe_is_refused_and_not_waited_for(refused, tmp_path):
    survey = write(tmp_path, rows=None)
    os.mkfifo(tmp_path / "traverse.csv")
    assert "no regular file" in refused("reduce", survey, file="traverse.csv")
    survey.unlink()
    os.mkfifo(survey)
    assert "no regular file" in refused("inspect", survey)


def test_what_may_not_be_read(refused, tmp_path, monkeypatch):
    survey, opened, forbidden = write(tmp_path), Path.open, []

    def guarded(self, *arguments, **options):
        if self.name in forbidden:
            raise PermissionError(errno.EACCES, "Permission denied", str(self))
        return opened(self, *arguments, **options)

    monkeypatch.setattr(Path, "open", guarded)
    for name in ("traverse.csv", "survey.toml"):
        forbidden[:] = [name]
        assert "permission" in refused("inspect", survey, file=name)


def test_the_survey_itself(refused, tmp_path):
    write(tmp_path)
    assert "does not exist" in refused("reduce", tmp_path / "none.toml", file="none.toml")
    assert "directory" in refused("reduce", tmp_path, "--out", tmp_path / "out", file=str(tmp_path))
    assert "not TOML" in refused("reduce", tmp_path / "traverse.csv", file="traverse.csv")
    assert "not netCDF" in refused("show", tmp_path / "survey.toml")
    assert "does not exist" in refused("show", tmp_path / "none.nc", file="none.nc")
    assert "directory" in refused("show", tmp_path, file=str(tmp_path))


def test_options(refused, tmp_path):
    survey = write(tmp_path)
    for arguments, found in (
        (("--draws", "0"), "not in the range x>=100"),
        (("--draws", "1"), "not in the range"),
        (("--draws", "-5"), "not in the range"),
        (("--draws", "1e3"), "not a valid integer"),
        (("--figures", "gif"), "allowed: pdf, png, svg"),
        (("--owt", "x"), "No such option"),
        (("another.toml",), "unexpected extra argument"),
    ):
        assert found in refused("reduce", survey, *arguments, file="--help")


def test_an_output_folder_is_judged_before_any_work(refused, tmp_path, monkeypatch):
    monkeypatch.setattr("wakeledger.run.survey.load", pytest.fail)
    survey = write(tmp_path)
    taken, full = tmp_path / "taken", tmp_path / "full"
    taken.write_text("mine")
    full.mkdir()
    (full / "ledger.csv").write_text("mine")
    for out, found in (
        (taken, "is a file"),
        (taken / "below", "is a file"),
        (tmp_path / ("x" * 300), "too long"),
        (full, "ledger.csv exist already and nothing was changed"),
    ):
        assert found in refused("reduce", survey, "--out", out, file=str(out))
    (full / "ledger.csv").unlink()
    (full / "ledger.nc").mkdir()
    assert "is a folder" in refused("reduce", survey, "--out", full, "--overwrite", file=str(full))
    allowed = os.access
    monkeypatch.setattr(os, "access", lambda path, mode: Path(path) != tmp_path and allowed(path, mode))
    assert "not writable" in refused("reduce", survey, "--out", tmp_path / "new" / "deep", file="deep")


def test_a_full_disk_leaves_things_as_they_were(refused, tmp_path, monkeypatch, quick):
    def full(*_arguments, **_options):
        raise OSError(errno.ENOSPC, "No space left on device")

    survey = write(tmp_path)
    shutil.copytree(quick.folder / "survey-ledger", tmp_path / "earlier")
    for name in ("pathlib.Path.write_text", "wakeledger.ledger.encoding.write_group", "pathlib.Path.mkdir"):
        with monkeypatch.context() as patch:
            patch.setattr(name, full)
            assert "No space left" in refused("reduce", survey, "--out", tmp_path / "a" / "b", file="b: the")
    rename = Path.rename
    # Four old files are put aside and four fresh ones in their place; each step fails once.
    for failing in range(1, 9):
        done = []

        def flaky(self, target, failing=failing, done=done):
            done.append(target)
            return full() if len(done) == failing else rename(self, target)

        with monkeypatch.context() as patch:
            patch.setattr(Path, "rename", flaky)
            refused("reduce", survey, "--out", tmp_path / "earlier", "--overwrite", file="earlier: the")


def test_an_interruption_leaves_nothing(cli, tmp_path, monkeypatch, quick):
    from wakeledger.present import report

    def interrupt(*_arguments, **_options):
        raise KeyboardInterrupt

    survey = write(tmp_path)
    before = contents(tmp_path)
    monkeypatch.setattr(report, "report_html", interrupt)
    done = cli("reduce", survey, "--out", tmp_path / "a" / "b")
    assert (done.status, done.out) == (exits.INTERRUPTED, "")
    assert "interrupted" in done.err
    assert contents(tmp_path) == before


def test_an_interruption_in_the_monte_carlo(cli, tmp_path, monkeypatch):
    from wakeledger.run.chain.chain import Chain

    def interrupt(*_arguments, **_options):
        raise KeyboardInterrupt

    survey = write(tmp_path)
    before = contents(tmp_path)
    monkeypatch.setattr(Chain, "vectors", interrupt)
    assert cli("reduce", survey).status == exits.INTERRUPTED
    assert contents(tmp_path) == before


def test_two_runs_into_one_folder(cli, tmp_path, monkeypatch, quick):
    from wakeledger.present import report

    survey, out, inner = write(tmp_path), tmp_path / "out", []

    def meanwhile(ledger, _figures):
        if not inner:
            inner.append(None)
            inner[0] = exits.run(wakeledger, ["reduce", str(survey), "--out", str(out), "--quiet"])
        return f"<!DOCTYPE html> {len(inner)}"

    monkeypatch.setattr(report, "report_html", meanwhile)
    done = cli("reduce", survey, "--out", out)
    assert inner[0] in (exits.DONE, exits.CHECK_FAILED)
    assert done.status == exits.INPUT_WRONG and "exist already" in done.err
    assert {path.name for path in out.iterdir()} == set(OF_LEDGER.files)
    assert {path.name for path in tmp_path.iterdir()} == {"survey.toml", "traverse.csv", "out"}


@pytest.mark.parametrize("kept", [0, 4, 100, 5000, -1])
def test_a_truncated_archive(refused, tmp_path, finished, kept):
    archive = tmp_path / "ledger.nc"
    archive.write_bytes(finished.archive.read_bytes()[:kept])
    for command in ("show", "reduce"):
        assert re.search("damaged|empty", refused(command, archive, file="ledger.nc"))


def damage(finished, folder, change):
    import netCDF4

    archive = folder / "ledger.nc"
    shutil.copy(finished.archive, archive)
    with netCDF4.Dataset(archive, "a") as dataset:
        change(dataset)
    return archive


@pytest.mark.parametrize(
    ("change", "found"),
    [
        (
            lambda d: d.setncattr("survey_text", d.survey_text[:500] + "§" + d.survey_text[600:]),
            "kept inside is damaged",
        ),
        (lambda d: d.setncattr("survey_text", ""), "kept inside is damaged"),
        (lambda d: d.setncattr("survey_text", np.int32(3)), "kept inside is damaged"),
        (lambda d: d.delncattr("survey_text"), "damaged or incomplete"),
        (
            lambda d: d.setncattr(
                "survey_text",
                d.survey_text.replace("ps", "T").replace(
                    "[plane.axes]", 'temperature = { column = "x", unit = "K" }\n[plane.axes]'
                ),
            ),
            "have no temperature",
        ),
        (lambda d: d["raw"].variables["y"].__setitem__(3, np.inf), "positions of the points kept inside are damaged"),
        (lambda d: d.setncattr("wakeledger_format", np.int32(99)), "format 99"),
        (lambda d: d.delncattr("wakeledger_format"), "not a ledger"),
    ],
)
def test_a_damaged_archive(refused, tmp_path, finished, change, found):
    assert found in refused("inspect", damage(finished, tmp_path, change), file="ledger.nc")


def test_an_archive_of_another_program(refused, tmp_path):
    import xarray as xr

    archive = tmp_path / "other.nc"
    xr.Dataset({"u": ("x", [1.0, 2.0])}).to_netcdf(archive)
    for command in ("show", "reduce"):
        assert "not a ledger" in refused(command, archive, file="other.nc")


def nulls_without_a_reason(value):
    """Records of a JSON document with an unknown value and no word on why."""
    if isinstance(value, list):
        return [one for item in value for one in nulls_without_a_reason(item)]
    if not isinstance(value, dict):
        return []
    bare = any(item is None for item in value.values()) and not (value.get("reason") or value.get("message"))
    return [value] * bare + [one for item in value.values() for one in nulls_without_a_reason(item)]


def scattered(number=300, seed=4):
    rng = np.random.default_rng(seed)
    return table(*(rng.uniform(-1, 1, (2, number)) * [[0.72], [0.48]]))


ODD = {
    "five by five": (SURVEY, table(*lattice(5, 5))),
    "no wake": (SURVEY, table(*lattice(), (), noise=0.0)),
    "level beyond everything": (edited("[boundary]", "[wake]\nlevel = 1e9\n[boundary]"), ROWS),
    "wake fills the window": (edited("[boundary]", "[wake]\nlevel = 1e-9\n[boundary]"), ROWS),
    "one vortex, no lengths": (
        re.sub("span = .*|mean_chord = .*", "", without("static_pressure")),
        table(*lattice(), ((0.1, 0.0, 2.0),)),
    ),
    "every other point missing": (SURVEY, emptied(ROWS, lambda k: k % 2)),
    "a core missing": (SURVEY, emptied(ROWS, lambda k: abs(k // 25 - 8) < 2 and abs(k % 25 - 17) < 2)),
    "scattered": (SURVEY, scattered()),
    "errors on everything": (
        sources(
            (["plane.u", "plane.v", "plane.w"], "random", "0.1 m/s"),
            (["plane.total_pressure", "plane.static_pressure"], "per_row", "1 Pa"),
            (["angle.pitch", "angle.yaw", "angle.roll"], "per_row", "0.1 deg"),
            (["angle.pitch"], "random", "0.1 deg"),
            (["position.y", "position.z"], "random", "0.3 mm"),
            (["reference.density", "model.reference_area", "model.span"], "systematic", "0.1 %"),
        ),
        ROWS,
    ),
    "errors of size zero": (sources((["plane.v", "plane.w"], "random", "0 m/s")), ROWS),
    "errors beyond the loss": (sources((["plane.total_pressure"], "random", "2000 Pa")), ROWS),
    "no sources": (WITHOUT_SOURCES[: WITHOUT_SOURCES.index("[uncertainty]")], ROWS),
}


@pytest.fixture
def plain_report(monkeypatch):
    """The report without its figures, which other tests draw."""
    from wakeledger.present import report

    monkeypatch.setattr(report, "report_html", lambda *_: "<!DOCTYPE html>")


@pytest.mark.usefixtures("plain_report")
@pytest.mark.parametrize("name", ODD)
def test_an_odd_survey_is_reduced_or_refused_in_words(cli, tmp_path, name):
    text, rows = ODD[name]
    survey = write(tmp_path, text, rows)
    done = cli("reduce", survey)
    assert done.status in (exits.DONE, exits.CHECK_FAILED)
    assert done.err == ""
    assert not re.search(r"\b(nan|inf|None)\b", done.out), done.out
    found = json.loads((tmp_path / "survey-ledger" / "ledger.json").read_text("utf-8"))
    assert not nulls_without_a_reason([found["rows"], found["estimates"], found["comparisons"], found["checks"]])
    assert cli("show", tmp_path / "survey-ledger" / "ledger.nc").status == done.status


@pytest.mark.usefixtures("plain_report")
@pytest.mark.parametrize("name", ["five by five", "level beyond everything"])
def test_figures_of_an_empty_wake_region_are_not_certain(cli, tmp_path, name):
    """Nothing was found; that is a failed check and an unknown uncertainty, never 0 ± 0."""
    text, rows = ODD[name]
    assert cli("reduce", write(tmp_path, text, rows)).status == exits.CHECK_FAILED
    found = json.loads((tmp_path / "survey-ledger" / "ledger.json").read_text("utf-8"))
    for row in found["rows"]:
        assert row["standard_uncertainty"] is None and "no wake was found" in row["reason"]
    (check,) = (check for check in found["checks"] if check["name"] == "outer_flow")
    assert check["verdict"] == "fail" and "No wake stands out" in check["message"]


def test_an_angle_error_of_each_point_turns_each_point(tmp_path):
    """Axes pitched nose up by t turn the components (u, w) by t; rounding only."""
    from wakeledger.run.survey import load, prepare

    chain = prepare(load(write(tmp_path))).chain
    reference = chain.reference()
    pitch = np.random.default_rng(6).normal(0, 0.01, chain.points.n)
    still, turned = chain.state(reference), chain.state(reference, {"angle.pitch": pitch})
    np.testing.assert_allclose(turned.w, np.cos(pitch) * still.w - np.sin(pitch) * still.u, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(turned.v, still.v, rtol=1e-12)


def test_names_with_blanks_and_umlauts_from_another_folder(cli, tmp_path, monkeypatch, quick):
    folder = tmp_path / "Prüfstand (2) 風洞"
    write(folder, edited("traverse.csv", "Messung 3 ä.csv"), rows=None)
    (folder / "Messung 3 ä.csv").write_text("\n".join([HEADER, *ROWS]), encoding="utf-8")
    (folder / "survey.toml").rename(folder / "Flügel ①.toml")
    monkeypatch.chdir("/")
    done = cli("reduce", folder / "Flügel ①.toml")
    assert done.err == "" and done.status in (exits.DONE, exits.CHECK_FAILED)
    assert {path.name for path in (folder / "Flügel ①-ledger").iterdir()} == set(OF_LEDGER.files)


def mutations():
    lines = st.integers(0, len(SURVEY.splitlines()) - 1)
    values = st.sampled_from(
        [
            '"3 m"',
            "0",
            "-1",
            "1e309",
            "true",
            '""',
            "[]",
            "{}",
            '"-5 Pa"',
            '"nan m/s"',
            '"velocity"',
            '"\\u0000"',
            "1e3",
        ]
    )
    return st.lists(
        st.one_of(
            st.tuples(st.just("drop"), lines, st.none()),
            st.tuples(st.just("swap"), lines, lines),
            st.tuples(st.just("repeat"), lines, lines),
            st.tuples(st.just("value"), lines, values),
            st.tuples(st.just("letter"), lines, st.sampled_from('"=[]{}#.,é\x00 0-')),
        ),
        min_size=1,
        max_size=3,
    )


def mutated(changes):
    lines = SURVEY.splitlines()
    for kind, at, with_ in changes:
        at = min(at, len(lines) - 1)
        if kind == "drop":
            lines[at] = ""
        elif kind == "swap":
            lines[at], lines[with_] = lines[with_], lines[at]
        elif kind == "repeat":
            lines[at] = lines[with_]
        elif kind == "value":
            lines[at] = f"{lines[at].partition('=')[0]}= {with_}"
        else:
            middle = len(lines[at]) // 2
            lines[at] = lines[at][:middle] + with_ + lines[at][middle:]
    return "\n".join(lines)


@settings(
    max_examples=120, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(mutations())
def test_whatever_is_done_to_a_survey_file_it_is_read_or_refused_in_one_line(tmp_path, changes):
    from wakeledger.core.errors import InputError
    from wakeledger.run.load import load

    survey = write(tmp_path, mutated(changes))
    try:
        load(survey)
    except InputError as error:
        assert error.file and error.line.count("\n") == 0
        assert error.remedy or error.place
