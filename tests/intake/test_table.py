"""Delimited tables: every way of writing the same plane reads the same; every fault is named with line and column."""

import numpy as np
import pytest

from wakeledger.core.errors import DataError
from wakeledger.core.points import Column
from wakeledger.intake.readers import read_points

NAMES = ("Y", "Z", "U", "V", "W")
KEYS = ("y", "z", "u", "v", "w")
VALUES = np.array(
    [
        [0.0, 10.0, 42.125, -1.5, 0.25],
        [5.0, 10.0, 41.0, 1.25e-3, -0.5],
        [-5.5, 20.0, 40.75, -2.0, 1.0],
    ]
)
COLUMNS = {
    key: Column(name, unit, scale)
    for key, name, unit, scale in zip(KEYS, NAMES, ["mm"] * 2 + ["m/s"] * 3, [1e-3] * 2 + [1.0] * 3, strict=True)
}
IDENTITY = np.eye(3)


def write(tmp_path, text, name="traverse.csv"):
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def read(tmp_path, text, columns=COLUMNS, **options):
    return read_points(write(tmp_path, text), columns, axes=IDENTITY, **options)


def rows(separator=",", form=repr):
    return [separator.join(form(float(value)) for value in row) for row in VALUES]


def table(separator=",", header=None, end="\n", form=repr, extra=()):
    return end.join([separator.join(NAMES) if header is None else header, *extra, *rows(separator, form)]) + end


def assert_same(points):
    # Text to binary is exact, and so is nothing but one product by the unit's scale.
    np.testing.assert_array_equal(points.y, 1e-3 * VALUES[:, 0])
    np.testing.assert_array_equal(points.z, 1e-3 * VALUES[:, 1])
    for k, key in enumerate(KEYS[2:], start=2):
        np.testing.assert_array_equal(points.channels[key].values, VALUES[:, k])


def comma(value):
    return repr(value).replace(".", ",")


@pytest.mark.parametrize(
    "text",
    [
        pytest.param(table(","), id="commas"),
        pytest.param(table(";"), id="semicolons"),
        pytest.param(table("\t"), id="tabs"),
        pytest.param(table("|"), id="bars"),
        pytest.param(table("   "), id="blanks"),
        pytest.param(table(" | "), id="bars with blanks"),
        pytest.param(table(";", form=comma), id="decimal commas"),
        pytest.param(table("\t", form=comma), id="decimal commas, tabs"),
        pytest.param(table("  ", form=comma), id="decimal commas, blanks"),
        pytest.param(table(end="\r\n"), id="CRLF"),
        pytest.param(table(end="\r"), id="CR"),
        pytest.param("\ufeff" + table(), id="byte order mark"),
        pytest.param('# tunnel 3, run 117\n% rake: 5\n! checked\n" a note\n' + table(), id="comments ahead"),
        pytest.param("Run 117\nOperator: A. Person, shift 2\n\n" + table(), id="free text ahead"),
        pytest.param(table(header="# " + " ".join(NAMES), separator=" "), id="header in a comment"),
        pytest.param(table(header="#Y\tZ\tU\tV\tW", separator=" "), id="header split otherwise than the data"),
        pytest.param(table(header='"Y","Z","U","V","W"'), id="quoted header"),
        pytest.param(table(form=lambda value: f'"{value!r}"'), id="quoted numbers"),
        pytest.param(table(form=lambda value: f'"{value!r}"'.replace(".", ",")), id="quoted decimal commas"),
        pytest.param(table(extra=["mm,mm,m/s,m/s,m/s"]), id="units row"),
        pytest.param(table(extra=["[mm],[mm],[m/s],[m/s],[m/s]", "# data follow"]), id="bracketed units row"),
        pytest.param(table().replace("\n", ",\n"), id="trailing separators"),
        pytest.param(table().replace("1.25e-03", "1.25D-03").replace("0.00125", "1.25D-03"), id="Fortran exponents"),
        pytest.param(table() + "\n\n\x1a", id="blank lines and end-of-file mark"),
        pytest.param(table().replace("Y,Z", " Y , Z "), id="blanks about names"),
    ],
)
def test_spellings_of_the_same_table(tmp_path, text):
    assert_same(read(tmp_path, text))


