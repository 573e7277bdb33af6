"""Tables of the coverage study, and the page that holds them."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from tests.benchmarks.coverage import CASES, COVERED, NUMERICAL
from tests.benchmarks.small_surveys import JUDGED, column, markdown_table, share_text, with_block

from wakeledger.run.uncertainty.numerics import MASK, RESOLUTION


def coverage_table(studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """Coverage of the measured sources' intervals."""
    lines = []
    for case, found in studies.items():
        if case not in COVERED:
            continue
        error, u, half = (column(found, name) for name in ("error", "u", "half_width"))
        wide = [one for one in found if "half_width_all" in one]
        wider = np.abs(column(wide, "error")) <= column(wide, "half_width_all")
        lines += _lines(case, error, u, half, wider)
        plain = [column(found, f"plain_{key}") for key in ("u", "half_width")]
        if plain[0].size:
            lines += _lines(f"{case}, as drawn", error, *plain, None)
    heads = "case, row, surveys, truth inside U95, with numerical terms, scatter of the errors, u / scatter, mean error"
    return markdown_table(heads.split(", "), lines)


def _lines(case: str, error: np.ndarray, u: np.ndarray, half: np.ndarray, wider: np.ndarray | None) -> list[list[str]]:
    count = len(error)
    inside, sd = np.abs(error) <= half, error.std(axis=0, ddof=1)
    ratio = np.sqrt(np.mean(np.square(u), axis=0)) / sd
    return [
        [
            case,
            row,
            str(count),
            share_text(inside[:, k]),
            "" if wider is None else f"{100 * wider[:, k].mean():.1f} %",
            f"{sd[k]:.4f} N",
            f"{ratio[k]:.3f} ± {1 / math.sqrt(2 * count):.3f}",
            f"{error[:, k].mean():+.4f} ± {sd[k] / math.sqrt(count):.4f} N",
        ]
        for k, row in enumerate(JUDGED)
    ]


def closed_form_table(studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """U95 in closed form over that of Monte Carlo."""
    lines = []
    for case, found in studies.items():
        own = [one for one in found if "mc_u" in one]
        if not own:
            continue
        cells = [case, str(len(own))]
        for key in ("u", "half_width"):
            plain = column(own, f"plain_{key}")
            ratio = (plain if plain.size else column(own, key)) / column(own, f"mc_{key}")
            doubt = ratio.std(axis=0, ddof=1) / math.sqrt(len(own))
            cells += [f"{mean:.3f} ± {by:.3f}" for mean, by in zip(ratio.mean(axis=0), doubt, strict=True)]
        lines.append(cells)
    names = [f"{kind}, {row.replace('_', ' ')}" for kind in ("u", "U95") for row in JUDGED]
    return markdown_table(["case", "surveys", *names], lines)


def bias_table(studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """Noise bias of the induced drag."""
    lines = []
    for case, found in studies.items():
        if case not in COVERED or not CASES[case].random:
            continue
        bias, held = column(found, "bias"), column(found, "held")
        cells = [case, f"{bias.mean():+.5f} N"]
        for real in (held, column(found, "anew")):
            left, doubt = (real - bias).mean(), (real - bias).std(ddof=1) / math.sqrt(len(found))
            cells += [f"{real.mean():+.5f} N", f"{100 * left / held.mean():+.1f} ± {100 * doubt / held.mean():.1f} %"]
        cells.append(f"{100 * (column(found, 'anew') - bias).mean() / column(found, 'u')[:, 1].mean():+.1f} %")
        lines.append(cells)
    heads = (
        "case | subtracted | found in the survey's region | share left | found, region drawn anew | share left | "
        "that over u"
    )
    return markdown_table(heads.split(" | "), lines)


def numerical_table(studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """Numerical terms held against what they stand for, one by one."""
    lines = []
    for case in NUMERICAL:
        found = studies.get(case, ())
        for term, key in ((MASK, "mask"), (RESOLUTION, "resolution")):
            if not found:
                continue
            error, half = column(found, f"{key}_error"), column(found, f"{key}_half_width")
            for k, row in enumerate(JUDGED):
                inside = np.abs(error[:, k]) <= half[:, k]
                typical, told = (np.sqrt(np.mean(np.square(one[:, k]))) for one in (error, half))
                scatter = column(found, "error")[:, k].std(ddof=1)
                largest = 100 * np.abs(error[:, k]).max() / scatter
                cells = [share_text(inside), f"{typical:.5f} N", f"{told:.5f} N", f"{largest:.1f} %"]
                lines.append([term, row, str(len(found)), *cells])
    heads = (
        "term, row, surveys, true effect inside U95 of the term, rms of the true effect, rms of the term's U95, "
        "largest true effect / scatter of the errors"
    )
    return markdown_table(heads.split(", "), lines)


def report_table(studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """How often a survey's noise is called not the declared one, or shared by neighbours."""
    lines = []
    for case, found in studies.items():
        if case in NUMERICAL:
            continue
        wrong = CASES[case].factor != 1.0, CASES[case].length > 0
        cells = [case, str(len(found))]
        for key, hit in zip(("size", "shared"), wrong, strict=True):
            cells.append(f"{share_text(column(found, key))} ({'hits' if hit else 'false alarms'})")
        lines.append(cells)
    return markdown_table(["case", "surveys", "size called wrong", "called shared by neighbours"], lines)


TABLES = {
    "coverage": coverage_table,
    "closed form": closed_form_table,
    "bias": bias_table,
    "numerical": numerical_table,
    "reports": report_table,
}


def written(page: str, studies: Mapping[str, Sequence[Mapping[str, Any]]]) -> str:
    """A page with its tables made again."""
    for name, table in TABLES.items():
        page = with_block(page, f"<!-- generated: {name} -->", "<!-- end -->", table(studies))
    return page
