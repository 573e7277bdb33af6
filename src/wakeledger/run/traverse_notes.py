"""What each correction of a raw traverse is worth, in sentences."""

from __future__ import annotations

from dataclasses import replace

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
        Each correction with the counts of total drag between reducing with it and without it, in the same wake region.
    """
    made = []
    for name, sentence in raw.said.items():
        before = without(chain, name).reduce(vary=Variation(mask=nominal.region.mask), estimates=False)
        change = nominal.values["total_drag"] - before.values["total_drag"]
        made.append(f"{sentence}: {tables.counts_text(change, nominal, chain)} of total drag.")
    return (*made, *raw.notes)


def without(chain: Chain, name: str) -> Chain:
    """The same survey without one of its corrections."""
    assert chain.traverse is not None
    if name == SHEAR:
        return replace(chain, displacement=None)
    if name == REFERENCE:
        return replace(chain, traverse=replace(chain.traverse, normalised=False))
    return replace(chain, traverse=chain.traverse.without(name))
