"""The plane of a finished ledger, taken for the flow that a planned survey meets."""

from __future__ import annotations

import tomllib
import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array
from wakeledger.run.config import Survey, parse_survey
from wakeledger.run.config.plan_file import planned_tables
from wakeledger.run.config.quantities import parse_quantity
from wakeledger.run.config.stream import ModelTable, ReferenceTable
from wakeledger.run.config.tables import BoundaryTable
from wakeledger.run.planning.flow import VARIABLES, ExpectedFlow, with_coefficients
from wakeledger.run.planning.instrument import of_holes
from wakeledger.run.planning.of_ledger import declared_sizes, wake_box
from wakeledger.stream.reference import Reference

if TYPE_CHECKING:
    from scipy.interpolate import RectBivariateSpline

    from wakeledger.ledger.ledger import Ledger


def flow_of_ledger(path: Path) -> ExpectedFlow:
    """The plane of a finished ledger, taken for the truth.

    Parameters
    ----------
    path : Path
        The archive.

    Returns
    -------
    ExpectedFlow
        Its rows are the ledger's; what the chain gives of the plane is another matter.

    Raises
    ------
    DataError
        If the plane does not tell enough.
    """
    from wakeledger.ledger.archive import open_archive

    ledger = open_archive(path)
    tables = tomllib.loads(str(ledger.survey_text))
    plane = ledger.plane
    missing = [name for name in VARIABLES if name not in plane]
    if missing:
        raise DataError(
            f"its plane has no {', '.join(missing)}", file=path, remedy="plan from the ledger of an area survey"
        )
    return _of_plane(ledger, tables, path)


def _of_plane(ledger: Ledger, tables: Mapping[str, Any], path: Path) -> ExpectedFlow:
    plane = ledger.plane
    y, z = (np.asarray(plane[name].values, dtype=float) for name in ("y", "z"))
    zeros = {
        "total_pressure": float(ledger.reference["total_pressure"]),
        "static_pressure": float(ledger.reference["static_pressure"]),
    }
    fields = {name: np.asarray(plane[name].values, dtype=float) - zeros.get(name, 0.0) for name in VARIABLES}
    if not all(np.isfinite(field).all() for field in fields.values()):
        raise DataError("its plane has places without a value", file=path, remedy="plan from a loading")
    survey = parse_survey(str(ledger.survey_text), path)
    y0, y1, z0, z1 = wake_box(survey, plane, path)
    kept, left_out = planned_tables(tables)
    boundary = BoundaryTable.model_validate(kept["boundary"])
    model = ModelTable.model_validate(tables["model"])
    found = {row.name: row.value for row in ledger.rows}
    reference = ReferenceTable.model_validate(tables["reference"]).resolve()
    noises = _noise_of(survey, reference)
    splines = {name: _spline(y, z, field, noises.get(name, 0.0)) for name, field in fields.items()}
    # A reflected plane holds both sides, of which one is surveyed.
    own_y = y[y > -1e-9] if boundary.reflection == "y" else y
    own_z = z[z > -1e-9] if boundary.reflection == "z" else z
    return ExpectedFlow(
        state=lambda at_y, at_z: {name: spline.ev(at_z, at_y) for name, spline in splines.items()},
        values=with_coefficients(found, reference, model),
        box=(y0, y1, z0, z1),
        limits=(float(own_y[0]), float(y[-1]), float(own_z[0]), float(z[-1])),
        tables=kept,
        station=station_of(tables),
        notes=(
            f"The flow is the plane of {path.name}, "
            + (
                "smoothed as far as the noise that it declares allows; what is left of that noise is taken for flow, so"
                " that the plan is rather on the safe side."
                if noises
                else "as it is: it declares no noise of the crossflow and the total pressure; what it has is taken for"
                " flow."
            ),
            *(f"{note}, in {path.name}" for note in left_out),
        ),
        reflection=boundary.reflection,
        nearest=boundary.inboard_cut or 0.0,
        lines=(own_y, own_z),
    )


def _noise_of(survey: Survey, reference: Reference) -> dict[str, float]:
    """Noise of a plane's channels as its file declares it, by variable; empty where it does not."""
    sizes = declared_sizes(survey)
    if "hole_noise" in sizes:
        probe = of_holes(sizes["hole_noise"], reference)
        return {"v": probe.velocity, "w": probe.velocity, "total_pressure": probe.total_pressure,
                "static_pressure": probe.static_pressure}  # fmt: skip
    keys = {"v": "noise", "w": "noise", "total_pressure": "total_pressure_noise",
            "static_pressure": "static_pressure_noise"}  # fmt: skip
    return {name: sizes[key] for name, key in keys.items() if key in sizes}


def _spline(y: Array, z: Array, field: Array, noise: float) -> RectBivariateSpline:
    """The smoothest spline that lies within the noise of a field, or through it where that is not to be had."""
    from scipy.interpolate import RectBivariateSpline

    if noise > 0:
        with warnings.catch_warnings(record=True) as trouble:
            warnings.simplefilter("always")
            smooth = RectBivariateSpline(z, y, field, kx=3, ky=3, s=field.size * noise**2)
        if not trouble:
            return smooth
    return RectBivariateSpline(z, y, field, kx=3, ky=3, s=0)


def station_of(tables: Mapping[str, Any]) -> float:
    """Station of a survey's plane, m."""
    plane = tables["plane"]
    return parse_quantity((plane[0] if isinstance(plane, list) else plane)["station"], "m")
