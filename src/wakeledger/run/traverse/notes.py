"""What each correction of a raw traverse is worth, in sentences."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.intake.probe.traverse import MISALIGNMENT, Traverse, correction_input
from wakeledger.physics.methods.energy_area import crossflow_energy
from wakeledger.run import tables
from wakeledger.run.chain.chain import Chain
from wakeledger.run.chain.reduction import Reduction, Variation
from wakeledger.run.traverse.probe_range import tip_notes
from wakeledger.run.traverse.traverse import REFERENCE, SHEAR, RawSurvey


def traverse_notes(raw: RawSurvey, chain: Chain, nominal: Reduction) -> tuple[str, ...]:
    """Sentences about the probe, the corrections that were made, and those that were not.

    Parameters
    ----------
    raw : RawSurvey
        What the traverse adds to the survey.
    chain : Chain
        The survey, with what was frozen on the nominal plane.
    nominal : Reduction
        Its nominal reduction.

    Returns
    -------
    tuple of str
        Each correction with the counts of total drag, or of profile drag alone, between reducing with it and without
        it, in the same wake region, and with those of its standard uncertainty.
    """
    vary = Variation(mask=nominal.region.mask)

    row = nominal.drag
    of = f" of {row.replace('_', ' ')}"

    def change(other: Chain, errors: Mapping[str, Array]) -> float:
        return nominal.values[row] - other.reduce(errors, vary=vary, estimates=False).values[row]

    made = []
    for name, sentence in raw.said.items():
        worth = tables.counts_text(change(without(chain, name), {}), nominal, chain)
        inputs = _inputs(chain, name)
        if inputs:
            doubt = math.hypot(*(change(chain, {each: np.ones(())}) for each in inputs))
            worth += f"{of}, +- {tables.counts_text(doubt, nominal, chain).lstrip('+')}"
        else:
            worth += of
        if name == MISALIGNMENT:
            worth += _in_the_energy_form(chain, nominal, inputs)
        made.append(f"{sentence}: {worth}.")
    return (*apart_notes(raw, chain, nominal), *made, *raw.notes, *tip_notes(chain))


def _in_the_energy_form(chain: Chain, nominal: Reduction, inputs: tuple[str, ...]) -> str:
    """What a misalignment is worth where the crossflow is squared."""

    def energy(other: Chain, errors: Mapping[str, Array]) -> float:
        flow = other.reduce(errors, vary=Variation(mask=nominal.region.mask), estimates=False).flow
        return float(crossflow_energy(flow.v, flow.w, flow.grid, density=nominal.reference.density))

    here = energy(chain, {})
    worth = here - energy(without(chain, MISALIGNMENT), {})
    doubt = math.hypot(*(here - energy(chain, {each: np.ones(())}) for each in inputs))
    counts, half = (tables.counts_text(force, nominal, chain) for force in (worth, doubt))
    return (
        "; the vorticity form is blind to it, and the energy form would see"
        f" {counts}, +- {half.lstrip('+')}, if the outer flow's angle were left in it"
    )


def apart_notes(raw: RawSurvey, chain: Chain, nominal: Reduction) -> list[str]:
    """A sentence about rows to and fro that stand apart, with what it is worth as a backlash and as a lag; or none."""
    found = raw.apart
    if found is None or not found.clear or chain.traverse is None:
        return []
    rows = [row for row in ("profile_drag", "induced_drag") if math.isfinite(nominal.values[row])]
    worth = []
    for name, additions in found.additions.items():
        traverse = replace(chain.traverse, additions=(*chain.traverse.additions, *additions))
        # Rows that stand apart widen the wake region, too: it is found anew.
        other = replace(chain, traverse=traverse).reduce(estimates=False)
        counts = [
            f"{tables.counts_text(nominal.values[row] - other.values[row], nominal, chain)} of {row.replace('_', ' ')}"
            for row in rows
        ]
        worth.append(f"{' and '.join(counts)} if it is a {name}")
    said = f"{found.sentence}: left in, it is worth {', '.join(worth)}"
    return [f"{said}. {found.remedy}."]


def _inputs(chain: Chain, name: str) -> tuple[str, ...]:
    """Inputs that errors of one correction are drawn for."""
    if name == SHEAR:
        return (correction_input(SHEAR),)
    if name == MISALIGNMENT and chain.traverse is not None:
        return chain.traverse.turn_inputs
    return () if chain.traverse is None else inputs_of(chain.traverse, name)


def inputs_of(traverse: Traverse, name: str) -> tuple[str, ...]:
    """Inputs that errors of one correction of the readings are drawn for."""
    return tuple(each for one in traverse.additions if one.name == name for each in one.per_sigma)


def without(chain: Chain, name: str) -> Chain:
    """The same survey without one of its corrections."""
    assert chain.traverse is not None
    if name == SHEAR:
        return replace(chain, displacement=None)
    return replace(chain, traverse=traverse_without(chain.traverse, name))


def traverse_without(traverse: Traverse, name: str) -> Traverse:
    """The same readings without one of their corrections."""
    return replace(traverse, normalised=False) if name == REFERENCE else traverse.without(name)
