"""A plan from nothing but a finished ledger: the same survey with more or less of everything."""

from __future__ import annotations

import hashlib
import math
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from wakeledger.core.errors import SurveyError
from wakeledger.ledger.archive import open_archive
from wakeledger.physics.fields.wake_region import GROW_CELLS
from wakeledger.run.config import Survey, parse_survey
from wakeledger.run.config.plan import FLOW, PlanTable
from wakeledger.run.config.plan_file import PlanRequest

#: Factors on the ledger's own spacing, and on the noise and accuracies it declares.
SPACINGS = (1, 2, 3)
FACTORS = (0.5, 1.0, 2.0)
#: Parts of the room between the wake and the edge of its window.
WINDOWS = (0.5, 1.0)
#: What sources of a survey file are called in ``[plan]``; parts of the dynamic pressure from parts of the speed.
_RANDOM: Mapping[str, str] = {
    "plane.w": "noise",
    "plane.total_pressure": "total_pressure_noise",
    "plane.static_pressure": "static_pressure_noise",
    "probe.p1": "hole_noise",
}
_SYSTEMATIC: Mapping[str, tuple[str, float]] = {
    "angle.pitch": ("angle_accuracy", 1.0),
    "reference.dynamic_pressure": ("reference_accuracy", 1.0),
    "reference.speed": ("reference_accuracy", 2.0),
    "reference.density": ("density_accuracy", 1.0),
}
_NETCDF = (b"\x89HDF\r\n\x1a\n", b"CDF")


def is_archive(path: Path) -> bool:
    """Whether a file is a ledger, told by its content."""
    try:
        with path.open("rb") as file:
            return file.read(8).startswith(_NETCDF)
    except OSError:
        return False


def request_of_ledger(path: Path) -> PlanRequest:
    """The plan that a ledger stands for: that of its survey file, else ranges about what it declares.

    Parameters
    ----------
    path : Path
        The archive.

    Returns
    -------
    PlanRequest

    Raises
    ------
    InputError
        If it is no ledger of an area survey, or says too little about its noise.
    """
    ledger = open_archive(path)
    text = str(ledger.survey_text)
    survey = parse_survey(text, path)
    if survey.section is not None:
        raise SurveyError(
            "it is the ledger of a line traverse",
            file=path,
            remedy="plan from the ledger of an area survey, or a loading",
        )
    digest = hashlib.sha256(path.read_bytes()).hexdigest()
    note = (
        f"The ranges are those of {path.name}: its spacing times 1, 2 and 3, its noise and accuracies times ½, 1 and 2"
    )
    if survey.plan is not None:
        keys = {key: value for key, value in tomllib.loads(text)["plan"].items() if key not in (*FLOW, "ledger")}
        note = f"The ranges are those of [plan] in the survey file kept in {path.name}"
    else:
        keys = _ranges(survey, ledger.plane, path)
    table = PlanTable.model_validate({**keys, "ledger": path.name})
    return PlanRequest(ledger.title, table, {}, math.nan, path, digest, (note,))


def _ranges(survey: Survey, plane: Any, path: Path) -> dict[str, Any]:
    """Ranges about what a survey declares."""
    y, z = (np.asarray(plane[name].values, dtype=float) for name in ("y", "z"))
    y0, y1, z0, z1 = wake_box(survey, plane, path)
    # On a reflection plane the window needs no room.
    sides = {"port": y0 - y[0], "starboard": y[-1] - y1, "lower": z0 - z[0], "upper": z[-1] - z1}
    reflection = None if survey.boundary is None else survey.boundary.reflection
    sides.pop({"y": "port", "z": "lower"}.get(reflection or "", ""), None)
    room = float(min(sides.values()))
    spacing = float(max(np.diff(y).min(), np.diff(z).min()))
    declared = declared_sizes(survey)
    if "hole_noise" not in declared and not {"noise", "total_pressure_noise"} <= set(declared):
        raise SurveyError(
            "its survey file does not declare the random noise of the crossflow and of the total pressure",
            file=path,
            place="[[uncertainty.source]]",
            remedy='write a plan file: [plan] with ledger = "..." and the ranges of noise, spacing and window',
        )
    if "hole_noise" in declared:
        declared = {key: size for key, size in declared.items() if key not in ("noise", "total_pressure_noise")}
    units = {"noise": "m/s", "angle_accuracy": "rad", "reference_accuracy": "%", "density_accuracy": "%"}
    factor = {"reference_accuracy": 100.0, "density_accuracy": 100.0}
    found: dict[str, Any] = {
        "spacing": [f"{k * spacing!r} m" for k in SPACINGS],
        "window": [f"{max(part * room, 1e-3 * spacing)!r} m" for part in WINDOWS],
        "repeats": [1, 2, 4],
    }
    for key, size in declared.items():
        found[key] = [f"{k * size * factor.get(key, 1.0)!r} {units.get(key, 'Pa')}" for k in FACTORS]
    return found


def wake_box(survey: Survey, plane: Any, path: Path) -> tuple[float, float, float, float]:
    """Where the wake is in a ledger's plane: what is left of its region without the ring that it was grown by.

    Parameters
    ----------
    survey : Survey
        Its file.
    plane : Dataset
        With ``wake_mask``.
    path : Path
        The archive, for messages.

    Returns
    -------
    tuple of float
        y and z of its port lower and its starboard upper corner, m; of the side surveyed, where the plane reflects.

    Raises
    ------
    SurveyError
        If it holds no wake.
    """
    mask = np.asarray(plane["wake_mask"].values, dtype=bool)
    if not mask.any():
        raise SurveyError("it holds no wake", file=path, remedy="plan from a loading")
    box = []
    reflection = None if survey.boundary is None else survey.boundary.reflection
    for axis, name in ((0, "y"), (1, "z")):
        places = np.asarray(plane[name].values, dtype=float)
        inside = places[mask.any(axis=axis)]
        if reflection == name:
            inside = inside[inside >= 0]
        grow = survey.wake.grow
        ring = GROW_CELLS * float(np.diff(places).min()) if grow is None else grow
        middle = float(inside[0] + inside[-1]) / 2
        box += [min(float(inside[0]) + ring, middle), max(float(inside[-1]) - ring, middle)]
        if reflection == name and name == "y":
            box[-2] = 0.0
    return box[0], box[1], box[2], box[3]


def declared_sizes(survey: Survey) -> dict[str, float]:
    """What a survey declares, by the keys of ``[plan]``: the root of the sum of squares of its sources.

    Parameters
    ----------
    survey : Survey
        Its file.

    Returns
    -------
    dict of str to float
        Standard uncertainties, SI; parts of the dynamic pressure and density. Without what it does not declare.
    """
    squares: dict[str, float] = {}
    reference = survey.reference.given()
    for source in survey.uncertainty.source:
        for name in source.applies_to:
            size, key = source.standard_uncertainty, None
            if source.effect == "random" and source.scale == "absolute":
                key = _RANDOM.get(name)
            elif source.effect == "per_row" and name == "plane.total_pressure" and source.scale == "absolute":
                key = "reference_drift"
            elif source.effect == "systematic" and name in _SYSTEMATIC:
                key, sensitivity = _SYSTEMATIC[name]
                if not source.relative and name.startswith("reference."):
                    size /= reference[name.split(".")[1]]
                size *= sensitivity
            if key is not None and size > 0:
                squares[key] = squares.get(key, 0.0) + size**2
    return {key: math.sqrt(square) for key, square in squares.items()}
