"""The measuring axes turned so that the outer flow has, on average, the crossflow of the wake and no other."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from wakeledger.confidence.sources import Source
from wakeledger.core.errors import DataError
from wakeledger.core.grid import Array, UniformGrid
from wakeledger.core.rotation import rotation_matrix
from wakeledger.intake.probe.misalignment import from_outer_flow
from wakeledger.intake.probe.mounting import TURN_INPUTS, Turn
from wakeledger.intake.probe.traverse import MISALIGNMENT, Traverse, correction_input
from wakeledger.physics.fields.outer_flow import LEAST_SHARE, induced_crossflow, outer_flow
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.config.tables import ProbeTable
from wakeledger.run.load import SurveyInput
from wakeledger.run.traverse.roll_pair import turn_text
from wakeledger.run.traverse.traverse import RawSurvey

#: Once with the wake as it was read, once with it as it is then.
_ROUNDS = 2
_FEWEST_ROWS = 6


def aligned(survey: SurveyInput, chain: Chain, first: Reduction, raw: RawSurvey) -> RawSurvey:
    """The same traverse with its axes turned where the survey file asks for it.

    Parameters
    ----------
    survey : SurveyInput
        The survey.
    chain : Chain
        It on its grid.
    first : Reduction
        Its reduction, with the axes as stated.
    raw : RawSurvey
        What a traverse of hole pressures adds.

    Returns
    -------
    RawSurvey
        Turned, with a source of its own and a sentence; or as it was, with a note why.
    """
    tables = _tables(survey)
    asked = [k for k, table in enumerate(tables) if table.misalignment == "outer_flow"]
    if not asked:
        return raw
    if np.mean(~first.region.mask) < LEAST_SHARE:
        why = "too little outer flow is left"
        return replace(raw, notes=(*raw.notes, f"The probe's misalignment was not taken out: {why}."))
    traverse, texts = raw.traverse, []
    for _ in range(_ROUNDS):
        try:
            turns = {k: _turn(chain, first, k, tables[k], several=len(tables) > 1) for k in asked}
        except DataError as error:
            why = f"{error.found}; too few of a probe's points lie in the outer flow"
            return replace(raw, notes=(*raw.notes, f"The probe's misalignment was not taken out: {why}."))
        traverse = _with_turns(raw.traverse, turns)
        first = replace(chain, traverse=traverse).reduce(estimates=False)
    texts = [(f"tube {tables[k].tube} " if len(tables) > 1 else "") + turn_text(turn) for k, turn in turns.items()]
    said = {
        MISALIGNMENT: f"The measuring axes are turned against those stated by {'; '.join(texts)}, as the outer flow"
        " shows (together with any inclination of the stream); it was taken out"
    }
    source = Source("misalignment of the probe (correction)", traverse.turn_inputs, "systematic", 1.0)
    return replace(raw, traverse=traverse, said={**raw.said, **said}, sources=(*raw.sources, source))


def _tables(survey: SurveyInput) -> tuple[ProbeTable, ...]:
    """The probes in the flow, in the order of the tubes of the traverse."""
    return survey.survey.probe[:1] if survey.rake is None else survey.rake.tables


def _with_turns(traverse: Traverse, turns: dict[int, Turn]) -> Traverse:
    tubes = tuple(tube.with_turn(turns[k]) if k in turns else tube for k, tube in enumerate(traverse.tubes))
    return replace(traverse, tubes=tubes)


def _turn(chain: Chain, first: Reduction, number: int, table: ProbeTable, *, several: bool) -> Turn:
    """Turn of one probe from its own points outside the wake."""
    assert chain.traverse is not None
    grid, points = first.flow.grid, chain.points
    near = chain.near_field(first.vorticity, grid)
    own = induced_crossflow(first.forces.stream_function, grid)
    outside = _outside(first.region.mask, grid, points.y, points.z)
    of_tube = chain.traverse.tubes[number].points
    if of_tube is not None:
        outside &= np.isin(np.arange(points.n), of_tube)
    at = np.stack([points.z, points.y], axis=1)[outside]
    v, w = (RegularGridInterpolator((grid.z, grid.y), field)(at) for field in (own[0] + near.v, own[1] + near.w))
    state = chain.state(first.reference)
    read = np.stack([state.u, state.v, state.w])[:, outside]
    to_survey = rotation_matrix(*chain.settings.offsets).T
    u = np.sqrt(np.maximum(np.sum(read**2, axis=0) - v**2 - w**2, 0.0))
    expected = to_survey @ np.stack([u, v, w])
    row = chain.gridding.row_index[outside]
    found = from_outer_flow(
        to_survey @ read,
        expected=(expected[1], expected[2]),
        row=row if np.unique(row).size >= _FEWEST_ROWS else None,
    )
    blocks = outer_flow(
        first.reference.total_pressure - first.flow.total_pressure,
        first.flow.v,
        first.flow.w,
        first.forces.stream_function,
        grid,
        mask=first.region.mask,
        near_field=near,
    ).offset_uncertainty
    if not math.isfinite(blocks):
        raise DataError(
            "too few parts of the window hold outer flow to tell how well the misalignment is known",
            place="[probe] misalignment",
            remedy="survey more of the flow outside the wake, or measure a roll pair",
        )
    slow = blocks / first.reference.speed
    pitch, yaw = (float(math.hypot(sigma, slow)) for sigma in found.standard_uncertainty)
    start = correction_input(f"{MISALIGNMENT}.tube {table.tube}")
    inputs = (f"{start}.pitch", f"{start}.yaw") if several else TURN_INPUTS
    return Turn(found.pitch, found.yaw, (pitch, yaw), of_head=False, inputs=inputs)


def _outside(mask: NDArray[np.bool_], grid: UniformGrid, y: Array, z: Array) -> NDArray[np.bool_]:
    """Points inside the window and outside the wake region."""
    iy, iz = np.rint((y - grid.y0) / grid.dy).astype(int), np.rint((z - grid.z0) / grid.dz).astype(int)
    inside = (y >= grid.y[0]) & (y <= grid.y[-1]) & (z >= grid.z[0]) & (z <= grid.z[-1])
    found: NDArray[np.bool_] = inside.copy()
    found[inside] = ~mask[iz[inside], iy[inside]]
    return found
