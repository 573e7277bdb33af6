"""What kind of file it is, told by its content and never by its name."""

from __future__ import annotations

import stat
from pathlib import Path

from wakeledger.core.errors import DataError

#: Bytes read to tell the format.
_HEAD = 4096
_HDF5 = b"\x89HDF\r\n\x1a\n"
_HDF5_OFFSETS = (0, 512, 1024, 2048)
#: What tells one kind of HDF5 from another, first found first.
_KINDS_OF_HDF5 = {
    b"CGNSLibraryVersion": "cgns",
    b"MATLAB_class": "matlab",
    b"VTKHDF": "vtk_hdf",
    b"_NCProperties": "netcdf",
    b"_Netcdf4": "netcdf",
    b"DIMENSION_SCALE": "netcdf",
}
_BLOCK = 1 << 22
#: What text never holds: control characters other than tab, newline, form feed, carriage return, end of file.
_CONTROL = bytes(set(range(32)) - {9, 10, 11, 12, 13, 26}) + b"\x7f"
_REMEDY = "write the plane as a delimited text table, netCDF, VTK, CGNS or MATLAB file"


def recognise(path: Path) -> str:
    """Tell the format of a data file by its content.

    Parameters
    ----------
    path : Path
        The file, or the folder of an OpenFOAM case.

    Returns
    -------
    str
        ``"table"``, ``"netcdf"``, ``"matlab"`` (of any version, and HDF5 of no other kind), ``"vtk_xml"``,
        ``"vtk_legacy"``, ``"vtk_hdf"``, ``"cgns"`` or ``"openfoam"``.

    Raises
    ------
    DataError
        If the file is missing, a directory that is no case, unreadable, empty, in a recognised format that is not read,
        or binary data of an unknown kind.
    """
    if _is_case(path):
        return "openfoam"
    head = _head(path)
    if not head.strip():
        raise DataError("the file is empty", file=path, remedy="give a file that holds the points of the plane")
    if head[:3] == b"CDF" and head[3:4] in (b"\x01", b"\x02", b"\x05"):
        return "netcdf"
    if any(head[offset : offset + 8] == _HDF5 for offset in _HDF5_OFFSETS):
        return _kind_of_hdf5(path)
    start = head.removeprefix(b"\xef\xbb\xbf").lstrip()
    if b"<VTKFile" in head:
        return "vtk_xml"
    if start.startswith(b"# vtk DataFile"):
        return "vtk_legacy"
    if head.startswith(b"MATLAB 5.0 MAT-file") or head[124:128] in (b"\x00\x01IM", b"\x01\x00MI"):
        return "matlab"
    other = _other_format(head)
    if other:
        raise DataError(f"this is {other}", file=path, remedy=_REMEDY)
    if head.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise DataError("the file is text in UTF-16 encoding", file=path, remedy="save it in UTF-8 encoding")
    if head.translate(None, _CONTROL) != head:
        raise DataError("the file holds binary data in no format that is known here", file=path, remedy=_REMEDY)
    return "table"


def _is_case(path: Path) -> bool:
    """Whether a path is an OpenFOAM case, its controlDict, or the empty file by which viewers open it."""
    try:
        if path.is_dir():
            return (path / "system" / "controlDict").is_file() or (path / "constant" / "polyMesh").is_dir()
        if not path.is_file():
            return False
        if path.stat().st_size == 0:
            return (path.parent / "system" / "controlDict").is_file()
        return path.name == "controlDict" and path.parent.name == "system" and b"FoamFile" in path.read_bytes()[:_HEAD]
    except (OSError, ValueError):
        return False


def is_stream(path: Path) -> bool:
    """Whether a path is a pipe or a terminal, which can be read only once; False where that cannot be told."""
    try:
        mode = path.stat().st_mode
    except (OSError, ValueError):
        return False
    return stat.S_ISFIFO(mode) or stat.S_ISCHR(mode)


def _head(path: Path) -> bytes:
    if is_stream(path):
        raise DataError("this is no regular file", file=path, remedy="write what it gives to a file, and name that")
    try:
        with path.open("rb") as stream:
            return stream.read(_HEAD)
    except FileNotFoundError:
        raise DataError(
            "there is no such file", file=path, remedy="check the path; it is relative to the survey file"
        ) from None
    except IsADirectoryError:
        raise DataError(
            "this is a directory, and no OpenFOAM case (which has system/controlDict)",
            file=path,
            remedy="give the file that holds the points of the plane",
        ) from None
    except (OSError, ValueError) as error:
        reason = (getattr(error, "strerror", None) or str(error)).lower()
        raise DataError(
            f"the file cannot be read ({reason})", file=path, remedy="check the path and its permissions"
        ) from None


def _kind_of_hdf5(path: Path) -> str:
    found = _marks_in(path)
    for mark, kind in _KINDS_OF_HDF5.items():
        if mark in found:
            return kind
    return "matlab"


def _marks_in(path: Path) -> set[bytes]:
    """Which marks of a kind of HDF5 a file holds anywhere; of a large file only a block at a time is in memory."""
    found: set[bytes] = set()
    overlap = max(map(len, _KINDS_OF_HDF5))
    with path.open("rb") as stream:
        end = b""
        while block := stream.read(_BLOCK):
            piece = end + block
            found |= {mark for mark in _KINDS_OF_HDF5 if mark not in found and mark in piece}
            end = piece[-overlap:]
    return found


def _other_format(head: bytes) -> str | None:
    if b"FoamFile" in head:
        return "a single file of an OpenFOAM case (give the case folder)"
    if b"CGNSLibraryVersion" in head:
        return "a CGNS file in the old layout (ADF; adf2hdf converts it)"
    for magic, kind in (
        (b"PK\x03\x04", "a zip archive or a spreadsheet workbook"),
        (b"\xd0\xcf\x11\xe0", "an old spreadsheet workbook"),
        (b"\x1f\x8b", "a gzip archive"),
        (b"BZh", "a bzip2 archive"),
        (b"\xfd7zXZ", "an xz archive"),
        (b"%PDF", "a PDF document"),
        (b"\x89PNG", "a PNG picture"),
        (b"#!TDV", "a binary Tecplot file"),
    ):
        if head.startswith(magic):
            return kind
    return None
