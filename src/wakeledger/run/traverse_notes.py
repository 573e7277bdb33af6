"""What each correction of a raw traverse is worth, in sentences."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.intake.probe.traverse import correction_input
from wakeledger.run import tables
from wakeledger.run.chain import Chain, Reduction, Variation
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
        Each correction with the counts of total (or else profile) drag between reducing with it and without it, in the same wake region,
        and with those of its standard uncertainty.
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
    return (*made, *raw.notes)


def _inputs(chain: Chain, name: str) -> tuple[str, ...]:
    """Inputs that errors of one correction are drawn for."""
    if name == SHEAR:
        return (correction_input(SHEAR),)
    additions = () if chain.traverse is None else chain.traverse.additions
    return tuple(each for one in additions if one.name == name for each in one.per_sigma)


def without(chain: Chain, name: str) -> Chain:
    """The same survey without one of its corrections."""
    assert chain.traverse is not None
    if name == SHEAR:
        return replace(chain, displacement=None)
    if name == REFERENCE:
        return replace(chain, traverse=replace(chain.traverse, normalised=False))
    return replace(chain, traverse=chain.traverse.without(name))
