"""The commands: exit status, one line for what is wrong, products whole or not at all."""

import dataclasses
import io
import json
import subprocess
import sys
import types
from pathlib import Path

import pytest

from wakeledger.cli import exits, screen, wakeledger
from wakeledger.core.errors import SurveyError
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.ledger.inspection import Inspection
from wakeledger.ledger.tabular import json_text, ledger_json
from wakeledger.present.products import OF_LEDGER


@pytest.fixture
def cli(capfd):
    def call(*arguments):
        status = exits.run(wakeledger, [str(argument) for argument in arguments])
        out, err = capfd.readouterr()
        return status, out, err

    return call


@pytest.fixture
def survey_room(monkeypatch, ledger):
    """A stand-in for the reduction that hands back the invented ledger and remembers what it was asked."""
    import wakeledger.run as wakeledger_run
    from wakeledger.present import report

    room = types.ModuleType("wakeledger.run.survey")
    room.ledger, room.calls = ledger, []

    def load(path):
        if not Path(path).is_file():
            raise SurveyError("the file does not exist", file=path, remedy="check the path")
        return path

    def reduce(survey, *, draws=None, progress=None, command=""):
        room.calls.append((survey, draws, progress, command))
        if isinstance(room.ledger, BaseException):
            raise room.ledger
        return room.ledger

    def inspect(survey):
        return Inspection("a title", str(survey), 4, "tensor grid", (2, 2), (0.1, 0.1), (0, 1, 0, 1), 1.0)

    room.load, room.reduce, room.inspect = load, reduce, inspect
    monkeypatch.setitem(sys.modules, "wakeledger.run.survey", room)
    monkeypatch.setattr(wakeledger_run, "survey", room, raising=False)
    monkeypatch.setattr(report, "report_html", lambda *_: "<!DOCTYPE html>")
    return room


@pytest.fixture
def survey(tmp_path):
    path = tmp_path / "clean wing.toml"
    path.write_text("title = 'x'")
    return path


@pytest.fixture
def passing(ledger):
    return dataclasses.replace(ledger, checks=tuple(check for check in ledger.checks if check.verdict != "fail"))


@pytest.fixture(scope="module")
def archive(ledger, tmp_path_factory):
    path = tmp_path_factory.mktemp("archive") / "ledger.nc"
    write_archive(ledger, path)
    return path


def one_line(err):
    return err.startswith("wakeledger: ") and err.count("\n") == 1 and "Traceback" not in err


def test_reduce_writes_the_products_and_prints_the_ledger(cli, survey_room, survey, passing):
    survey_room.ledger = passing
    status, out, err = cli("reduce", survey)
    assert (status, err) == (0, "")
    folder = survey.parent / "clean wing-ledger"
    assert {path.name for path in folder.iterdir()} == set(OF_LEDGER.files)
    assert "induced drag" in out and "WARN  edge vorticity" in out
    assert f"Written to {folder}: ledger.nc, ledger.json, ledger.csv, report.html" in out
    assert json.loads((folder / "ledger.json").read_text("utf-8")) == ledger_json(passing)
    (path, draws, progress, command) = survey_room.calls[0]
    assert (path, draws, progress) == (survey, None, None)
    assert command == f"wakeledger reduce '{survey}'"


def test_a_failed_check_is_status_1_with_the_products_written(cli, survey_room, survey):
    status, out, err = cli("reduce", survey)
    assert (status, err) == (1, "")
    assert "FAIL  core resolution" in out
    assert open_archive(survey.parent / "clean wing-ledger" / "ledger.nc").failed


def test_a_quiet_reduction_still_says_which_checks_fail(cli, survey_room, survey):
    status, out, err = cli("reduce", survey, "--quiet")
    assert (status, out) == (1, "")
    assert one_line(err)
    assert "clean wing-ledger" in err
    assert err.rstrip().endswith("core_resolution")


