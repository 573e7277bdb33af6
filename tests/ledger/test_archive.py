"""The archive gives back what was written, is CF-conforming, and is written whole or not at all."""

import dataclasses
import math
import shutil
import subprocess
import sys
from pathlib import Path
from types import MappingProxyType

import netCDF4
import numpy as np
import pytest
import xarray as xr
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from wakeledger.core.errors import DataError
from wakeledger.core.names import CHECKS, METHODS, ROWS
from wakeledger.core.points import Channel, Points
from wakeledger.ledger.archive import ARCHIVE_FORMAT, FORMAT_ATTRIBUTE, is_archive, open_archive, write_archive
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.rows import CHECK_VERDICTS, BudgetLine, Check, Comparison, CrossCheck, Row
from wakeledger.ledger.tabular import ledger_json


def same(first, second):
    """Equality to the last bit, with NaN equal to NaN, types of records included."""
    if dataclasses.is_dataclass(first):
        return type(first) is type(second) and all(
            same(getattr(first, field.name), getattr(second, field.name)) for field in dataclasses.fields(first)
        )
    if isinstance(first, xr.Dataset):
        return isinstance(second, xr.Dataset) and first.identical(second)
    if isinstance(first, np.ndarray):
        return first.dtype == second.dtype and np.array_equal(first, second, equal_nan=first.dtype.kind == "f")
    if isinstance(first, dict | MappingProxyType):
        return list(first) == list(second) and all(same(first[key], second[key]) for key in first)
    if isinstance(first, tuple):
        return len(first) == len(second) and all(map(same, first, second))
    return first == second or (isinstance(first, float) and math.isnan(first) and math.isnan(second))


@pytest.fixture(scope="module")
def archive(ledger, tmp_path_factory):
    path = tmp_path_factory.mktemp("archive") / "ledger.nc"
    write_archive(ledger, path)
    return path


def test_round_trip_is_the_identity(ledger, archive):
    returned = open_archive(archive)
    for field in dataclasses.fields(Ledger):
        assert same(getattr(ledger, field.name), getattr(returned, field.name)), field.name
    assert ledger_json(returned) == ledger_json(ledger)


#: Both archives twice at a time, the first two closed in between: with variable-length strings the library crashed.
REOPENED = """
import sys, netCDF4
before = []
for _ in range(4):
    opened = [netCDF4.Dataset(path) for path in sys.argv[1:]]
    for dataset in before:
        dataset.close()
    before = opened
"""


def test_archives_can_be_open_several_times_in_one_process(ledger, archive, tmp_path):
    write_archive(ledger, tmp_path / "other.nc")
    subprocess.run([sys.executable, "-c", REOPENED, str(archive), str(tmp_path / "other.nc")], check=True)


def test_text_is_kept_as_characters(archive):
    with netCDF4.Dataset(archive) as opened:
        groups = [opened, *opened.groups.values()]
        variables = [variable for group in groups for variable in group.variables.values()]
    assert any(variable.dtype == "S1" for variable in variables)
    assert not any(variable.dtype is str for variable in variables)
    rows = xr.open_dataset(archive)
    assert float(rows["value"].sel(row="lift")) == float(rows["value"][list(rows["row"].values).index("lift")])


# Text that a C string can hold: no NUL, no lone surrogates.
TEXT = st.text(st.characters(exclude_characters="\0", exclude_categories=["Cs"]), max_size=12)
WORDS = TEXT.filter(bool)
NUMBER = st.floats(allow_nan=True, allow_infinity=True, width=64)
POSITIVE = st.floats(0, 1e12) | st.just(math.nan)


