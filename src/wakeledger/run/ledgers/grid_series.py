"""One computed case on several grids: observed order and grid convergence index of far and near field."""

from __future__ import annotations

import math
from collections.abc import Sequence
from itertools import pairwise
from os import PathLike

from wakeledger.confidence.grid_convergence import (
    SAFETY_FACTOR,
    SAFETY_FACTOR_ASSUMED,
    assumed_convergence,
    cell_size,
    grid_convergence,
)
from wakeledger.core.errors import DataError, InputError
from wakeledger.ledger.archive import open_archive
from wakeledger.ledger.grid_series import FAR_FIELD, Grid, GridSeries, Series, counts_per_unit
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.rows import Comparison
from wakeledger.run import tables
from wakeledger.run.config import Survey
from wakeledger.run.ledgers.increment import declared_surveys

#: Scalars of model and stream that one case has alike on all grids, with the relative difference that is rounding.
_ALIKE = {
    **dict.fromkeys(("reference_area", "span", "mean_chord", "chord"), 1e-6),
    **dict.fromkeys(("speed", "density", "dynamic_pressure", "mach"), 1e-4),
}
#: Keys of ``[test]`` that one case has alike.
_CASE = ("configuration", "alpha", "beta")
_STATION_SLACK = 1e-4


def grid_series(
    ledgers: Sequence[Ledger | str | PathLike[str]],
    *,
    cells: Sequence[float],
    dimensions: int = 3,
    order: float | None = None,
    command: str = "",
) -> GridSeries:
    """Observed order and grid convergence index of every row, and of every value it is compared with.

    Parameters
    ----------
    ledgers : sequence of Ledger or path
        Ledgers of one computed case on several grids, or their archives, from coarse to fine or from fine to coarse.
    cells : sequence of float
        Number of cells of each grid of the flow solver, in the same order.
    dimensions : {2, 3}
        Dimensions in which the grids are refined.
    order : float, optional
        Order of the scheme, for two grids, which show none.
    command : str
        The command line, for the record.

    Returns
    -------
    GridSeries

    Raises
    ------
    InputError
        If there are too few grids, the numbers of cells do not fit, the same data come twice, or the ledgers are not of
        one case.
    DataError
        If an archive cannot be read, or the ledgers have no row in common.

    Notes
    -----
    I. B. Celik et al., J. Fluids Eng. 130 (2008) 078001, of the finest three grids
    (`wakeledger.confidence.grid_convergence`). The values that the ledgers are compared with are taken as the near
    field of the same solution.
    """
    given = list(ledgers)
    sizes = _sizes(len(given), cells, dimensions, order)
    opened = [one if isinstance(one, Ledger) else open_archive(one) for one in given]
    files = ["" if isinstance(one, Ledger) else str(one) for one in given]
    surveys = [declared_surveys(one, file) for one, file in zip(opened, files, strict=True)]
    _require_one_case(opened, surveys, files)
    at = sorted(range(len(opened)), key=lambda k: -sizes[k])
    runs = [opened[k] for k in at]
    h = [sizes[k] / min(sizes) for k in at]
    names = [row.name for row in runs[-1].rows if all(_has(run, row.name) for run in runs)]
    if not names:
        raise DataError("the ledgers have no row in common", remedy="reduce the planes of all grids alike")
    found: list[Series] = []
    for name in names:
        found.append(_far(runs, name, h, order))
        found += [_near(runs, line, h, order) for line in runs[-1].comparisons if line.row == name and _all(runs, line)]
    return GridSeries(
        grids=tuple(
            Grid(
                run.title,
                float(cells[k]),
                size,
                dict(run.test),
                files[k],
                dict(run.inputs),
                tuple(f"{x.name.replace('_', ' ')}: {x.message}" for x in run.checks if x.verdict == "fail"),
            )
            for k, run, size in zip(at, runs, h, strict=True)
        ),
        dimensions=dimensions,
        series=tuple(found),
        notes=_notes(runs, found, names, order),
        warnings=_warnings(runs),
        provenance=tables.provenance(command),
    )


