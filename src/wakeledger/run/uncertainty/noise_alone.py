"""What the noise that the data show makes of the rows by itself, where the survey file declares none: information only.

The rows' own uncertainty stays what the sources make of it, unknown without any: errors that all points share do not
show in the data.
"""

from __future__ import annotations

import math

import numpy as np

from wakeledger.confidence.sources import Source
from wakeledger.run import tables
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.config import Survey
from wakeledger.run.inputs import layouts
from wakeledger.run.prepared import Prepared
from wakeledger.run.uncertainty.channel_noise import CHANNELS
from wakeledger.run.uncertainty.linear import linear_slopes, survey_budget, tried
from wakeledger.run.uncertainty.noise_findings import file_noises

_DRAGS = ("profile_drag", "induced_drag", "total_drag")


def noise_sources(prepared: Prepared) -> tuple[Source, ...]:
    """Random sources of the sizes that the data show, one for each channel of the file that the flow follows from.

    Parameters
    ----------
    prepared : Prepared
        The survey.

    Returns
    -------
    tuple of Source
        In the channels' own units; errors that neighbours share have the length that was found.
    """
    found = []
    for one in file_noises(prepared.chain, prepared.nominal):
        size, _ = one.best()
        if math.isfinite(size) and size > 0:
            length = one.shown.length if math.isfinite(one.shown.length) else None
            found.append(
                Source(f"noise of {one.words}", (f"plane.{one.name}",), "random", size, correlation_length=length)
            )
    return tuple(found)


def noise_alone_notes(file: Survey, prepared: Prepared) -> tuple[str, ...]:
    """A sentence on the standard uncertainty that the noise in the data would give by itself, in closed form.

    Parameters
    ----------
    file : Survey
        The survey file.
    prepared : Prepared
        The survey.

    Returns
    -------
    tuple of str
        Empty where noise is declared, on a computed plane, for hole pressures, and where the data show none.
    """
    chain, nominal = prepared.chain, prepared.nominal
    wake = nominal.region.mask.any()
    if prepared.findings.declares or chain.settings.computed or chain.traverse is not None or not wake:
        return ()
    made = noise_sources(prepared)
    if not made:
        return ()
    inputs = layouts(file, chain.points, chain.gridding, [name for source in made for name in source.applies_to])
    slopes = tried(chain, linear_slopes(chain, nominal, made, inputs, estimates=False), made, inputs)
    budget = survey_budget(chain, nominal, slopes, made, inputs, noisy={source.name for source in made})
    sizes = dict(zip(OUTPUTS, budget.standard_uncertainty, strict=True))
    rows = [
        f"{row.replace('_', ' ')} {tables.counts_text(sizes[row], nominal, chain).lstrip('+')}"
        for row in _DRAGS
        if np.isfinite(sizes[row]) and np.isfinite(nominal.values[row])
    ]
    share = sizes["lift"] / abs(nominal.values["lift"]) if nominal.values["lift"] else math.nan
    if math.isfinite(share):
        rows.append(f"lift {share:.2%}")
    if not rows:
        return ()
    shown = ", ".join(_text(prepared, source) for source in made)
    what = (
        "it is in no uncertainty of this ledger: declare it as a random source"
        if prepared.sources
        else "what all points share does not show in the data, so that the uncertainty of the rows is unknown"
    )
    return (
        f"The noise that the data show makes these standard uncertainties by itself: {', '.join(rows)} ({shown});"
        f" {what}.",
    )


def _text(prepared: Prepared, source: Source) -> str:
    """A channel and its noise, in the unit of sentences."""
    name = source.applies_to[0].removeprefix("plane.")
    words, unit, _ = CHANNELS[name]
    size = source.standard_uncertainty
    kind = prepared.chain.points.channels[name]
    if kind.normalised_by is not None:
        return f"{words} {size:.2g} of the stream's {kind.normalised_by.replace('_', ' ')}"
    if unit == "rad":
        return f"{words} {math.degrees(size):.2g} deg"
    return f"{words} {size:.2g} {unit}"