@st.composite
def ledgers(draw, plane):
    names = draw(st.lists(st.sampled_from(list(ROWS)), unique=True, max_size=4))
    rows = tuple(
        Row(
            name, draw(NUMBER), ROWS[name].unit, draw(POSITIVE), draw(NUMBER), draw(NUMBER), draw(NUMBER), draw(NUMBER),
            draw(NUMBER), draw(st.none() | st.floats(allow_nan=False)), draw(WORDS),
        )
        for name in names
    )  # fmt: skip
    estimates = []
    for row in draw(st.lists(st.sampled_from(list(METHODS)), max_size=2)):
        method = draw(st.sampled_from(METHODS[row]))
        figures = [draw(NUMBER) for _ in range(4)]
        estimates.append(CrossCheck(row, method, figures[0], "N", *figures[1:], draw(NUMBER), "unknown", draw(WORDS)))
    comparisons = [
        Comparison(draw(TEXT), "lift", draw(NUMBER), "N", draw(NUMBER), draw(NUMBER), draw(NUMBER), "agrees")
        for _ in range(draw(st.integers(0, 2)))
    ]
    checks = [
        Check(draw(st.sampled_from(CHECKS)), draw(st.sampled_from(CHECK_VERDICTS)), draw(NUMBER), 0.1, draw(WORDS))
        for _ in range(draw(st.integers(0, 2)))
    ]
    n = draw(st.integers(1, 4))
    column = st.lists(NUMBER, min_size=n, max_size=n).map(np.array)
    integers = st.lists(st.integers(0, 2**40), min_size=n, max_size=n).map(lambda x: np.array(x, dtype=np.int64))
    raw = Points(
        y=draw(column),
        z=draw(column),
        channels={
            "total_pressure": Channel(draw(column), relative_to=draw(st.sampled_from([None, "total", "static"]))),
            "static_pressure": Channel(draw(column), kinematic=draw(st.booleans())),
            "p1": Channel(draw(column), normalised_by=draw(st.sampled_from([None, "speed", "dynamic_pressure"]))),
        },
        line=draw(integers),
        source=draw(TEXT),
        axes=np.diag([1.0, -1.0, 1.0]),
        std=draw(st.just({}) | st.fixed_dictionaries({"p1": column})),
        samples=draw(st.none() | integers),
        row=draw(st.none() | integers),
    )
    texts = st.dictionaries(TEXT, TEXT, max_size=2)
    return Ledger(
        title=draw(TEXT),
        compressible=draw(st.booleans()),
        rows=rows,
        covariance=np.array([[draw(NUMBER) for _ in rows] for _ in rows]).reshape(len(rows), len(rows)),
        plane=plane,
        raw=raw,
        survey_text=draw(TEXT),
        estimates=tuple(estimates),
        comparisons=tuple(comparisons),
        budget=tuple(
            BudgetLine("lift", draw(TEXT), draw(NUMBER), draw(NUMBER)) for _ in range(draw(st.integers(0, 2)))
        ),
        checks=tuple(checks),
        notes=tuple(draw(st.lists(TEXT, max_size=2))),
        test=draw(texts),
        reference=draw(st.dictionaries(st.sampled_from(["speed", "mach", "temperature"]), NUMBER)),
        model=draw(st.dictionaries(st.sampled_from(["span", "moment_centre_y"]), NUMBER)),
        inputs=draw(texts),
        provenance=draw(texts),
    )


def test_round_trip_of_any_ledger(tmp_path, ledger):
    small = ledger.plane.isel(y=slice(3), z=slice(2))

    @settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.too_slow])
    @given(made=ledgers(small))
    def check(made):
        write_archive(made, tmp_path / "any.nc")
        assert same(made, open_archive(tmp_path / "any.nc"))

    check()


def test_long_survey_text_and_awkward_characters_survive(ledger, tmp_path):
    text = 'title = "Flügel, α 6°, 翼"\r\n' + "# a long comment\n" * 20_000 + "\ttail  \n\n"
    changed = dataclasses.replace(ledger, survey_text=text, title="翼 \u2708 'quoted' \"twice\"")
    path = tmp_path / "翼 ledger.nc"
    write_archive(changed, path)
    returned = open_archive(path)
    assert returned.survey_text == text
    assert returned.title == changed.title


def test_layout_is_the_documented_one(archive):
    with xr.open_dataset(archive) as root:
        assert {"value", "unit", "standard_uncertainty", "expanded_uncertainty", "coefficient"} <= set(root.data_vars)
        assert root["value"].dims == ("row",)
        assert root["covariance"].dims == ("row", "row_b")
        assert root["speed"].attrs["units"] == "m s-1"
        assert root.attrs["Conventions"] == "CF-1.11"
        assert str(root["row"].values[0]) == "profile_drag"
        assert "Flügel" in root.attrs["survey_text"]
    with xr.open_dataset(archive, group="plane") as plane:
        assert plane["u"].dims == ("z", "y")
        assert plane["u"].attrs["units"] == "m s-1"
        assert plane["u"].attrs["ancillary_variables"] == "flag"
        assert plane["flag"].attrs["flag_meanings"].startswith("missing averaged")
        for name in ("y", "z"):
            assert "axis" not in plane[name].attrs
            assert "_FillValue" not in plane[name].encoding
        assert plane["flag"].dtype == np.int32
        assert plane["wake_mask"].dtype == np.int8
        assert plane["u"].encoding["zlib"] and plane["u"].encoding["complevel"] == 1 and plane["u"].encoding["shuffle"]
    with xr.open_datatree(archive, engine="netcdf4") as tree:
        groups = {"plane", "estimates", "budget", "checks", "comparisons", "wake_line", "vortices", "span", "raw"}
        assert groups <= set(tree.children)


def test_fields_point_to_their_uncertainties(ledger, tmp_path):
    uncertainty = ledger.plane["u"] * 0 + 0.1
    uncertainty.attrs = {"units": "m s-1", "long_name": "standard uncertainty of u"}
    plane = ledger.plane.assign(u_standard_uncertainty=uncertainty)
    changed = dataclasses.replace(ledger, plane=plane)
    write_archive(changed, tmp_path / "u.nc")
    with xr.open_dataset(tmp_path / "u.nc", group="plane") as stored:
        assert stored["u"].attrs["ancillary_variables"] == "u_standard_uncertainty flag"
        assert "ancillary_variables" not in stored["u_standard_uncertainty"].attrs
    assert open_archive(tmp_path / "u.nc").plane.identical(plane)