def _sizes(number: int, cells: Sequence[float], dimensions: int, order: float | None) -> list[float]:
    """Representative cell sizes, in the order of the ledgers."""
    if number < 2:
        raise InputError(
            f"{number} ledger{'' if number == 1 else 's'} given" if number else "no ledger was given",
            remedy="give those of one case on at least three grids, or on two with the order of the scheme",
        )
    if dimensions not in (2, 3):
        raise InputError(f"the grids are refined in {dimensions} dimensions", remedy="2 and 3 are allowed")
    if len(cells) != number:
        raise InputError(
            f"{len(cells)} numbers of cells are given for {number} ledgers", remedy="give one for each, in their order"
        )
    for count in cells:
        if not (math.isfinite(count) and count > 0):
            raise InputError(
                f"{count:g} cells are no grid", remedy="give the number of cells of the flow solver's grid"
            )
    steps = [later - earlier for earlier, later in pairwise(cells)]
    if not (all(step > 0 for step in steps) or all(step < 0 for step in steps)):
        listed = ", ".join(f"{count:g}" for count in cells)
        raise InputError(
            f"the numbers of cells {listed} neither rise nor fall from ledger to ledger",
            remedy="give the ledgers from coarse to fine, and the numbers in the same order",
        )
    if number == 2 and order is None:
        raise InputError(
            "two grids show no order",
            remedy="give a third grid, or the order of the scheme (--order 2), which is then assumed",
        )
    if number > 2 and order is not None:
        raise InputError(
            f"an order of {order:g} is given with {number} grids, which show their own", remedy="leave it out"
        )
    if order is not None and not (math.isfinite(order) and order > 0):
        raise InputError(f"an order of {order:g} is given", remedy="give a positive one, 2 for most schemes")
    return [cell_size(count, dimensions=dimensions) for count in cells]


def _require_one_case(runs: Sequence[Ledger], surveys: Sequence[Sequence[Survey]], files: Sequence[str]) -> None:
    """Refuse the same solution twice, and ledgers of different cases."""
    seen: dict[str, int] = {}
    first, declared = runs[0], _declared(surveys[0])
    for k, (run, own, file) in enumerate(zip(runs, surveys, files, strict=True), 1):
        if run.repeats is not None:
            raise InputError(f"ledger {k} is a mean of runs", file=file or None, remedy="give the ledger of each grid")
        names = {name for survey in own for plane in survey.planes for name in plane.files}
        digests = {digest for name, digest in run.inputs.items() if name in names} or set(run.inputs.values())
        for digest in sorted(digests):
            if digest in seen:
                raise InputError(
                    f"ledger {k} is made from the same data as ledger {seen[digest]}",
                    file=file or None,
                    remedy="give each grid once, and look at what its survey file names",
                )
        seen |= dict.fromkeys(digests, k)
        if run.compressible != first.compressible:
            raise InputError(
                f"ledgers {k} and 1 were not reduced by the same relations (compressible or not)",
                file=file or None,
                remedy="write [reference] compressible alike in both, and reduce again",
            )
        for name, slack in _ALIKE.items():
            one, other = ({**each.model, **each.reference}.get(name, math.nan) for each in (first, run))
            if not (abs(one - other) <= slack * abs(one) or (math.isnan(one) and math.isnan(other))):
                raise InputError(
                    f"ledger {k} has {name} {other:g}, ledger 1 has {one:g}",
                    file=file or None,
                    remedy="a grid series is of one case; give ledgers of one model in one stream",
                )
        for what, text in _declared(own).items():
            if text != declared[what]:
                raise InputError(
                    f"ledger {k} has the {what} {text}, ledger 1 has {declared[what]}",
                    file=file or None,
                    remedy="reduce all grids alike",
                )
        stations = [[one.station for one in each.stations or (each,)] for each in (first, run)]
        if not _same_places(*stations):
            shown = [", ".join(f"{place:g} m" for place in places) for places in stations]
            raise InputError(
                f"ledger {k} is of the plane at {shown[1]}, ledger 1 of that at {shown[0]}",
                file=file or None,
                remedy="cut all grids at the same stations",
            )


def _declared(surveys: Sequence[Survey]) -> dict[str, str]:
    """What all grids must have been reduced with."""
    first = surveys[0]
    return {
        "boundary": str("none" if first.boundary is None else first.boundary.kind),
        "reflection": str("none" if first.boundary is None else first.boundary.reflection or "none"),
        "primary measurement": str(first.plane.primary),
    }


