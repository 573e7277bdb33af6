"""Delimited text tables: any separator, comment lines, a units row, decimal points or commas.

Every line is split and counted before a number is read, so that a short or long row is never filled in silently, and
every error names the line and the column of the file.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.columns import (
    COMPONENTS,
    MissingColumnError,
    RawColumns,
    missing_column,
    refuse_contradicting_unit,
)

_COMMENT = ("#", "%", "!", '"')
#: Separators in the order in which they are tried; None stands for any run of blanks.
_SEPARATORS: tuple[str | None, ...] = (";", "\t", "|", ",", None)
_SEPARATOR_NAMES = {";": "semicolons", "\t": "tabs", "|": "bars", ",": "commas", None: "blanks"}
#: What an empty cell may be written as.
_MISSING = frozenset({"", "-", "--", "nan", "+nan", "-nan", "n/a", "na", "null", "none"})
_NUMBER = re.compile(r"[+-]?(\d+[.,]?\d*|[.,]\d+)([eEdD][+-]?\d+)?")
_INFINITE = re.compile(r"[+-]?(inf|infinity)", re.IGNORECASE)
#: A header further down than this is not looked for.
_DEEPEST_HEADER = 1000


@dataclass(frozen=True)
class _Layout:
    """Where the data begin and which field is which."""

    separator: str | None
    names: tuple[str, ...]
    fields: Mapping[str, int]
    width: int
    first: int


def read_table(path: Path, columns: Mapping[str, Column]) -> RawColumns:
    """Read the named columns of a delimited text table.

    Parameters
    ----------
    path : Path
        The file.
    columns : mapping of str to Column
        What to read, by key. A column is named as in the header line, or given by its number ("3", counted from 1)
        where there is none. The key ``velocity`` is three columns named after it, such as ``U_x``, ``U_y``, ``U_z``,
        and becomes the keys u, v, w.

    Returns
    -------
    RawColumns
        In file order, in the file's units.

    Raises
    ------
    DataError
        For anything in the file that cannot be read as such a table; names line and column.
    """
    try:
        lines = _decode(path)
        columns = _with_components(lines, columns)
        layout = _layout(lines, columns)
        numbers, rows = _split_rows(lines, layout)
        rows, numbers = _drop_units_row(rows, numbers, layout, columns)
        if not rows:
            raise DataError(
                "the table has a header and no data",
                remedy="give a table with one line for each point below its header",
            )
        values = _convert(rows, numbers, layout, columns)
    except DataError as error:
        raise error.located(file=path) from None
    line = np.array(numbers, dtype=np.int64)
    return RawColumns(values, line, lambda i, column: f"line {line[i]}, column {column!r}")


def _with_components(lines: Sequence[str], columns: Mapping[str, Column]) -> dict[str, Column]:
    """Columns with every velocity taken apart into the three that the header names after it."""
    found: dict[str, Column] = {}
    for key, column in columns.items():
        if key.removeprefix("std.") != "velocity":
            found[key] = column
            continue
        name = column.column.strip()
        sets = [[name + suffix for suffix in suffixes] for suffixes in COMPONENTS]
        names = next((names for names in sets if _find_header(lines, names)), None)
        if names is None:
            raise _no_vector(name)
        found |= {
            key.replace("velocity", letter): replace(column, column=part)
            for letter, part in zip("uvw", names, strict=True)
        }
    return found


def _no_vector(name: str) -> MissingColumnError:
    error = MissingColumnError(
        f"there are no three columns {name}_x, {name}_y, {name}_z",
        remedy="name the part they share, or give u, v and w with a column each",
    )
    error.column = name
    return error


def _decode(path: Path) -> list[str]:
    content = path.read_bytes().removeprefix(b"\xef\xbb\xbf")
    if b"\0" in content:
        line = content[: content.index(b"\0")].count(b"\n") + 1
        raise DataError("the file holds binary data", place=f"line {line}", remedy="give a plain text table or netCDF")
    try:
        text = content.decode("utf-8")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise DataError(
            f"byte 0x{content[error.start]:02x} is not text in UTF-8 encoding",
            place=f"line {line}",
            remedy="save the file in UTF-8 encoding",
        ) from None
    return text.replace("\r\n", "\n").replace("\r", "\n").rstrip("\x1a").split("\n")


def _fields(line: str, separator: str | None) -> list[str]:
    if '"' in line:
        # The csv module knows no "any run of blanks"; a blank with the initial ones skipped is the same thing.
        text = " ".join(line.split()) if separator is None else line
        split = next(csv.reader([text], delimiter=separator or " ", skipinitialspace=True), [])
    else:
        split = line.split(separator)
    return [field.strip() for field in split]


def _is_comment(line: str) -> bool:
    stripped = line.lstrip()
    if stripped.startswith('"'):
        return stripped.count('"') % 2 == 1
    return stripped.startswith(_COMMENT)


def _uncommented(line: str) -> str:
    return line.lstrip().lstrip("#%!").strip()


def _layout(lines: Sequence[str], columns: Mapping[str, Column]) -> _Layout:
    wanted = list(dict.fromkeys(column.column.strip() for column in columns.values()))
    named = [name for name in wanted if not name.isdigit()] or wanted
    found = _find_header(lines, named)
    if found is None and all(name.isdigit() for name in wanted):
        return _layout_by_number(lines, wanted)
    if found is None:
        raise _no_header(lines, named)
    index, separator, names = found
    for name in wanted:
        if names.count(name) > 1:
            raise DataError(
                f"the header names {name!r} {names.count(name)} times",
                place=f"line {index + 1}",
                remedy="give every column that is used a name of its own",
            )
    separator = _separator_of_data(lines[index + 1 :], separator, len(names))
    width = len(names)
    fields = {name: names.index(name) if name in names else int(name) - 1 for name in wanted}
    for name, field in fields.items():
        if not 0 <= field < width:
            raise DataError(
                f"there is no column number {name}", remedy=f"the table has {width} columns, counted from 1"
            )
    return _Layout(separator, tuple(names), fields, width, index + 1)


def _candidates(line: str) -> Iterable[tuple[str | None, list[str]]]:
    texts = [line.strip()]
    if line.lstrip().startswith(("#", "%", "!")):
        texts.insert(0, _uncommented(line))
    for text in texts:
        for separator in _SEPARATORS:
            if separator is None or separator in text:
                yield separator, _fields(text, separator)


def _find_header(lines: Sequence[str], wanted: Sequence[str]) -> tuple[int, str | None, list[str]] | None:
    for index, line in enumerate(lines[:_DEEPEST_HEADER]):
        if not all(name in line for name in wanted):
            continue
        for separator, names in _candidates(line):
            if all(name in names for name in wanted):
                return index, separator, names
    return None


def _separator_of_data(lines: Sequence[str], separator: str | None, width: int) -> str | None:
    """Separator of the first data line: a header in a comment line may be split by something else."""
    first = next((line for line in lines if line.strip() and not _is_comment(line)), None)
    if first is None or len(_fields(first.strip(" "), separator)) == width:
        return separator
    for other in _SEPARATORS:
        fields = _fields(first.strip(), other)
        if len(fields) == width > 1 and all(_is_value(field) for field in fields):
            return other
    return separator


def _is_value(cell: str) -> bool:
    return cell.casefold() in _MISSING or bool(_NUMBER.fullmatch(cell))


def _no_header(lines: Sequence[str], wanted: Sequence[str]) -> DataError:
    """The error for names that no line holds together, with the line that comes nearest to a header."""
    best: tuple[int, int, list[str]] = (0, 0, [])
    for index, line in enumerate(lines[:_DEEPEST_HEADER]):
        for _, names in _candidates(line):
            known = sum(name in names for name in wanted)
            if known > best[0]:
                best = (known, index, names)
    score, index, names = best
    if not score:
        for line in lines[:_DEEPEST_HEADER]:
            if not line.strip() or _is_comment(line):
                continue
            options = [fields for _, fields in _candidates(line)]
            names = max(options, key=len)
            if all(_is_value(name) for name in names):
                return DataError(
                    f"the table has no header line that names {wanted[0]!r}",
                    remedy=f'add one, or give columns by number, as in column = "3" (the table has {len(names)})',
                )
            break
        else:
            return DataError("the table has no data", remedy="give a table with a header and one line for each point")
    absent = next(name for name in wanted if name not in names)
    return missing_column(absent, names, what="column").located(place=f"line {index + 1}")


def _layout_by_number(lines: Sequence[str], wanted: Sequence[str]) -> _Layout:
    fields = {name: int(name) - 1 for name in wanted}
    highest = max(fields.values())
    if min(fields.values()) < 0:
        raise DataError("there is no column number 0", remedy="columns are counted from 1")
    most = 0
    for index, line in enumerate(lines[:_DEEPEST_HEADER]):
        if not line.strip() or _is_comment(line):
            continue
        splits = [(separator, _fields(line.strip(), separator)) for separator in _SEPARATORS]
        most = max(most, *(len(cells) for _, cells in splits))
        best: _Layout | None = None
        for separator, cells in splits:
            if len(cells) <= highest:
                continue
            numeric = sum(_is_value(cells[field]) for field in fields.values())
            if numeric == len(fields) and all(_is_value(cell) for cell in cells):
                return _Layout(separator, (), fields, len(cells), index)
            if numeric and best is None:
                best = _Layout(separator, (), fields, len(cells), index)
        if best is not None:
            return best
    if most == 0:
        raise DataError("the table has no data", remedy="give a table with one line for each point")
    if most <= highest:
        raise DataError(
            f"there is no column number {highest + 1}", remedy=f"the table has {most} columns, counted from 1"
        )
    raise DataError("the table has no line with a number in the columns asked for", remedy="check the column numbers")


def _split_rows(lines: Sequence[str], layout: _Layout) -> tuple[list[int], list[list[str]]]:
    """Split every data line and compare its number of values with the header's."""
    numbers: list[int] = []
    rows: list[list[str]] = []
    blanks = " " if layout.separator == "\t" else None
    for number, line in enumerate(lines[layout.first :], layout.first + 1):
        text = line.strip(blanks)
        if not text.strip() or _is_comment(text):
            continue
        numbers.append(number)
        rows.append(_fields(text, layout.separator))
    if rows and all(len(row) == layout.width + 1 and not row[-1] for row in rows):
        rows = [row[:-1] for row in rows]
    for number, row in zip(numbers, rows, strict=True):
        if len(row) != layout.width:
            least = "short" if len(row) < layout.width else "long"
            source = "the header" if layout.names else "the first row"
            remedy = f"every row needs as many values as {source}, separated by {_SEPARATOR_NAMES[layout.separator]}"
            if layout.separator == ",":
                remedy += "; decimal commas need another separator"
            raise DataError(
                f"the row is too {least}, it has {len(row)} values and {source} {layout.width}",
                place=f"line {number}",
                remedy=remedy,
            )
    return numbers, rows


