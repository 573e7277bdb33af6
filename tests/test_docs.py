"""The user documentation says what the program does: links, names, limits, keys, commands, examples, numbers."""

import contextlib
import doctest
import importlib.util
import json
import re
import shlex
import tomllib
from pathlib import Path

import click
import pytest
import xarray as xr

from wakeledger.cli import exits, wakeledger
from wakeledger.core.errors import SurveyError
from wakeledger.core.flags import Flag
from wakeledger.core.names import CHECKS, METHODS, ROWS
from wakeledger.core.units import UnitError, to_si
from wakeledger.ledger.crosscheck import COVERAGE_FACTOR
from wakeledger.ledger.encoding import group_names
from wakeledger.ledger.rows import CHECK_VERDICTS, VERDICTS
from wakeledger.run import checks, tables
from wakeledger.run.chain import outputs, reduction
from wakeledger.run.computed import MESH
from wakeledger.run.config import plan, stream, uncertainty
from wakeledger.run.config import plane as plane_tables
from wakeledger.run.config import tables as small_tables
from wakeledger.run.config.survey import Survey, parse_survey
from wakeledger.run.load import refuse_unsupported
from wakeledger.run.section import terms as section_terms
from wakeledger.run.stations import TREND
from wakeledger.run.uncertainty import method_choice, numerics, spacing, wake_edge
from wakeledger.run.uncertainty.wandering import WANDERING

ROOT = Path(__file__).resolve().parents[1]
DOCS = ROOT / "docs"
PAGES = {path.name: path.read_text("utf-8") for path in sorted(DOCS.glob("*.md"))}
CODE = re.compile(r"`([^`\n]+)`")
FENCE = re.compile(r"^```(\w*)\n(.*?)^```$", re.DOTALL | re.MULTILINE)
WORD = re.compile(r"[a-z][a-z_0-9]*")


