"""Opening a file or case folder of computed flow: the blocks in it, and which files those rest on."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.core.errors import DataError, InputError
from wakeledger.intake.readers.cfd.package import caught_messages, damaged, optional_package

#: What each kind of file is, for messages.
KINDS = {
    "vtk_xml": "a VTK XML file",
    "vtk_legacy": "a legacy VTK file",
    "vtk_hdf": "a VTK file (HDF5)",
    "cgns": "a CGNS file (HDF5)",
    "openfoam": "an OpenFOAM case",
}
_XML_TYPES = {
    "PolyData": ".vtp",
    "UnstructuredGrid": ".vtu",
    "StructuredGrid": ".vts",
    "RectilinearGrid": ".vtr",
    "ImageData": ".vti",
    "vtkMultiBlockDataSet": ".vtm",
    "vtkPartitionedDataSet": ".vtpd",
    "PUnstructuredGrid": ".pvtu",
    "PRectilinearGrid": ".pvtr",
    "PImageData": ".pvti",
}
_TYPE = re.compile(rb"<VTKFile\b[^>]*?\btype\s*=\s*[\"'](\w+)[\"']", re.DOTALL)
_PIECE = re.compile(rb"\b(?:file|Source)\s*=\s*[\"']([^\"']+)[\"']")


def open_blocks(path: Path, kind: str, time: float | None) -> list[Any]:
    """The blocks of a mesh.

    Parameters
    ----------
    path : Path
        File or case folder.
    kind : str
        A key of `KINDS`.
    time : float or None
        Instant of a case; None for the latest.

    Returns
    -------
    list of datasets
        Those that hold points.

    Raises
    ------
    DataError
        If the file is damaged or holds no points, or the instant is not there.
    MissingPackageError
        If the package that reads it is not installed.
    """
    pyvista = optional_package("pyvista", KINDS[kind], path)
    if time is not None and kind != "openfoam":
        raise DataError(
            f"time is given, and this is {KINDS[kind]}, which holds one instant", file=path, remedy="leave time out"
        )
    try:
        with caught_messages(KINDS[kind], path):
            read = _read(pyvista, path, kind, time)
    except (InputError, MemoryError):
        raise
    except Exception as error:  # whatever a damaged file sets off in the package
        raise damaged(str(error) or type(error).__name__, KINDS[kind], path) from error
    blocks = [block for block in _leaves(read) if block.n_points]
    if not blocks:
        raise DataError("the file holds no points", file=path, remedy="write the plane or the volume with its fields")
    return blocks


def _read(pyvista: Any, path: Path, kind: str, time: float | None) -> Any:
    if kind == "openfoam":
        return _read_case(pyvista, case_folder(path), time)
    if kind == "cgns":
        return _read_cgns(pyvista, path)
    extension = {"vtk_legacy": ".vtk", "vtk_hdf": ".vtkhdf"}.get(kind) or _xml_extension(path)
    return pyvista.get_reader(str(path), force_ext=extension).read()


def _leaves(block: Any) -> Iterator[Any]:
    if block is None:
        return
    if hasattr(block, "n_points"):
        if hasattr(block, "GetPoints") or hasattr(block, "dimensions"):
            yield block
        return
    if hasattr(block, "n_blocks") or hasattr(block, "n_partitions"):
        for index in range(len(block)):
            yield from _leaves(block[index])
        return
    raise DataError("the file holds no mesh", remedy="write the plane or the volume with its fields")


def _xml_extension(path: Path) -> str:
    with path.open("rb") as stream:
        found = _TYPE.search(stream.read(4096))
    kind = found[1].decode() if found else "nothing"
    if kind not in _XML_TYPES:
        raise DataError(
            f"this VTK XML file holds {kind}", file=path, remedy=f"write one of {', '.join(sorted(_XML_TYPES))}"
        )
    return _XML_TYPES[kind]


def _read_cgns(pyvista: Any, path: Path) -> Any:
    reader = pyvista.get_reader(str(path), force_ext=".cgns")
    reader.enable_all_bases()
    reader.enable_all_point_arrays()
    reader.enable_all_cell_arrays()
    reader.load_boundary_patch = False
    return reader.read()


def case_folder(path: Path) -> Path:
    """The case that a folder, a file in it, or its controlDict means."""
    if path.is_dir():
        return path
    return path.parent.parent if path.parent.name == "system" else path.parent


def _decomposed(case: Path) -> bool:
    return (case / "processor0").is_dir() and not (case / "constant" / "polyMesh").is_dir()


def _read_case(pyvista: Any, case: Path, time: float | None) -> Any:
    control = case / "system" / "controlDict"
    if not control.is_file():
        raise DataError(
            "the case has no system/controlDict", file=case, remedy="give the case folder with system and constant"
        )
    reader = pyvista.POpenFOAMReader(str(control))
    reader.case_type = "decomposed" if _decomposed(case) else "reconstructed"
    reader.cell_to_point_creation = False
    if hasattr(reader.reader, "SetDecomposePolyhedra"):
        # Later versions keep polyhedra whole without being told.
        reader.decompose_polyhedra = False
    times = np.asarray(reader.time_values, dtype=float)
    if not times.size:
        raise DataError("the case holds no instant", file=case, remedy="give a case with a folder of results")
    chosen = times.size - 1 if time is None else int(np.abs(times - time).argmin())
    if time is not None and abs(times[chosen] - time) > 1e-6 * max(abs(time), float(np.ptp(times))):
        listed = ", ".join(f"{value:g}" for value in times[:20])
        raise DataError(
            f"the case holds no instant {time:g}", file=case, place="[plane] time", remedy=f"it has {listed}"
        )
    reader.set_active_time_point(chosen)
    reader.enable_all_cell_arrays()
    reader.disable_all_patch_arrays()
    if "internalMesh" not in reader.patch_array_names:
        raise DataError("the case holds no internal mesh", file=case, remedy="give a case with constant/polyMesh")
    reader.enable_patch_array("internalMesh")
    return reader.read()


def files_of(path: Path, kind: str) -> Sequence[Path]:
    """Every file that reading one rests on.

    Parameters
    ----------
    path : Path
        File or case folder.
    kind : str
        As `wakeledger.intake.readers.recognise.recognise` has it.

    Returns
    -------
    sequence of Path
        In a fixed order.
    """
    if kind == "openfoam":
        case = case_folder(path)
        roots = sorted(case.glob("processor*")) if _decomposed(case) else [case]
        found = [case / "system" / "controlDict"]
        for root in roots:
            found += sorted((root / "constant" / "polyMesh").glob("*"))
            instants = [folder for folder in root.iterdir() if folder.is_dir() and _is_number(folder.name)]
            for folder in sorted(instants, key=lambda folder: float(folder.name)):
                found += sorted(file for file in folder.rglob("*") if file.is_file())
        return [file for file in found if file.is_file()]
    if kind == "vtk_xml":
        with path.open("rb") as stream:
            head = stream.read(1 << 16)
        found_type = _TYPE.search(head)
        if found_type and (found_type[1].startswith((b"vtk", b"P")) and found_type[1] != b"PolyData"):
            pieces = [path.parent / name.decode() for name in _PIECE.findall(path.read_bytes())]
            return [path, *(piece for piece in pieces if piece.is_file())]
    return [path]


def _is_number(name: str) -> bool:
    try:
        float(name)
    except ValueError:
        return False
    return True