def test_conforms_to_cf(archive, tmp_path):
    files = [archive]
    with xr.open_datatree(archive, engine="netcdf4") as tree:
        groups = list(tree.children)
    for group in groups:
        # The checker looks at the root only, so each group is checked as a file of its own.
        files.append(tmp_path / f"{group}.nc")
        with xr.open_dataset(archive, group=group) as dataset:
            bare = {name: {"_FillValue": var.encoding.get("_FillValue")} for name, var in dataset.variables.items()}
            dataset.assign_attrs(Conventions="CF-1.11", title="t", history="h").to_netcdf(files[-1], encoding=bare)
    checker = shutil.which("compliance-checker", path=str(Path(sys.executable).parent))
    if checker is None:
        pytest.skip("compliance-checker is not installed beside this Python")
    command = [sys.executable, "-W", "ignore", checker, "--test=cf:1.11", "--criteria=strict", *map(str, files)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
    assert done.stdout.count("All tests passed!") == len(files), done.stdout


def test_a_failed_write_leaves_nothing_and_keeps_the_old_file(ledger, tmp_path):
    path = tmp_path / "ledger.nc"
    write_archive(ledger, path)
    before = path.read_bytes()
    broken = dataclasses.replace(ledger, span=xr.Dataset({"x": ("y", [object()])}))
    with pytest.raises(ValueError, match="object"):
        write_archive(broken, path)
    assert path.read_bytes() == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["ledger.nc"]


def test_no_such_folder_is_one_line(ledger, tmp_path):
    with pytest.raises(DataError, match="cannot be written") as caught:
        write_archive(ledger, tmp_path / "none" / "ledger.nc")
    assert "\n" not in str(caught.value)


def _cut(path, source):
    path.write_bytes(source.read_bytes()[:-2000])


def _flip(path, source):
    content = bytearray(source.read_bytes())
    for place in range(len(content) // 4, len(content), 997):
        content[place] ^= 0xFF
    path.write_bytes(content)


def _newer(path, source):
    import netCDF4

    path.write_bytes(source.read_bytes())
    with netCDF4.Dataset(path, "a") as dataset:
        dataset.setncattr(FORMAT_ATTRIBUTE, np.int32(ARCHIVE_FORMAT + 1))


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (lambda path, source: None, "does not exist"),
        (lambda path, source: path.mkdir(), "is a directory"),
        (lambda path, source: path.write_bytes(b""), "not netCDF"),
        (lambda path, source: path.write_bytes(b"\x00\x01junk" * 500), "not netCDF"),
        (lambda path, source: path.write_text("title = 'a survey'"), "not netCDF"),
        (lambda path, source: xr.Dataset({"a": 1.0}).to_netcdf(path), "is not a ledger"),
        (lambda path, source: xr.Dataset(attrs={FORMAT_ATTRIBUTE: 1}).to_netcdf(path), "damaged or incomplete"),
        (lambda path, source: xr.Dataset(attrs={FORMAT_ATTRIBUTE: "one"}).to_netcdf(path), "damaged or incomplete"),
        (_cut, "damaged"),
        (_flip, "damaged"),
        (_newer, "newer version"),
    ],
)
def test_bad_archives_are_one_line(tmp_path, archive, spoil, message):
    path = tmp_path / "bad.nc"
    spoil(path, archive)
    with pytest.raises(DataError, match=message) as caught:
        open_archive(path)
    text = str(caught.value)
    assert "\n" not in text
    assert str(path) in text
    assert caught.value.remedy


def test_damaged_numbers_are_noticed(tmp_path, archive):
    """Each compressed block carries a checksum, so that a flipped bit is an error and not another drag."""
    content = bytearray(archive.read_bytes())
    with xr.open_dataset(archive, group="raw") as raw:
        assert raw["u"].encoding["fletcher32"]
    caught = 0
    places = np.linspace(0.3, 0.9, 13)
    original = open_archive(archive)
    for place in places:
        spoiled = content.copy()
        spoiled[int(place * len(content))] ^= 0x10
        (tmp_path / "bit.nc").write_bytes(spoiled)
        try:
            returned = open_archive(tmp_path / "bit.nc")
        except DataError:
            caught += 1
        else:
            assert same(returned.raw, original.raw)
            assert returned.plane.identical(original.plane)
    assert caught > len(places) // 2


def test_archives_are_told_by_content(archive, tmp_path):
    assert is_archive(archive)
    (tmp_path / "survey.toml").write_text("title = 'x'")
    assert not is_archive(tmp_path / "survey.toml")
    assert not is_archive(tmp_path / "absent")
    assert not is_archive(tmp_path)
