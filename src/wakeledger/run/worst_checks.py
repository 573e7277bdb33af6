"""Checks of several planes as one set."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from wakeledger.ledger.rows import Check

#: Verdicts, the worst first.
_WORST = ("fail", "warn", "pass", "not_applicable")


def worst_checks(planes: Sequence[Sequence[Check]], stations: Sequence[float]) -> tuple[Check, ...]:
    """Of each check the worst outcome of several planes.

    Parameters
    ----------
    planes : sequence of sequence of Check
        The checks of each plane.
    stations : sequence of float
        Distance of each plane behind the trailing edge, m.

    Returns
    -------
    tuple of Check
        In the order of the first plane; the message says which station it is of.
    """
    found: dict[str, tuple[float, Check]] = {}
    for station, checks in zip(stations, planes, strict=True):
        for check in checks:
            earlier = found.get(check.name)
            if earlier is None or _WORST.index(check.verdict) < _WORST.index(earlier[1].verdict):
                found[check.name] = (station, check)
    return tuple(replace(check, message=f"At {station:g} m: {check.message}") for station, check in found.values())
