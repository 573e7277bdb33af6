"""The runs behind a combined ledger, row by row, as the JSON document, the terminal and the report show them."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from wakeledger.ledger.contributions import QUANTITIES

if TYPE_CHECKING:
    import xarray as xr


@dataclass(frozen=True)
class RepeatLine:
    """One row of the runs; its coefficient where there is one, else its value in its unit.

    Attributes
    ----------
    row : str
        The row.
    of_coefficient : bool
        Whether the figures are those of the coefficient.
    figures, weights : tuple of float
        Of each run.
    between, between_upper : float
        Standard deviation between the runs beyond what was declared, and the largest that the scatter does not speak
        against; NaN where unknown.
    birge_ratio, chance : float
        Root of chi-square over its degrees of freedom, and the probability of one as large.
    verdict : str
        ``consistent``, ``larger``, ``smaller`` or ``unknown``: the scatter beside the declared one.
    """

    row: str
    of_coefficient: bool
    figures: tuple[float, ...]
    weights: tuple[float, ...]
    between: float
    between_upper: float
    birge_ratio: float
    chance: float
    verdict: str


def repeat_lines(repeats: xr.Dataset) -> tuple[RepeatLine, ...]:
    """The rows of a combined ledger's runs.

    Parameters
    ----------
    repeats : Dataset
        `wakeledger.ledger.ledger.Ledger.repeats`.

    Returns
    -------
    tuple of RepeatLine
    """
    found = []
    for k, row in enumerate(repeats["row"].values):
        quantity = int(bool(repeats["figure"][1, :, k].notnull().all()))
        numbers = {
            name: float(repeats[name].values[quantity, k])
            for name in ("between", "between_upper", "birge_ratio", "chance")
        }
        found.append(
            RepeatLine(
                row=str(row),
                of_coefficient=QUANTITIES[quantity] == "coefficient",
                figures=tuple(float(value) for value in repeats["figure"].values[quantity, :, k]),
                weights=tuple(float(value) for value in repeats["weight"].values[quantity, :, k]),
                verdict=str(repeats["verdict"].values[k]),
                **numbers,
            )
        )
    return tuple(found)


def repeats_json(repeats: xr.Dataset) -> dict[str, Any]:
    """The runs as a part of the JSON document.

    Parameters
    ----------
    repeats : Dataset
        `wakeledger.ledger.ledger.Ledger.repeats`.

    Returns
    -------
    dict
        ``runs`` with ``title`` and ``file`` each, ``degrees_of_freedom``, and ``rows``: ``row``, ``of`` (value or
        coefficient), ``figures`` and ``weights`` of the runs, ``between``, ``between_upper``, ``birge_ratio``,
        ``chance``, ``verdict``; None for what is not known.
    """
    titles, files = repeats["title"].values, repeats["file"].values
    return {
        "runs": [{"title": str(title), "file": str(file)} for title, file in zip(titles, files, strict=True)],
        "degrees_of_freedom": int(repeats.attrs["degrees_of_freedom"]),
        "rows": [
            {
                "row": line.row,
                "of": QUANTITIES[line.of_coefficient],
                "figures": [_known(value) for value in line.figures],
                "weights": [_known(value) for value in line.weights],
                "between": _known(line.between),
                "between_upper": _known(line.between_upper),
                "birge_ratio": _known(line.birge_ratio),
                "chance": _known(line.chance),
                "verdict": line.verdict,
            }
            for line in repeat_lines(repeats)
        ],
    }


def _known(value: float) -> float | None:
    return value if math.isfinite(value) else None