def test_trailing_separators_under_a_plain_header(tmp_path):
    assert_same(read(tmp_path, "\n".join([",".join(NAMES), *(row + "," for row in rows())])))


def test_other_columns_may_hold_anything(tmp_path):
    lines = [f"{row},ok {i},," for i, row in enumerate(rows())]
    assert_same(read(tmp_path, "\n".join([",".join(NAMES) + ",remark,,", *lines])))


def test_columns_by_number(tmp_path):
    columns = {
        key: Column(str(i), "m", scale)
        for i, (key, scale) in enumerate(zip(KEYS, [1e-3] * 2 + [1.0] * 3, strict=True), 1)
    }
    for text in (
        "\n".join(rows()),
        "\n".join(rows(" ")),
        "\n".join(rows(";", comma)),
        table(),
        "# run 117\n" + table("|"),
    ):
        assert_same(read(tmp_path, text, columns))


def test_lines_are_those_of_the_file(tmp_path):
    text = "# one\n# two\n" + table(extra=["mm,mm,m/s,m/s,m/s"]).replace("5.0,10.0", "# a remark\n5.0,10.0")
    np.testing.assert_array_equal(read(tmp_path, text).line, [5, 7, 8])


@pytest.mark.parametrize("cell", ["", "nan", "NaN", "-", "n/a", "N/A", "null", "--"])
def test_missing_values_are_missing(tmp_path, cell):
    points = read(tmp_path, table().replace("-1.5", cell))
    np.testing.assert_array_equal(points.channels["v"].values, [np.nan, *VALUES[1:, 3]])
    np.testing.assert_array_equal(points.channels["u"].values, VALUES[:, 2])


def test_offset_of_a_unit(tmp_path):
    columns = COLUMNS | {"temperature": Column("T", "degC", 1.0, 273.15)}
    text = "\n".join([",".join(NAMES) + ",T", *(row + ",12" for row in rows())])
    np.testing.assert_array_equal(read(tmp_path, text, columns).channels["temperature"].values, np.full(3, 285.15))


def test_relations_to_the_reference_are_kept(tmp_path):
    columns = COLUMNS | {"w": Column("W", "1", relative_to="static", normalised_by="dynamic_pressure", kinematic=True)}
    channel = read(tmp_path, table(), columns).channels["w"]
    assert (channel.relative_to, channel.normalised_by, channel.kinematic) == ("static", "dynamic_pressure", True)