def test_options_reach_the_reduction(cli, survey_room, survey, passing, monkeypatch):
    from wakeledger.present.figures import gallery

    monkeypatch.setattr(gallery, "OF_LEDGER", {"budget": gallery.OF_LEDGER["budget"]})
    monkeypatch.setattr(gallery, "OF_PLANE", {})
    survey_room.ledger = passing
    out_folder = survey.parent / "a" / "b"
    status, out, err = cli("reduce", survey, "--out", out_folder, "--draws", 150, "--figures", "svg, PNG", "--quiet")
    assert (status, out, err) == (0, "", "")
    assert survey_room.calls[0][1] == 150
    assert {path.name for path in (out_folder / "figures").iterdir()} == {"budget.svg", "budget.png"}


def test_an_existing_product_is_kept_unless_told(cli, survey_room, survey):
    folder = survey.parent / "out"
    folder.mkdir()
    (folder / "ledger.csv").write_text("mine")
    status, out, err = cli("reduce", survey, "--out", folder)
    assert status == 2 and one_line(err) and out == ""
    assert "ledger.csv exist already and nothing was changed" in err and "--overwrite" in err
    assert [path.name for path in folder.iterdir()] == ["ledger.csv"]
    assert survey_room.calls == []  # nothing was computed only to be refused
    assert cli("reduce", survey, "--out", folder, "--overwrite")[0] == 1
    assert (folder / "ledger.csv").read_text().startswith("name,value")


def test_wrong_input_is_one_line_and_status_2(cli, survey_room, survey, tmp_path):
    before = sorted(tmp_path.rglob("*"))
    for arguments, message in (
        (("reduce", tmp_path / "none.toml"), "the file does not exist; check the path"),
        (("reduce", "."), "the file does not exist"),
        (("reduce", survey, "--figures", "gif"), "'gif' is not a format of figures; allowed: pdf, png, svg"),
        (("reduce", survey, "--draws", "many"), "'many' is not a valid integer range"),
        (("reduce", survey, "--draws", "-1"), "-1 is not in the range"),
        (("reduce", survey, "--out", survey), "the output folder is a file"),
        (("reduce",), "Missing argument"),
        (("reduce", survey, "--oot", "x"), "No such option"),
        (("redcue", survey), "No such command 'redcue'"),
        (("inspect", tmp_path / "none.toml"), "the file does not exist"),
        (("show", tmp_path / "none.nc"), "the archive does not exist"),
        (("show", survey), "not netCDF"),
    ):
        status, out, err = cli(*arguments)
        assert status == 2, arguments
        assert one_line(err), err
        assert message in err
        assert out == ""
    survey_room.ledger = SurveyError(
        "speed has no unit", file="s.toml", place="reference.speed", remedy="write '42 m/s'"
    )
    status, out, err = cli("reduce", survey)
    assert (status, out) == (2, "")
    assert err == "wakeledger: s.toml, reference.speed: speed has no unit; write '42 m/s'\n"
    assert sorted(tmp_path.rglob("*")) == before


def test_a_failure_of_the_program_is_status_3_with_a_log(cli, survey_room, survey, tmp_path, monkeypatch):
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path / "logs"))
    (tmp_path / "logs").mkdir()
    survey_room.ledger = ZeroDivisionError("a fault")
    status, out, err = cli("reduce", survey)
    assert status == 3 and one_line(err) and out == ""
    (log,) = (tmp_path / "logs").iterdir()
    assert str(log) in err
    text = log.read_text("utf-8")
    assert "ZeroDivisionError: a fault" in text and "Traceback" in text
    assert f"command: wakeledger reduce '{survey}'" in text
    assert not (survey.parent / "clean wing-ledger").exists()


def test_an_interruption_writes_nothing(cli, survey_room, survey):
    survey_room.ledger = KeyboardInterrupt()
    status, _, err = cli("reduce", survey)
    assert status == 130
    assert "interrupted; nothing was written" in err
    assert not (survey.parent / "clean wing-ledger").exists()


def test_show_json_is_exactly_the_product(cli, archive, ledger):
    status, out, err = cli("show", archive, "--json")
    assert (status, err) == (1, "")
    assert out == json_text(ledger_json(ledger))
    status, out, _ = cli("show", archive)
    assert status == 1
    assert "profile drag" in out and "\x1b" not in out


