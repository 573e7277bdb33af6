"""The report of a planned survey, in the manner of a ledger's."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from wakeledger.ledger.rounding import significant
from wakeledger.present.plan_text import checked, outcome, set_up_facts, time_text, unit_of
from wakeledger.present.report.document import environment, picture
from wakeledger.present.wording import STATEMENT, words

if TYPE_CHECKING:
    from wakeledger.ledger.plan import Plan

#: What each figure shows, by its name.
CAPTIONS = {
    "plan_map": "Expanded uncertainty (95 %) over the spacing of the points and the probe's noise, everything else as "
    "in the set-up that is outlined. Figures that reach the target are bold; in hatched cells a check would fail.",
    "plan_cost": "The same against the time it takes; the ring is the set-up chosen, crosses are surveys in which a "
    "check would fail, the broken line is the time limit.",
    "plan_budget": "What the chosen set-up's doubt consists of, and what doing one thing better would gain: half of a "
    "source (dark), or more time (light).",
}


def plan_html(plan: Plan) -> str:
    """The report of a plan.

    Parameters
    ----------
    plan : Plan
        The plan.

    Returns
    -------
    str
        A whole HTML document without external resources; the same plan gives the same text.
    """
    from wakeledger.present.figures.plan import draw_plan

    return (
        environment()
        .get_template("plan.html")
        .render(
            plan=plan,
            statement=STATEMENT,
            outcome=outcome(plan),
            unit=unit_of(plan),
            facts=[] if plan.chosen is None else set_up_facts(plan.chosen),
            checked="" if plan.chosen is None else checked(plan),
            budget=_budget(plan),
            by_probe=_by_probe(plan),
            improvements=_improvements(plan),
            pictures=[picture(name, figure, CAPTIONS[name]) for name, figure in draw_plan(plan).items()],
            versions={key.removeprefix("version "): text for key, text in plan.provenance.items() if "version " in key},
        )
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
            "reaches": one.expanded_uncertainty <= plan.target
            and not one.failing
            and not one.minutes > plan.time_limit,
            "failing": ", ".join(map(words, one.failing)),
        }
        for one in plan.by_probe
    ]


def _improvements(plan: Plan) -> list[dict[str, Any]]:
    return [
        {
            "what": one.what,
            "u": significant(one.expanded_uncertainty, 3),
            "gain": significant(one.gain, 2),
            "time": "–" if not abs(one.minutes) >= 0.5 else f"{one.minutes:+.0f}",
            "rate": significant(60 * one.gain_per_minute, 2) if math.isfinite(one.gain_per_minute) else "–",
        }
        for one in plan.improvements
    ]