def fault(text, **parts):
    return pytest.param(text, parts, id=parts.pop("id"))


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        fault("", id="empty", found="empty"),
        fault(" \n\n", id="blank", found="empty"),
        fault(",".join(NAMES) + "\n", id="header only", found="header and no data"),
        fault(
            table(extra=[]).split("\n")[0] + "\nmm,mm,m/s,m/s,m/s\n", id="header and units", found="header and no data"
        ),
        fault("# nothing\n# here\n", id="comments only", found="no data"),
        fault(table().replace("U,", "Ux,"), id="missing column", found="'U'", place="line 1", remedy="'Ux'"),
        fault(table().replace("U,", "u,"), id="case", found="'U'", place="line 1", remedy="did you mean 'u'?"),
        fault(table().replace("U,", "U [m/s],"), id="unit in the name", found="'U'", remedy="did you mean 'U [m/s]'?"),
        fault("\n".join(rows()), id="no header", found="no header line", remedy='column = "3"'),
        fault(table().replace("41.0", "4l.0"), id="text", found="'4l.0'", place="line 3, column 'U'"),
        fault(table().replace("41.0", "4_1.0"), id="underscore", found="'4_1.0'", place="line 3, column 'U'"),
        fault(table().replace("41.0", "****"), id="stars", found="'****'", place="line 3, column 'U'"),
        fault(table().replace("41.0", "41.0 m/s"), id="unit in a cell", found="'41.0 m/s'", place="line 3, column 'U'"),
        fault(table().replace("41.0,", ""), id="short", found="short, it has 4", place="line 3", remedy="commas"),
        fault(table().replace("41.0", "41.0,7"), id="long", found="long, it has 6", place="line 3", remedy="commas"),
        fault(table() + "End of run\n", id="footer", found="short, it has 1", place="line 5"),
        fault(table(" ").replace("41.0 ", ""), id="short, blanks", found="short, it has 4", place="line 3"),
        fault(
            table(",", form=comma), id="decimal commas between commas", found="long, it has 10", remedy="decimal commas"
        ),
        fault(table(";").replace("41.0", "1,041.0"), id="thousands", found="'1,041.0'", place="line 3, column 'U'"),
        fault(table().replace("W", "V"), id="duplicate name", found="there is no column 'W'"),
        fault(
            "Y,Z,U,V,W,V\n" + "\n".join(r + ",1" for r in rows()), id="named twice", found="'V' 2 times", place="line 1"
        ),
        fault(table().replace("41.0", "inf"), id="inf", found="infinite", place="line 3, column 'U'"),
        fault(table().replace("41.0", "-Infinity"), id="infinity", found="infinite", place="line 3, column 'U'"),
        fault(table().replace("41.0", "1e999"), id="overflow", found="infinite", place="line 3, column 'U'"),
        fault(
            table().replace("5.0,10.0", ",10.0"),
            id="no position",
            found="position y is missing",
            place="line 3, column 'Y'",
        ),
        fault(
            "Y,Z,U,V,W\n" + "\n".join(f"{i},{i * i},,1,1" for i in range(4)),
            id="all missing",
            found="'U' (u) has no value",
        ),
        fault(b"\x93NUMPY\x01\x00\x00\x11" + bytes(range(256)), id="binary", found="binary"),
        fault(table().encode() + b"\x00\x01", id="binary tail", found="binary"),
        fault(b"#" * 5000 + b"\n" + table().encode() + b"\x00", id="late NUL", found="binary", place="line 6"),
        fault(table().encode("utf-16"), id="UTF-16", found="UTF-16", remedy="UTF-8"),
        fault(
            ("# Prüfstand\n" + table()).encode("latin-1"), id="Latin-1", found="0xfc", place="line 1", remedy="UTF-8"
        ),
        fault(
            table(extra=["m,mm,m/s,m/s,m/s"]),
            id="units row contradicts",
            found="'m', the survey file says 'mm'",
            place="line 2",
        ),
        fault(table().replace("42.125", '"42.125'), id="open quote", found="short", place="line 2"),
    ],
)
def test_faults_are_named(tmp_path, text, expected):
    with pytest.raises(DataError) as caught:
        read(tmp_path, text)
    error = caught.value
    assert error.file is not None
    assert error.file.endswith("traverse.csv")
    assert "\n" not in error.line
    assert expected["found"] in error.found
    if "place" in expected:
        assert error.place == expected["place"]
    if "remedy" in expected:
        assert expected["remedy"] in (error.remedy or "")


@pytest.mark.parametrize("number", ["0", "6", "12"])
def test_column_numbers_out_of_range(tmp_path, number):
    columns = {key: Column(str(i), "m") for i, key in enumerate(KEYS, 1)} | {"w": Column(number, "m/s")}
    with pytest.raises(DataError, match=rf"no column number {number}"):
        read(tmp_path, table(), columns)


def test_large_table_matches_an_independent_reader(tmp_path):
    generator = np.random.default_rng(5)
    values = generator.normal(size=(2000, 5))
    path = tmp_path / "large.txt"
    np.savetxt(path, values, delimiter="\t", header="\t".join(NAMES), comments="", fmt="%.17g")
    points = read_points(path, {key: Column(name, "m") for key, name in zip(KEYS, NAMES, strict=True)}, axes=IDENTITY)
    oracle = np.loadtxt(path, delimiter="\t", skiprows=1)
    np.testing.assert_array_equal(np.column_stack([points.channels[key].values for key in "uvw"]), oracle[:, 2:])