def _same_places(one: Sequence[float], other: Sequence[float]) -> bool:
    if len(one) != len(other):
        return False
    reach = max((abs(place) for place in one if math.isfinite(place)), default=0.0)
    return all(
        (math.isnan(a) and math.isnan(b)) or abs(a - b) <= _STATION_SLACK * reach
        for a, b in zip(one, other, strict=True)
    )


def _has(ledger: Ledger, name: str) -> bool:
    return any(row.name == name for row in ledger.rows)


def _compared(ledger: Ledger, line: Comparison) -> Comparison | None:
    return next((one for one in ledger.comparisons if (one.name, one.row) == (line.name, line.row)), None)


def _all(runs: Sequence[Ledger], line: Comparison) -> bool:
    return all(_compared(run, line) is not None for run in runs)


def _far(runs: Sequence[Ledger], name: str, sizes: Sequence[float], order: float | None) -> Series:
    row = runs[-1].row(name)
    values = [run.row(name).value for run in runs]
    reasons = [run.row(name).reason or "unknown" for run in runs]
    scale = counts_per_unit(name, row.value, row.coefficient)
    return _series(name, FAR_FIELD, row.unit, values, reasons, sizes, order, row.standard_uncertainty, scale)


def _near(runs: Sequence[Ledger], line: Comparison, sizes: Sequence[float], order: float | None) -> Series:
    row = runs[-1].row(line.row)
    values = [one.value for run in runs if (one := _compared(run, line)) is not None]
    scale = counts_per_unit(line.row, row.value, row.coefficient)
    reasons = ["it is not given"] * len(values)
    return _series(line.row, line.name, line.unit, values, reasons, sizes, order, line.standard_uncertainty, scale)


def _series(
    row: str,
    source: str,
    unit: str,
    values: Sequence[float],
    reasons: Sequence[str],
    sizes: Sequence[float],
    order: float | None,
    own: float,
    scale: float,
) -> Series:
    used = slice(-3, None)
    unknown = [k for k in range(len(values))[used] if not math.isfinite(values[k])]
    found = reason = None
    if unknown:
        alike: dict[str, list[str]] = {}
        for k in unknown:
            alike.setdefault(reasons[k], []).append(str(k + 1))
        reason = "; ".join(
            f"unknown on grid{'s' if len(at) > 1 else ''} {', '.join(at)}: {why}" for why, at in alike.items()
        )
    elif order is not None:
        found = assumed_convergence(values, sizes, order=order)
    else:
        found = grid_convergence(values[used], sizes[used])
    return Series(row, source, unit, tuple(map(float, values)), found, float(own), scale, reason)


def _notes(
    runs: Sequence[Ledger], found: Sequence[Series], names: Sequence[str], order: float | None
) -> tuple[str, ...]:
    notes = []
    if order is not None:
        notes.append(
            f"Two grids show no order: {order:g} is assumed, and the index has the factor {SAFETY_FACTOR_ASSUMED:g}"
            f" instead of {SAFETY_FACTOR:g}."
        )
    if len(runs) > 3:
        notes.append(f"Of the {len(runs)} grids the finest three give order, extrapolated value and index.")
    if all(one.source == FAR_FIELD for one in found):
        notes.append(
            "No value that all ledgers are compared with: this is the far field alone. [[compare]] in each survey file"
            " gives the near field."
        )
    partly = dict.fromkeys(
        f"{line.name} ({line.row.replace('_', ' ')})"
        for run in runs
        for line in run.comparisons
        if line.row in names and not _all(runs, line)
    )
    if partly:
        notes.append(f"Not compared with in all ledgers, and left out: {', '.join(partly)}.")
    left = dict.fromkeys(row.name.replace("_", " ") for run in runs for row in run.rows if row.name not in names)
    if left:
        notes.append(f"Not in all ledgers, and left out: {', '.join(left)}.")
    return tuple(notes)


def _warnings(runs: Sequence[Ledger]) -> tuple[str, ...]:
    """Statements of ``[test]`` that are not those of one case."""
    found = []
    for key in _CASE:
        texts = dict.fromkeys(run.test[key] for run in runs if key in run.test)
        if len(texts) > 1:
            found.append(f"[test] {key} is {' and '.join(texts)}: a grid series is of one case.")
    return tuple(found)
