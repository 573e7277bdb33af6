"""Errors of points that two surveys are said to share: what is said of them, and whether the data bear it out."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from wakeledger.confidence.noise import estimate_noise
from wakeledger.confidence.point_errors import PointErrors
from wakeledger.core.plane import grid_of
from wakeledger.core.traverse import axis_of
from wakeledger.ledger.cancellation import Difference
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.plane_difference import same_places
from wakeledger.run.config import Survey

#: Share of the expected fall of the noise from both planes to their difference that must be seen.
_SEEN = 0.5
#: Shared errors below this share of the noise of both planes are too small to be looked for.
_LOOKED_FOR = 0.2


def shared_points_notes(difference: Difference) -> list[str]:
    """What it means that errors of single points or rows cancel.

    Parameters
    ----------
    difference : Difference
        Of two ledgers.

    Returns
    -------
    list of str
        A sentence for each source.
    """
    cancelled = {(one.source.removesuffix(" (left)"), one.shared_id) for one in _left(difference)}
    return [
        f"{name!r} has an error for each point or row; by its shared_id {identity!r} A and B have the very same ones at"
        " the same points, which cancel. Noise is no such error: it must not have a shared_id."
        for name, identity in sorted(cancelled)
    ]


def unshared_points(
    a: Ledger, b: Ledger, surveys_a: Sequence[Survey], surveys_b: Sequence[Survey], difference: Difference
) -> list[str]:
    """Sources whose errors of points cancel by their identity, though the data of the two surveys speak against it.

    Parameters
    ----------
    a, b : Ledger
        The ledgers.
    surveys_a, surveys_b : sequence of Survey
        Their survey files.
    difference : Difference
        Of their contributions.

    Returns
    -------
    list of str
        A sentence for each.

    Notes
    -----
    Errors s that both planes share and noise n_A, n_B of their own make s_A² = s² + n_A² and s_B² = s² + n_B², and of
    their difference n_A² + n_B². All three are seen outside the wakes, in differences of sixth order. Where less than
    half of 2s² is missing in the difference, the errors are not the same. Told only of errors of single points of a
    channel of the plane, with a size in its unit, on planes whose grids are the same.
    """
    planes = (a.plane, b.plane)
    if any(axis_of(plane) is not None for plane in planes):
        return []
    grids = [grid_of(plane) for plane in planes]
    if not (same_places(grids[0].y, grids[1].y) and same_places(grids[0].z, grids[1].z)):
        return []
    outside = [plane["wake_mask"].values != 0 for plane in planes if "wake_mask" in plane]
    mask = np.any(outside, axis=0) if outside else None
    declared = {source.name: source for survey in (*surveys_b, *surveys_a) for source in survey.uncertainty.source}
    found = []
    for one in _left(difference):
        name, channel = one.source.removesuffix(" (left)"), one.input.removeprefix("plane.")
        source = declared.get(name)
        if source is None or one.effect != "random" or source.scale != "absolute" or one.correlation_length is not None:
            continue
        if any(channel not in plane for plane in planes):
            continue
        fields = [np.asarray(plane[channel].values, dtype=float) for plane in planes]
        both = sum(estimate_noise(field, mask=mask).standard_deviation ** 2 for field in fields)
        left = estimate_noise(fields[1] - fields[0], mask=mask).standard_deviation
        expected = 2 * source.standard_uncertainty**2
        if not (math.isfinite(both + left) and expected > _LOOKED_FOR * both):
            continue
        if both - left**2 < _SEEN * expected:
            found.append(
                f"The errors of {name!r} ({one.input}) are said to be the same in A and B (shared_id"
                f" {one.shared_id!r}), but the noise of B − A is {left:.2g}, that of A and B together"
                f" {math.sqrt(both):.2g} in its unit: they are not the same. Noise must not have a shared_id; the"
                " uncertainty of B − A is too small."
            )
    return found


def _left(difference: Difference) -> list[PointErrors]:
    return [one for one in difference.points if one.source.endswith(" (left)")]
