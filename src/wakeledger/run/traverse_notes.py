"""What each correction of a raw traverse is worth, in sentences."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.intake.probe.traverse import Traverse, correction_input
from wakeledger.run import tables
from wakeledger.run.chain import Chain
from wakeledger.run.probe_range import tip_notes
from wakeledger.run.reduction import Reduction, Variation
from wakeledger.run.traverse import REFERENCE, SHEAR, RawSurvey


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
        made.append(f"{sentence}: {worth}.")
    return (*made, *raw.notes, *tip_notes(chain))


def _inputs(chain: Chain, name: str) -> tuple[str, ...]:
    """Inputs that errors of one correction are drawn for."""
    if name == SHEAR:
        return (correction_input(SHEAR),)
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