def script(name):
    """A script of the documentation as a module."""
    spec = importlib.util.spec_from_file_location(f"docs_{name}", DOCS / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def fences(kind):
    """Every block of one kind, with its page and what stands before it."""
    return [
        pytest.param(match[2], page, text[: match.start()], id=f"{page}:{text[: match.start()].count(chr(10)) + 1}")
        for page, text in PAGES.items()
        for match in FENCE.finditer(text)
        if match[1] == kind
    ]


def prose(text):
    """A page without its code blocks."""
    return FENCE.sub("", text)


def headings(text):
    return [(len(m[1]), m[2].strip()) for m in re.finditer(r"^(#+) (.+)$", prose(text), re.MULTILINE)]


def anchors(text):
    """Anchors of a page's headings, as the usual renderers make them."""
    return {re.sub(r"[^\w\- ]", "", title.lower()).replace(" ", "-") for _, title in headings(text)}


def part(page, title):
    """Text below a heading, down to the next heading of its level or above."""
    text = prose(PAGES[page])
    start = re.search(rf"^(#+) {re.escape(title)}$", text, re.MULTILINE)
    assert start, f"{page} has no heading {title!r}"
    rest = text[start.end() :]
    end = re.search(rf"^#{{1,{len(start[1])}}} ", rest, re.MULTILINE)
    return rest[: end.start()] if end else rest


def first_column(text):
    """Names in code in the first column of every table of a text."""
    lines = text.splitlines()
    heads = {index - 1 for index, line in enumerate(lines) if line.startswith("|---")}
    cells = [line.split("|")[1] for i, line in enumerate(lines) if line.startswith("|") and i not in heads]
    return [name for cell in cells for name in CODE.findall(cell)]


@pytest.fixture(scope="module")
def measured():
    return script("measured")


@pytest.fixture(scope="module")
def sample(measured, tmp_path_factory):
    """The sample survey and what the program prints of it, by the name of the measured part."""
    room = measured.Sample(tmp_path_factory.mktemp("sample"))
    room.parts = {name: make(room) for name, make in measured.OUTPUTS.items()}
    return room


# Links, pages and figures


@pytest.mark.parametrize("page", PAGES)
def test_links_and_images_resolve(page):
    for target in re.findall(r"\]\(([^)\s]+)\)", prose(PAGES[page])):
        assert not re.match(r"[a-z]+:", target), f"{page} links to the outside: {target}"
        name, _, anchor = target.partition("#")
        path = (DOCS / name).resolve() if name else DOCS / page
        assert path.exists(), f"{page}: {target} does not exist"
        if anchor:
            assert anchor in anchors(path.read_text("utf-8")), f"{page}: {target} has no such heading"


def test_every_page_is_reached_and_every_figure_used(measured):
    listed = re.findall(r"\]\((\w+\.md)\)", PAGES["index.md"])
    # The coverage study writes a page of its own where it is run.
    assert {*listed, "index.md"} == set(PAGES) - {"coverage.md"}
    shown = {target for text in PAGES.values() for target in re.findall(r"!\[[^\]]+\]\(figures/([^)]+)\)", text)}
    files = {path.name for path in (DOCS / "figures").iterdir()}
    assert shown == files
    drawn = re.findall(r'^    "([\w.]+)": ', (DOCS / "make_figures.py").read_text("utf-8"), re.MULTILINE)
    assert set(drawn) == files
    assert all((DOCS / "figures" / name).stat().st_size < 300_000 for name in files)


# Names


def test_rows_are_all_documented_and_none_is_invented(sample):
    page = PAGES["rows.md"]
    listed = first_column(page[page.index("| Row |") : page.index("## How the rows")])
    assert sorted(listed) == sorted(ROWS)
    titles = [CODE.findall(title)[0] for level, title in headings(page) if level == 2 and CODE.findall(title)]
    assert set(titles) == {*outputs.ROWS, "section_drag"}
    always = set()
    for line in page[page.index("| Row |") : page.index("## How the rows")].splitlines()[2:]:
        if not line.startswith("|"):
            continue
        _, names, units, given, _ = line.split("|")
        assert [{"–": "1"}.get(unit.strip(), unit.strip()) for unit in units.split(",")] == [
            ROWS[name].unit for name in CODE.findall(names)
        ]
        if given.strip() == "yes":
            assert set(CODE.findall(names)) <= set(outputs.ROWS)
            always |= set(CODE.findall(names))
        elif given.strip() == "no":
            assert not set(CODE.findall(names)) & {*outputs.ROWS, "section_drag"}
    reduced = json.loads((sample.folder / "survey-ledger" / "ledger.json").read_text("utf-8"))
    assert {row["name"] for row in reduced["rows"]} == always


def test_methods_are_all_documented_and_none_is_invented():
    page = PAGES["crosschecks.md"]
    titles = {CODE.findall(title)[0] for level, title in headings(page) if level == 3}
    assert titles == {method for _, method in outputs.ESTIMATES if _ in ROWS and method != "wake_line"} | {"wake_line"}
    for row, methods in METHODS.items():
        for method in methods[1:]:
            assert f"`{method}`" in page, f"{method} of {row}"
        assert f"`{methods[0]}`" in PAGES["rows.md"], f"{methods[0]} of {row}"
    known = {method for methods in METHODS.values() for method in methods}
    assert set(first_column(part("crosschecks.md", "What each estimate shares with its row"))) <= known
    assert set(first_column(part("crosschecks.md", "`section_drag`"))) == set(METHODS["section_drag"][1:])


def test_checks_and_their_limits_are_those_of_the_program():
    page = PAGES["checks.md"]
    found = dict(re.findall(r"^\| `(\w+)` \|(?:[^|]|\\\|)+\| ([\d.]+ \| (?:[\d.]+|never)) \|$", page, re.MULTILINE))
    limits = {name: tuple(float(x.replace("never", "inf")) for x in text.split("|")) for name, text in found.items()}
    assert limits == checks.LIMITS
    titles = [CODE.findall(title) for level, title in headings(page) if level == 2]
    assert [names[0] for names in titles if names] == list(CHECKS)
    assert sorted(first_column(part("checks.md", "Line traverses"))) == sorted(CHECKS)
    assert checks.EDGE_CELLS == 3 and "three cells wide" in page
    assert checks._CONTOURS == 5 and "up to five nested rectangles" in page
    assert f"{checks.ANGLE_LIMIT * 57.29578:.1f}°" in part("checks.md", "`outer_flow`")


@pytest.mark.parametrize("page", PAGES)
def test_no_page_links_or_names_a_check_that_is_not(page):
    for name in re.findall(r"(?<!cross)checks\.md#(\w+)\)", PAGES[page]):
        assert name in CHECKS
    for name in re.findall(r"rows\.md#(\w+)\)", PAGES[page]):
        assert name in ROWS


def test_verdicts_are_those_of_the_program():
    assert set(first_column(part("crosschecks.md", "Difference, E_n and verdict"))) == set(VERDICTS)
    page = PAGES["checks.md"]
    assert set(first_column(page[: page.index("| Check |")])) == set(CHECK_VERDICTS)
    assert COVERAGE_FACTOR == 2.0 and "/ (2 u(d))" in PAGES["crosschecks.md"]
    assert tables.EXPECTED_DOUBT == 0.2 and "0.2 d₀" in PAGES["crosschecks.md"]


def test_numerical_terms_of_the_budget_are_documented(sample):
    listed = part("uncertainty.md", "Numerical terms")
    names = [line.split("|")[1].strip() for line in listed.splitlines() if line.startswith("| ")][1:]
    constants = ("MASK", "RESOLUTION", "CORES", "RESAMPLING", "GAPS", "PAIR", "PRESSURE", "LOSS_ZERO", "OFFSET_ZERO")
    constants = (*constants, "SWIRL", "EDGE", "CUT", "SPLIT")
    known = [*(getattr(numerics, name) for name in constants), MESH, TREND]
    lines = [getattr(section_terms, name) for name in ("WINDOW", "RESOLUTION", "GAPS", "LEVEL")]
    last = ["choices inside *estimate*", method_choice.CHOICE.format("*row*"), WANDERING]
    assert names == [*known, *last, "Term of a line traverse", *lines]
    assert numerics.METHOD == "choices inside {}"
    assert (numerics.SWEEP, numerics.ORDER) == ((0.5, 1.5), 3.0)
    assert (wake_edge.RINGS, wake_edge.CHANCE, wake_edge.BEYOND) == ((2.0, 8.0), 0.0003, 2.0)
    assert (spacing.LOWEST, spacing.SHOWN, spacing.CLEAR) == (1.0, 1.2, 3.0)


def test_exit_statuses_are_those_of_the_program():
    found = re.findall(r"^\| (\d+) \|", part("first_survey.md", "Exit status"), re.MULTILINE)
    known = [exits.DONE, exits.CHECK_FAILED, exits.INPUT_WRONG, exits.PROGRAM_FAILED, exits.INTERRUPTED]
    assert [int(status) for status in found] == known


def test_flags_are_those_of_the_program():
    found = re.findall(r"^\| (\d+) \| `(\w+)` \|", PAGES["archive.md"], re.MULTILINE)
    assert found == [(str(flag.value), str(flag.name).lower()) for flag in Flag]


# The survey file

TABLES = {
    "`title`": ("title",),
    "`[test]`": small_tables.TestTable,
    "`[reference]`": stream.ReferenceTable,
    "`[reference.position_error]`": stream.PositionErrorTable,
    "`[model]`": stream.ModelTable,
    "`[plane]`": plane_tables.Plane,
    "`[plane.columns]`": plane_tables.ColumnsTable,
    "`[plane.axes]`": plane_tables.Axes,
    "`[probe]`": small_tables.ProbeTable,
    "`[empty_tunnel]`": small_tables.EmptyTunnelTable,
    "`[boundary]`": small_tables.BoundaryTable,
    "`[wake]`": small_tables.WakeTable,
    "`[section]`": small_tables.SectionTable,
    "`[uncertainty]`": uncertainty.UncertaintyTable,
    "`[[uncertainty.source]]`": uncertainty.Source,
    "`[[compare]]`": uncertainty.Comparison,
    "`[plan]`": plan.PlanTable,
}
REFUSED = {
    "body": small_tables.BodyTable,
    "loading": small_tables.LoadingTable,
}


def keys_of(table):
    return set(table) if isinstance(table, tuple) else set(table.keys())


@pytest.mark.parametrize("title", TABLES)
def test_every_key_of_the_survey_file_is_documented_and_none_is_invented(title):
    text = part("survey_file.md", title)
    # What stands under a heading of its own below this one is not this table's.
    text = text[: re.search(r"^#+ ", text, re.MULTILINE).start()] if re.search(r"^#+ ", text, re.MULTILINE) else text
    found = {name for name in first_column(text) if re.fullmatch(WORD, name)}
    expected = keys_of(TABLES[title])
    if title == "`[plane.columns]`":
        expected = expected | set(plane_tables.ColumnEntry.keys())
    if title == "`[[uncertainty.source]]`":
        found.discard("calibration")  # a name of applies_to
    assert found == expected


def test_every_table_of_the_survey_file_is_documented():
    tops = {title.strip("`[]").split(".")[0] for title in TABLES}
    assert tops | set(REFUSED) == set(Survey.keys())
    page = part("survey_file.md", "Accepted, but refused in this version")
    for name, table in REFUSED.items():
        line = next(line for line in page.splitlines() if line.startswith("| `[") and f"[{name}]" in line)
        cells = line.split("|")
        assert keys_of(table) <= set(CODE.findall(cells[2])), name


BASE = (
    '[reference]\nspeed = "42 m/s"\ndensity = "1.2 kg/m^3"\n[model]\nreference_area = "0.18 m^2"\n'
    '[boundary]\nkind = "free_air"\n[plane]\nfile = "a.csv"\nstation = "1 m"\nprimary = "velocity"\n'
    "[plane.columns]\n"
    + "".join(
        f'{c} = {{ column = "{c}", unit = "{u}" }}\n' for c, u in zip("yzuvw", ("mm", "mm", *["m/s"] * 3), strict=True)
    )
)
WANTS = {
    "body": '[[body]]\nname = "tail"\nregion = [["-0.3 m", "0.1 m"], ["0.3 m", "0.3 m"]]\n',
    "loading": '[loading]\ntrailing_edge = [["-0.6 m", "0 m"], ["0.6 m", "0 m"]]\n',
}


@pytest.mark.parametrize("name", WANTS)
def test_what_the_page_says_is_refused_is_refused(name):
    page = part("survey_file.md", "Accepted, but refused in this version")
    line = next(line for line in page.splitlines() if line.startswith("| `[") and f"[{name}]" in line)
    with pytest.raises(SurveyError, match=re.escape(line.split("|")[3].strip())):
        refuse_unsupported(parse_survey(BASE + WANTS[name], "survey.toml"))


def test_walls_and_the_empty_tunnel_are_not_refused():
    refuse_unsupported(parse_survey(BASE, "survey.toml"))
    walls = BASE.replace('"free_air"', '"closed_walls"\ny = ["-1 m", "1 m"]\nz = ["-1 m", "1 m"]\nreflection = "y"')
    refuse_unsupported(parse_survey(walls + '[empty_tunnel]\nsurvey = "empty.toml"\n', "survey.toml"))


def test_defaults_are_those_of_the_program():
    page = PAGES["survey_file.md"]
    fields = uncertainty.UncertaintyTable.model_fields
    assert f"| whole number, at least 100 | {fields['draws'].default} |" in page
    assert f"| whole number, at least 0 | {fields['seed'].default} |" in page
    assert reduction.Settings.level == 3.0 and "| pure number | 3 | `4.0` |" in page


@pytest.mark.parametrize(("text", "page", "before"), fences("toml"))
def test_survey_file_examples_are_valid(text, page, before):
    if before.rstrip().endswith("<!-- complete -->"):
        refuse_unsupported(parse_survey(text, "survey.toml"))
    else:
        tomllib.loads(text)


def test_complete_examples_are_marked():
    assert PAGES["survey_file.md"].count("<!-- complete -->\n```toml") == len(
        re.findall(r"^Complete:$", PAGES["survey_file.md"], re.MULTILINE)
    )


def test_examples_of_units_are_understood():
    known = ("m", "m2", "m s-1", "Pa", "kg m-3", "K", "rad", "N", "N m", "1")
    for text in re.findall(r'`"([^"`]+)"`', part("conventions.md", "Units")):
        read = 0
        for unit in known:
            with contextlib.suppress(UnitError):
                to_si(text, unit)
                read += 1
        assert read == 1, text


# Commands


def command_lines():
    return [
        pytest.param(line[2:], id=f"{page}: {line[2:]}")
        for page, text in PAGES.items()
        for match in FENCE.finditer(text)
        for line in match[2].splitlines()
        if line.startswith("$ wakeledger")
    ]


@pytest.mark.parametrize("line", command_lines())
def test_commands_and_options_exist(line):
    _, name, *arguments = shlex.split(line)
    command = wakeledger.commands[name]
    command.make_context(name, arguments, resilient_parsing=False)


def test_options_in_the_text_exist():
    known = {option for command in wakeledger.commands.values() for p in command.params for option in p.opts}
    known |= {"--help", "--version", "--surveys"}
    for text in PAGES.values():
        for code in CODE.findall(prose(text)):
            assert set(re.findall(r"--[a-z]+", code)) <= known, code
    assert {p.name for p in wakeledger.commands["reduce"].params if isinstance(p, click.Option)} == {
        "out", "draws", "figures", "overwrite", "quiet",
    }  # fmt: skip


# Products


def test_archive_page_lists_what_the_archive_holds(sample):
    archive = sample.folder / "survey-ledger" / "ledger.nc"
    with xr.open_dataset(archive) as root:
        variables, attributes = {str(name) for name in root.variables}, set(root.attrs)
    page = part("archive.md", "Root")
    assert set(first_column(page)) == variables | attributes
    groups = part("archive.md", "Groups")
    assert set(re.findall(r"^\| `([a-z_]+)` \|", groups, re.MULTILINE)) == set(group_names(archive))
    for group in ("plane", "estimates", "budget", "checks", "wake_line", "vortices", "span"):
        line = next(line for line in groups.splitlines() if line.startswith(f"| `{group}` |"))
        with xr.open_dataset(archive, group=group) as dataset:
            for name in dataset.variables:
                assert f"`{name}`" in line, f"{group}: {name}"


def test_json_keys_are_those_of_the_product(sample):
    document = json.loads((sample.folder / "survey-ledger" / "ledger.json").read_text("utf-8"))
    page = part("archive.md", "`ledger.json`")
    assert sorted(first_column(page)) == sorted(document)
    for key in ("rows", "estimates", "comparisons", "budget", "checks"):
        line = next(line for line in page.splitlines() if line.startswith(f"| `{key}` |"))
        assert set(CODE.findall(line.split("|")[2])) == set(document[key][0]) - {"reason"}


# Examples and measured parts


def python_pages():
    return [page for page, text in PAGES.items() if any(match[1] == "python" for match in FENCE.finditer(text))]


@pytest.mark.parametrize("page", python_pages())
def test_python_examples_run(page, sample, tmp_path, monkeypatch):
    for name in ("survey.toml", "traverse.csv"):
        (tmp_path / name).write_bytes((sample.folder / name).read_bytes())
    (tmp_path / "ledger.nc").write_bytes((sample.folder / "survey-ledger" / "ledger.nc").read_bytes())
    monkeypatch.chdir(tmp_path)
    text = "".join(match[2] for match in FENCE.finditer(PAGES[page]) if match[1] == "python")
    test = doctest.DocTestParser().get_doctest(text, {}, page, page, 0)
    assert test.examples
    said = []
    assert doctest.DocTestRunner(verbose=False).run(test, out=said.append).failed == 0, "".join(said)


def same(found, fresh, tolerance):
    """Whether two texts have the same words, and numbers that differ by little."""
    number = re.compile(r"[-+]?\d+(?:\.\d+)?(?:e-?\d+)?")
    if number.sub("#", found).split() != number.sub("#", fresh).split():
        return False
    pairs = zip(number.findall(found), number.findall(fresh), strict=True)
    return all(_close(one, other, tolerance) for one, other in pairs)


def _close(one, other, tolerance):
    digits = len(one.partition(".")[2].partition("e")[0])
    a, b = float(one), float(other)
    return abs(a - b) <= max(2.001 * 10.0**-digits * ("e" not in one), tolerance * max(abs(a), abs(b)))


@pytest.mark.parametrize("name", ["differences", "solve", "estimates", "station", "noise"])
def test_measured_tables_can_be_measured_again(measured, name):
    # One digit is printed; half of it and a unit in the last place is what rounding and another machine may do.
    assert same(measured.blocks()[name], measured.TABLES[name](), 0.5)


@pytest.mark.parametrize("name", ["inspect", "inspect cut", "reduce", "raw", "cut", "truth"])
def test_printed_outputs_are_what_the_program_prints(measured, sample, name):
    # 300 draws: a tenth for uncertainties whose last digit hangs on one draw, values move less.
    assert same(measured.blocks()[name], sample.parts[name], 0.1)


def test_every_measured_part_is_in_a_page(measured):
    assert set(measured.blocks()) == {*measured.TABLES, *measured.OUTPUTS}


def test_the_sample_survey_is_within_its_uncertainties(sample):
    misses = [abs(float(line.split("|")[5])) for line in sample.parts["truth"].splitlines()[2:]]
    assert max(misses) <= 1.5 and sum(miss > 1 for miss in misses) <= 1


# Words


def test_the_pages_say_what_the_caution_must_say():
    page = PAGES["index.md"]
    for words in (
        "engineering estimates",
        "certified performance data",
        "test authority",
        "can hurt people",
        "local rules",
    ):
        assert words in " ".join(page.split())


@pytest.mark.parametrize("page", PAGES)
def test_lines_fit(page):
    for line in prose(PAGES[page]).splitlines():
        assert len(line) <= 130 or line.startswith("|"), line
