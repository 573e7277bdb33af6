"""Variables of one plane in several files, one for each as samplers write them: joined by position."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.columns import POSITIONS, MissingColumnError, RawColumns

#: Positions that differ by less than this share of the plane's size are one.
_ONE_PLACE = 1e-6


def read_joined(
    paths: Sequence[Path],
    columns: Mapping[str, Column],
    read: Callable[[Path, Mapping[str, Column]], RawColumns],
) -> RawColumns:
    """Read one plane from several files.

    Parameters
    ----------
    paths : sequence of Path
        The files; each holds positions and some of the variables.
    columns : mapping of str to Column
        What to read, by key.
    read : callable
        Reads some of the columns of one file.

    Returns
    -------
    RawColumns
        In the order of the first file.

    Raises
    ------
    DataError
        If a variable is in no file or in several, a file holds none, or the files' points differ.
    """
    positions = {key: column for key, column in columns.items() if key in POSITIONS}
    wanted = {key: column for key, column in columns.items() if key not in POSITIONS}
    parts: list[RawColumns] = []
    held: list[Mapping[str, Column]] = []
    holder: dict[str, Path] = {}
    missing: MissingColumnError | None = None
    for path in paths:
        here = dict(wanted)
        while True:
            try:
                part = read(path, positions | here)
                break
            except MissingColumnError as error:
                absent = [key for key, column in here.items() if column.column.strip() == error.column.strip()]
                if not absent:
                    raise
                missing = error
                for key in absent:
                    del here[key]
                if not here:
                    raise DataError(
                        "the file holds none of the variables", file=path, remedy="leave it out of [plane] file"
                    ) from error
        for key in here:
            if key in holder:
                raise DataError(
                    f"{wanted[key].column!r} ({key}) is in {holder[key].name!r} too",
                    file=path,
                    remedy="list only the files that are meant",
                )
            holder[key] = path
        parts.append(part)
        held.append(here)
    for key, column in wanted.items():
        if key not in holder:
            raise DataError(
                f"{column.column!r} ({key}) is in none of the {len(paths)} files",
                file=paths[0],
                remedy=None if missing is None else missing.remedy,
            )
    return _joined(parts, held, paths)


def _places(part: RawColumns) -> Array:
    return np.column_stack([part.values[key] for key in POSITIONS if key in part.values])


def _joined(parts: Sequence[RawColumns], held: Sequence[Mapping[str, Column]], paths: Sequence[Path]) -> RawColumns:
    from scipy.spatial import cKDTree

    first = _places(parts[0])
    if not np.isfinite(first).all():
        return parts[0]
    size = float(np.ptp(first, axis=0).max())
    values = dict(parts[0].values)
    index = np.arange(first.shape[0])
    source = {column.column: (parts[0], index, paths[0].name) for key, column in held[0].items()}
    for part, path, own in zip(parts[1:], paths[1:], held[1:], strict=True):
        places = _places(part)
        if places.shape != first.shape or not np.isfinite(places).all():
            raise DataError(
                f"the file holds {places.shape[0]} points and {paths[0].name!r} {first.shape[0]}",
                file=path,
                remedy="files that are joined need the same points",
            )
        distance, index = cKDTree(places).query(first)
        if distance.max() > _ONE_PLACE * size or np.unique(index).size != index.size:
            worst = int(distance.argmax())
            raise DataError(
                f"no point of the file stands where {parts[0].place(worst, 'the position')} of {paths[0].name!r} does",
                file=path,
                remedy="files that are joined need the same points, each once",
            )
        for key, array in part.values.items():
            if key not in POSITIONS:
                values[key] = array[index]
        source |= {column.column: (part, index, path.name) for column in own.values()}

    def place(i: int, column: str) -> str:
        part, own, name = source.get(column, (parts[0], np.arange(first.shape[0]), paths[0].name))
        return f"{name}, {part.place(int(own[i]), column)}"

    head = parts[0]
    return RawColumns(values, head.line, place, head.triangles, head.areas, head.how, head.averaged)
