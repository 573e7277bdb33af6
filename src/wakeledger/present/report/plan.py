"""The report of a planned survey, in the manner of a ledger's."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from wakeledger.ledger.rounding import significant
from wakeledger.present.plan_text import checked, outcome, set_up_facts, standing, takes_text, time_text, unit_of
from wakeledger.present.report.page import page, pictures
from wakeledger.present.wording import digits

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from wakeledger.ledger.plan import Plan


def plan_html(plan: Plan, figures: Mapping[str, Figure] | None = None) -> str:
    """The report of a plan.

    Parameters
    ----------
    plan : Plan
        The plan.
    figures : mapping of str to Figure, optional
        Its figures, where they have been drawn.

    Returns
    -------
    str
        A whole HTML document without external resources; the same plan gives the same text.
    """
    from wakeledger.present.figures.plan import DRAWINGS, draw_plan

    return page(
        "plan.html",
        provenance=plan.provenance,
        plan=plan,
        outcome=outcome(plan),
        unit=unit_of(plan),
        facts=[] if plan.chosen is None else set_up_facts(plan.chosen),
        checked="" if plan.chosen is None else checked(plan),
        budget=_budget(plan),
        by_probe=_by_probe(plan),
        improvements=_improvements(plan),
        pictures=list(pictures(draw_plan(plan) if figures is None else figures, DRAWINGS).values()),
    )


def _budget(plan: Plan) -> list[dict[str, Any]]:
    return [
        {
            "source": line.source,
            "kind": line.kind,
            "u": significant(line.standard_uncertainty, 2),
            "share": f"{100 * line.share:.1f}",
        }
        for line in plan.budget
    ]


def _by_probe(plan: Plan) -> list[dict[str, Any]]:
    return [
        {
            "probe": one.probe,
            "spacing": f"{1e3 * one.spacing:.3g}",
            "window": f"{1e3 * one.window:.3g}",
            "repeats": one.repeats,
            "points": one.points * one.repeats,
            "time": time_text(one.minutes) if math.isfinite(one.minutes) else "–",
            "u": significant(one.expanded_uncertainty, 2),
            "stated": significant(one.stated, 2),
            "reaches": standing(plan, one)[0],
            "standing": standing(plan, one)[1],
        }
        for one in plan.by_probe
    ]


def _improvements(plan: Plan) -> list[dict[str, Any]]:
    return [
        {
            "what": one.what,
            "u": significant(one.expanded_uncertainty, 3),
            "gain": significant(one.gain, 2),
            "takes": takes_text(one),
            "rate": digits(60 * one.gain_per_minute, 2),
        }
        for one in plan.improvements
    ]
