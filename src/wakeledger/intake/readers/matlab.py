"""MATLAB files of version 5 and 7.3, and plain HDF5: arrays by name, fields of structures by ``structure.field``."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.core.points import Column
from wakeledger.intake.readers.cfd.package import optional_package
from wakeledger.intake.readers.columns import Cut, RawColumns, missing_column
from wakeledger.intake.readers.fields import as_points


def read_matlab(path: Path, columns: Mapping[str, Column], cut: Cut | None = None) -> RawColumns:
    """Read the named arrays of a MATLAB or HDF5 file as points.

    Parameters
    ----------
    path : Path
        The file; which of the two it is, is told by its content.
    columns : mapping of str to Column
        What to read, by key; a column is the name of an array, ``data.U`` or ``data/U`` inside a structure or group.
        The key ``velocity`` is an array with one dimension of length 3.
    cut : Cut, optional
        Where a volume is cut.

    Returns
    -------
    RawColumns
        Points in the order of the arrays, in the file's units. Arrays of one shape are points, planes or volumes; those
        with a single row or column run along the dimension of their length.

    Raises
    ------
    DataError
        If the file is damaged, an array is missing or not numeric, or their shapes do not fit.
    MissingPackageError
        If the package that reads version 7.3 is not installed.
    """
    with path.open("rb") as stream:
        head = stream.read(4096)
    hdf = any(head[offset : offset + 8] == b"\x89HDF\r\n\x1a\n" for offset in (0, 512, 1024, 2048))
    arrays = _of_hdf(path) if hdf else _of_version_5(path)
    try:
        wanted = {key: _wanted(column.column.strip(), arrays) for key, column in columns.items()}
        return as_points(_named_dimensions(wanted), columns, cut, path, what="array")
    except DataError as error:
        raise error.located(file=path) from None


def _of_version_5(path: Path) -> dict[str, Any]:
    from scipy.io import loadmat

    try:
        content = loadmat(path, squeeze_me=False, struct_as_record=False)
    except NotImplementedError as error:
        raise DataError(
            f"the file is of a MATLAB version that is not read ({error})", file=path, remedy="save it as version 7"
        ) from None
    except Exception as error:  # whatever a damaged file sets off in the package
        raise DataError(
            f"the file begins like a MATLAB file but cannot be read ({' '.join(str(error).split())[:120]})",
            file=path,
            remedy="write the file again",
        ) from None
    return dict(_fields(content, ""))


def _fields(content: Mapping[str, Any], prefix: str) -> Iterator[tuple[str, Any]]:
    for name, value in content.items():
        if name.startswith("__"):
            continue
        inner = value.flat[0] if isinstance(value, np.ndarray) and value.dtype == object and value.size == 1 else value
        if hasattr(inner, "_fieldnames"):
            yield from _fields({field: getattr(inner, field) for field in inner._fieldnames}, f"{prefix}{name}.")
        else:
            yield prefix + name, inner


def _of_hdf(path: Path) -> dict[str, Any]:
    h5py = optional_package("h5py", "a MATLAB 7.3 or HDF5 file", path)
    arrays: dict[str, Any] = {}

    def keep(name: str, entry: Any) -> None:
        if isinstance(entry, h5py.Dataset) and not name.startswith("#") and entry.dtype.kind in "iufb":
            # MATLAB writes its first dimension last; an empty array is written as its dimensions.
            matlab = "MATLAB_class" in entry.attrs
            empty = matlab and "MATLAB_empty" in entry.attrs
            array = np.zeros(0) if empty else entry[()]
            arrays[name.replace("/", ".")] = array.T if matlab else array

    try:
        with h5py.File(path, "r") as file:
            file.visititems(keep)
    except (OSError, RuntimeError, ValueError) as error:
        raise DataError(
            f"this begins like an HDF5 file but cannot be read ({' '.join(str(error).split())[:120]})",
            file=path,
            remedy="write it again, or as netCDF or a table",
        ) from None
    return arrays


def _wanted(name: str, arrays: Mapping[str, Any]) -> Array:
    found = arrays.get(name.replace("/", "."))
    if found is None:
        raise missing_column(name, list(arrays), what="array")
    array = np.asarray(found)
    if array.dtype.kind not in "iufb":
        raise DataError(
            "the array does not hold real numbers", place=f"array {name!r}", remedy="name an array of numbers"
        )
    if not array.size:
        raise DataError(
            "the array is empty", place=f"array {name!r}", remedy="give a file that holds the points of the plane"
        )
    return array.astype(float)


def _named_dimensions(arrays: Mapping[str, Array]) -> dict[str, tuple[tuple[str, ...], Array]]:
    """Arrays with their dimensions named after their place in the largest array, lines by their length."""
    squeezed = {key: np.squeeze(array) for key, array in arrays.items()}
    vectors = {key for key in squeezed if key.removeprefix("std.") == "velocity"}
    fields = [array for key, array in squeezed.items() if key not in vectors]
    largest = max(fields, key=lambda array: (array.ndim, array.size)).shape if fields else ()
    named: dict[str, tuple[tuple[str, ...], Array]] = {}
    for key, array in squeezed.items():
        shape = array.shape
        if key in vectors:
            axis = next((k for k in (array.ndim - 1, 0) if array.ndim and shape[k] == 3), None)
            if axis is not None:
                rest = tuple(length for k, length in enumerate(shape) if k != axis)
                own = _dimensions(key, rest, largest, arrays[key].shape)
                named[key] = ((*own[:axis], "component", *own[axis:]), array)
                continue
        named[key] = (_dimensions(key, shape, largest, arrays[key].shape), array)
    return named


def _dimensions(
    key: str, shape: tuple[int, ...], largest: tuple[int, ...], written: tuple[int, ...]
) -> tuple[str, ...]:
    if shape == largest or not shape:
        return tuple(f"dimension {k + 1}" for k in range(len(shape)))
    if len(shape) == 1:
        fitting = [k for k, length in enumerate(largest) if length == shape[0]]
        if len(fitting) == 1:
            return (f"dimension {fitting[0] + 1}",)
        if len(fitting) > 1 and len(largest) == 2:
            # A column runs down the rows of a square array, a row along its columns.
            return ("dimension 1",) if written[0] == shape[0] else ("dimension 2",)
    raise DataError(
        f"the array of {key} has shape {written}, and the largest one {largest}",
        remedy="give all arrays in one shape, or positions as one row and one column",
    )