def test_inspect(cli, survey_room, survey):
    status, out, err = cli("inspect", survey)
    assert (status, err) == (0, "")
    assert "4, tensor grid" in out
    status, out, _ = cli("inspect", survey, "--json")
    assert json.loads(out)["points"] == 4


def test_help_lists_the_commands_that_exist(cli):
    status, out, _ = cli("--help")
    assert status == 0
    commands = out[out.index("Commands:") :].splitlines()[1:]
    assert [line.split()[0] for line in commands if line.strip()] == [
        "calibrate",
        "grids",
        "increment",
        "inspect",
        "plan",
        "reduce",
        "repeats",
        "show",
    ]
    for command in ("reduce", "inspect", "show", "increment", "repeats", "grids"):
        status, out, _ = cli(command, "-h")
        assert status == 0 and "Usage: wakeledger" in out
    assert cli()[0] == 2
    assert cli("--version")[1].startswith("wakeledger ")


def test_starting_up_loads_nothing_heavy():
    script = (
        "import sys; from wakeledger.cli import wakeledger\n"
        "heavy = {'numpy', 'scipy', 'xarray', 'pandas', 'matplotlib', 'rich', 'pydantic', 'pint', 'netCDF4',"
        " 'pyvista', 'vtkmodules', 'h5py'}\n"
        "print(sorted(heavy & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_a_closed_pipe_is_no_error(archive):
    script = f"{sys.executable} -c 'from wakeledger.cli import main; main()' show '{archive}' --json | head -n 1"
    done = subprocess.run(["bash", "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.startswith("{")
    assert done.stderr == ""


@pytest.mark.parametrize(
    ("encoding", "expected"), [("utf-8", True), ("UTF-8", True), ("ascii", False), ("cp1252", False)]
)
def test_signs_beyond_ascii_are_for_utf_8(monkeypatch, encoding, expected):
    monkeypatch.setattr(sys, "stdout", io.TextIOWrapper(io.BytesIO(), encoding=encoding))
    assert screen.unicode() is expected


def test_an_encoding_without_the_signs_is_no_error(archive):
    command = [sys.executable, "-c", "from wakeledger.cli import main; main()", "show", str(archive)]
    done = subprocess.run(command, capture_output=True, env={"PYTHONIOENCODING": "ascii"}, check=False)
    assert done.returncode == 1 and done.stderr == b""
    assert b"induced drag" in done.stdout


def _in_terminal(arguments, **environment):
    """Run in a pseudo-terminal of 90 columns; what it showed."""
    import os
    import pty

    reader, writer = pty.openpty()
    base = {name: value for name, value in os.environ.items() if name not in ("NO_COLOR", "COLUMNS")}
    env = base | {"TERM": "xterm", "COLUMNS": "90"} | environment
    command = [sys.executable, "-c", "from wakeledger.cli import main; main()", *map(str, arguments)]
    process = subprocess.Popen(command, stdout=writer, stderr=writer, env=env)
    os.close(writer)
    shown = b""
    while True:
        try:
            part = os.read(reader, 65536)
        except OSError:
            break
        if not part:
            break
        shown += part
    process.wait()
    os.close(reader)
    return shown.decode("utf-8")


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
def test_colour_in_a_terminal_unless_no_color(archive):
    assert "\x1b[" in _in_terminal(["show", archive])
    plain = _in_terminal(["show", archive], NO_COLOR="1")
    assert "\x1b[" not in plain
    assert max(map(len, plain.splitlines())) <= 90
    assert "\x1b[" not in _in_terminal(["show", archive], TERM="dumb")


def test_progress_is_shown_in_a_terminal_only(monkeypatch, capfd):
    from wakeledger.cli.screen import progress_bar

    with progress_bar("Monte Carlo", quiet=False) as progress:
        assert progress is None
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    with progress_bar("Monte Carlo", quiet=True) as progress:
        assert progress is None
    with progress_bar("Monte Carlo", quiet=False) as progress:
        for done in (10, 55, 100):
            progress(done, 100)
    out, err = capfd.readouterr()
    assert out == ""
    assert "Monte Carlo" in err and "100%" in err
