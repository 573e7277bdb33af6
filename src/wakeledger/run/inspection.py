"""A survey looked at before it is reduced: whether it is good and complete, and one may move on."""

from __future__ import annotations

import math

import numpy as np

from wakeledger.confidence.noise import estimate_noise
from wakeledger.core.flags import decode
from wakeledger.core.grid import Array
from wakeledger.core.names import VARIABLES
from wakeledger.ledger.inspection import ChannelSummary, EdgeState, Inspection
from wakeledger.ledger.rows import Check
from wakeledger.run import tables
from wakeledger.run.chain import Chain, Reduction
from wakeledger.run.checks import EDGE_CELLS, Facts, all_checks
from wakeledger.run.gridded import Gridded, core_spacings
from wakeledger.run.load import SurveyInput

#: Checks whose value needs the noise bias or a reduction's uncertainty; they are left to `reduce`.
_LATER = frozenset({"noise_bias"})


def inspect_plane(survey: SurveyInput, gridded: Gridded) -> Inspection:
    """What can be said of an area survey from its grid and one pass through the chain.

    Parameters
    ----------
    survey : SurveyInput
        The survey.
    gridded : Gridded
        It on its grid.

    Returns
    -------
    Inspection
    """
    chain = gridded.chain
    nominal = chain.reduce(geometric=False)
    vortices = gridded.vortices.vortices
    facts = Facts(
        vortices=vortices,
        raw_spacing=max(chain.gridding.raw_spacing),
        filled=chain.gridding.filled,
        bias=math.nan,
        loss_zero_uncertainty=math.nan,
        spacings=core_spacings(chain, vortices),
    )
    notes = (*survey.survey.notes(), *tables.notes(survey, chain, nominal, gridded.state))
    gridding, grid = chain.gridding, chain.gridding.grid
    checks = tuple(check for check in all_checks(nominal, facts) if check.name not in _LATER)
    return Inspection(
        title=survey.survey.title,
        source=survey.points.source,
        points=survey.points.n,
        arrangement={
            "uniform": "tensor grid, uniform",
            "tensor": "tensor grid, uneven lines",
            "scattered": "scattered",
        }[gridding.kind],
        shape=(grid.ny, grid.nz),
        spacing=(grid.dy, grid.dz),
        window=(float(grid.y[0]), float(grid.y[-1]), float(grid.z[0]), float(grid.z[-1])),
        coverage=1.0 - gridding.filled_fraction,
        station=chain.settings.station,
        flags=decode(gridding.flag),
        channels=_channels(chain, nominal),
        edges=_edges(nominal),
        checks=checks,
        recommendations=recommendations(checks),
        notes=notes,
        reference=tables.reference_scalars(nominal.reference),
        test=survey.survey.test.given(),
    )


def _channels(chain: Chain, nominal: Reduction) -> tuple[ChannelSummary, ...]:
    found = []
    outer_only = nominal.region.mask | chain.gridding.filled
    for name, channel in chain.points.channels.items():
        values = channel.values
        finite = values[np.isfinite(values)]
        noise = math.nan
        if chain.gridding.kind == "uniform" and finite.size:
            noise = estimate_noise(chain.gridding.apply(values), mask=outer_only).standard_deviation
        unit = "1" if channel.normalised_by else VARIABLES[name].unit if name in VARIABLES else "1"
        low, high = (float(finite.min()), float(finite.max())) if finite.size else (math.nan, math.nan)
        found.append(ChannelSummary(name, unit, low, high, noise, int(values.size - finite.size)))
    return tuple(found)


def _edges(nominal: Reduction) -> tuple[EdgeState, ...]:
    """Largest smoothed signal along each edge inside the wake region: noise alone does not count."""
    mask = nominal.region.mask
    loss = np.where(mask, nominal.reference.total_pressure - nominal.flow.total_pressure, 0.0)
    vorticity = np.where(mask, np.abs(nominal.vorticity), 0.0)
    peak = float(vorticity.max())
    q = nominal.reference.dynamic_pressure

    def strips(field: Array) -> tuple[tuple[str, Array], ...]:
        n = EDGE_CELLS
        return (
            ("port", field[:, :n]),
            ("starboard", field[:, -n:]),
            ("lower", field[:n]),
            ("upper", field[-n:]),
        )

    return tuple(
        EdgeState(side, float(lost.max()) / q, float(turning.max()) / peak if peak > 0 else 0.0)
        for (side, lost), (_, turning) in zip(strips(loss), strips(vorticity), strict=True)
    )


def recommendations(checks: tuple[Check, ...]) -> tuple[str, ...]:
    """What to do about the checks that did not pass, the failed ones first."""
    wrong = [check for check in checks if check.verdict in ("warn", "fail")]
    if not wrong:
        return ("The survey is complete and encloses its wake: it may be reduced, and the next point taken.",)
    return tuple(check.message for check in sorted(wrong, key=lambda check: check.verdict != "fail"))