def _drop_units_row(
    rows: list[list[str]], numbers: list[int], layout: _Layout, columns: Mapping[str, Column]
) -> tuple[list[list[str]], list[int]]:
    if not rows or not layout.names:
        return rows, numbers
    cells = [rows[0][field] for field in layout.fields.values()]
    if any(_NUMBER.fullmatch(cell) or _INFINITE.fullmatch(cell) for cell in cells):
        return rows, numbers
    if all(cell.casefold() in _MISSING for cell in cells):
        return rows, numbers
    for key, column in columns.items():
        stated = rows[0][layout.fields[column.column.strip()]].strip("[]() ")
        if stated.casefold() not in _MISSING:
            try:
                refuse_contradicting_unit(stated, key, column, strict=False)
            except DataError as error:
                raise error.located(place=f"line {numbers[0]}") from None
    return rows[1:], numbers[1:]


def _convert(
    rows: list[list[str]], numbers: list[int], layout: _Layout, columns: Mapping[str, Column]
) -> dict[str, Array]:
    cells = {name: [row[field] for row in rows] for name, field in layout.fields.items()}
    comma = _decimal_comma(cells, numbers)
    arrays = {name: _numbers(name, texts, numbers, comma=comma) for name, texts in cells.items()}
    return {key: arrays[column.column.strip()].copy() for key, column in columns.items()}


