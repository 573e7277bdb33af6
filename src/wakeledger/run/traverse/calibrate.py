"""From a probe file to a calibration."""

from __future__ import annotations

import dataclasses
import hashlib
from pathlib import Path

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.intake.probe.calibration import Calibration, CalibrationTable, Level, calibrate
from wakeledger.intake.probe.directions import angles, direction_from_cone
from wakeledger.run.config.probe_file import ProbeFile, read_probe_file

#: Largest size of each angle, rad.
_LARGEST = {"pitch": np.pi, "yaw": 0.5 * np.pi, "cone": np.pi, "roll": 2.0 * np.pi}


def calibrate_probe(path: str | Path, *, command: str = "") -> Calibration:
    """Calibrate a probe from its probe file.

    Parameters
    ----------
    path : path-like
        The probe file (TOML).
    command : str, optional
        The command line, for the provenance.

    Returns
    -------
    Calibration

    Raises
    ------
    InputError
        If the probe file, the table or what it holds is wrong.
    """
    from wakeledger.run.tables import provenance

    probe = read_probe_file(path)
    table = read_calibration_table(probe)
    digest = hashlib.sha256(probe.file.read_bytes()).hexdigest()
    return dataclasses.replace(
        calibrate(table, title=probe.title),
        text=probe.text,
        inputs={probe.path.name: probe.sha256, probe.data.file: digest},
        provenance=provenance(command),
    )


def load_calibration(path: str | Path) -> Calibration:
    """A calibration from its probe file, or from the file that ``wakeledger calibrate`` wrote.

    Parameters
    ----------
    path : path-like
        Told apart by content.

    Returns
    -------
    Calibration

    Raises
    ------
    InputError
        If anything about the file, or what it names, is wrong.
    """
    path = Path(path)
    try:
        with path.open("rb") as file:
            stored = file.read(8) == b"\x89HDF\r\n\x1a\n"
    except OSError:
        stored = False
    if stored:
        from wakeledger.intake.probe.stored import read_calibration

        return read_calibration(path)
    return calibrate_probe(path)


def read_calibration_table(probe: ProbeFile) -> CalibrationTable:
    """Read the table that a probe file names.

    Parameters
    ----------
    probe : ProbeFile
        The probe file.

    Returns
    -------
    CalibrationTable
        In SI, in file order, with every line of the file.

    Raises
    ------
    DataError
        If the table cannot be read, or an angle is impossible.
    """
    from wakeledger.intake.readers import recognise
    from wakeledger.intake.readers.netcdf import read_netcdf
    from wakeledger.intake.readers.table import read_table

    columns = dict(probe.columns)
    kind = recognise(probe.file)
    if kind not in {"table", "netcdf"}:
        raise DataError(
            "a calibration is read from tables and netCDF only", file=probe.file, remedy="write it as one of these"
        )
    raw = read_table(probe.file, columns) if kind == "table" else read_netcdf(probe.file, columns)
    values = {}
    for name, column in columns.items():
        numbers = raw.values[name]
        infinite = np.flatnonzero(np.isinf(numbers))
        if infinite.size:
            raise DataError(
                f"an infinite value ({name})",
                file=probe.file,
                place=raw.place(int(infinite[0]), column.column),
                remedy="leave the cell empty if the value is missing",
            )
        values[name] = column.scale * numbers + column.offset
    for name, most in _LARGEST.items():
        wrong = np.flatnonzero(np.abs(values.get(name, np.zeros(1))) > most * (1.0 + 1e-9))
        if wrong.size:
            raise DataError(
                f"{name} is {np.degrees(values[name][wrong[0]]):g} deg",
                file=probe.file,
                place=raw.place(int(wrong[0]), columns[name].column),
                remedy=f"{name} lies within +-{np.degrees(most):g} deg; check its column and unit",
            )
    if "cone" in values:
        pitch, yaw = angles(direction_from_cone(values["cone"], values["roll"]))
    else:
        pitch, yaw = values["pitch"], values["yaw"]
    level_name: Level | None = "mach" if "mach" in values else "reynolds" if "reynolds" in values else None
    return CalibrationTable(
        pitch=pitch,
        yaw=yaw,
        holes=np.stack([values[f"p{number}"] for number in range(1, probe.holes + 1)]),
        total=values["total_pressure"],
        static=values["static_pressure"],
        line=raw.line,
        source=str(probe.file),
        level=None if level_name is None else values[level_name],
        level_name=level_name,
    )