def _decimal_comma(cells: Mapping[str, list[str]], numbers: list[int]) -> bool:
    """Whether numbers carry a decimal comma; a table that carries both kinds is refused."""
    comma = point = None
    for name, texts in cells.items():
        joined = "\n".join(texts)
        if comma is None and "," in joined:
            comma = next((i, name) for i, text in enumerate(texts) if "," in text)
        if point is None and "." in joined:
            point = next((i, name) for i, text in enumerate(texts) if "." in text)
    if comma is not None and point is not None:
        raise DataError(
            f"a number with a comma ({cells[comma[1]][comma[0]]!r}) in a table with decimal points "
            f"({cells[point[1]][point[0]]!r} in line {numbers[point[0]]})",
            place=f"line {numbers[comma[0]]}, column {comma[1]!r}",
            remedy="use one decimal sign throughout and no thousands separators",
        )
    return comma is not None


def _numbers(name: str, texts: list[str], numbers: list[int], *, comma: bool) -> Array:
    joined = "".join(texts)
    if "_" not in joined and not comma:
        try:
            return np.array(list(map(float, texts)), dtype=np.float64)
        except ValueError:
            pass
    values = np.empty(len(texts))
    for i, text in enumerate(texts):
        if text.casefold() in _MISSING:
            values[i] = np.nan
        elif _NUMBER.fullmatch(text):
            values[i] = float(text.replace(",", ".").replace("D", "E").replace("d", "e"))
        elif _INFINITE.fullmatch(text):
            values[i] = np.inf
        else:
            raise DataError(
                f"{text[:40]!r} is not a number",
                place=f"line {numbers[i]}, column {name!r}",
                remedy="correct it, or leave the cell empty if the value is missing",
            )
    return values
