"""A planned survey as text for a terminal; a pure function, nothing is printed here."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from wakeledger.ledger.rounding import rounded, significant
from wakeledger.present.printing import heading, new_console, new_table, section, sentences_of, with_statement
from wakeledger.present.wording import printable, unit_text, words

if TYPE_CHECKING:
    from rich.table import Table

    from wakeledger.ledger.plan import Improvement, Plan, SetUp

#: Beyond so many, sources, numerical terms and improvements are left out of what is printed, and counted.
MOST_LINES = 8
#: Lines of the budget below this share are counted as small.
SMALL = 0.002


def plan_text(plan: Plan, *, width: int = 100, colour: bool = False) -> str:
    """A plan as text: the outcome, the set-up, its budget, the map, what would help, and what was assumed.

    Parameters
    ----------
    plan : Plan
        The plan.
    width : int
        Columns of the terminal.
    colour : bool
        Whether to write the terminal's colour codes; nothing is said by colour alone.

    Returns
    -------
    str
        Lines without trailing blanks, ended by a line feed.
    """
    from rich.text import Text

    console = new_console(width, colour)
    heading(console, printable(plan.title), {})
    console.print(Text(outcome(plan), style="bold green" if plan.reached else "bold red"))
    if plan.chosen is not None:
        section(console, "The set-up" if plan.reached else "The best set-up found")
        facts = new_table(("", "left"), ("", "left"), header=False)
        for name, fact in set_up_facts(plan.chosen):
            facts.add_row(name, printable(fact))
        console.print(facts)
        section(console, f"Its budget, standard uncertainty in {unit_of(plan)}")
        console.print(_budget(plan))
        console.print(Text(checked(plan)))
        section(console, f"U95 in {unit_of(plan)}, everything else as above (x: a check would fail)")
        console.print(_map(plan))
        section(console, "The cheapest set-up with each probe")
        console.print(_by_probe(plan))
        section(console, "What a single improvement would gain, the largest first")
        console.print(_improvements(plan))
    sentences_of(console, "Notes", plan.notes)
    return with_statement(console)


def unit_of(plan: Plan) -> str:
    """The plan's unit in words."""
    return "the coefficient" if plan.unit == "1" else plan.unit if plan.unit == "counts" else unit_text(plan.unit)


def with_unit(plan: Plan, value: float, digits: int = 3) -> str:
    """A figure in the plan's unit."""
    unit = "" if plan.unit == "1" else f" {plan.unit if plan.unit == 'counts' else unit_text(plan.unit)}"
    return f"{significant(value, digits)}{unit}"


def outcome(plan: Plan) -> str:
    """One sentence: whether some set-up reaches the target, and what it takes."""
    row, target = words(plan.row), with_unit(plan, plan.target)
    if plan.chosen is None:
        return f"No set-up can be reduced: nothing can be said about U95 of the {row} (target {target})."
    figure, uncertainty = rounded(plan.value, plan.expanded_uncertainty)
    known = f"{row} {figure} ± {uncertainty} {'' if plan.unit == '1' else plan.unit}".strip()
    if plan.reached:
        sentence = f"The target of {target} is reached: {known} (U95), in {cost_text(plan.chosen)}."
        if plan.stated > plan.target:
            sentence += f" The ledger of such a survey would state {with_unit(plan, plan.stated, 2)}."
        return sentence
    if plan.chosen.failing and plan.expanded_uncertainty <= plan.target:
        return (
            f"No set-up tried passes its checks: {known} (U95) would be within the target of {target}, but"
            f" {', '.join(map(words, plan.chosen.failing))} would fail. Try a wider window or a closer spacing."
        )
    within = f" within {time_text(plan.time_limit)}" if math.isfinite(plan.time_limit) else ""
    sentence = f"No set-up tried reaches {target}{within}; the best one found: {known} (U95)"
    if math.isfinite(plan.chosen.minutes):
        sentence += f", in {time_text(plan.chosen.minutes)}"
    if plan.chosen.failing:
        sentence += f", and {', '.join(map(words, plan.chosen.failing))} would fail"
    if plan.beyond is not None:
        sentence += f". Without the limit {time_text(plan.beyond.minutes)} would do"
    return f"{sentence}."


def time_text(minutes: float) -> str:
    """A time as it is printed.

    Examples
    --------
    >>> time_text(84.7), time_text(211.7)
    ('85 min', '3 h 32 min')
    """
    if not math.isfinite(minutes):
        return "an unknown time"
    whole = round(minutes)
    if whole < 1:
        return f"{60 * minutes:.0f} s"
    return f"{whole} min" if whole < 120 else f"{whole // 60} h {whole % 60:02d} min"


def cost_text(one: SetUp) -> str:
    """What a set-up costs: its time, or its points where that is not known."""
    return time_text(one.minutes) if math.isfinite(one.minutes) else f"{one.points * one.repeats} points"


def takes_text(one: Improvement) -> str:
    """What an improvement takes more."""
    known = math.isfinite(one.minutes)
    if not known and not one.points:
        return "–"
    more = one.minutes if known else float(one.points)
    if abs(more) < 0.5:
        return "no time"
    return f"{'+' if more > 0 else '−'}{time_text(abs(more)) if known else f'{abs(one.points)} points'}"


def set_up_facts(one: SetUp) -> list[tuple[str, str]]:
    """A set-up as names and facts."""
    lines = f"{one.lines_y} × {one.lines_z} (y × z), every {significant(1e3 * one.spacing, 3)} mm"
    found = [
        ("points", f"{one.points}, {lines}"),
        ("window", f"{significant(1e3 * one.window, 3)} mm beyond the wake on every side"),
        (
            "surveys",
            f"{one.repeats}, {time_text(one.minutes)} together" if math.isfinite(one.minutes) else str(one.repeats),
        ),
        ("probe", f"noise {one.probe}"),
    ]
    accuracies = (
        ("flow angles", math.degrees(one.angle_accuracy), "deg"),
        ("dynamic pressure", 100 * one.reference_accuracy, "%"),
        ("density", 100 * one.density_accuracy, "%"),
        ("drift of the reference", one.reference_drift, "Pa from row to row"),
    )
    found += [(name, f"u = {significant(value, 3)} {unit}") for name, value, unit in accuracies if value > 0]
    return found


def checked(plan: Plan) -> str:
    """What the full Monte Carlo said of the derivatives."""
    percent = 100 * plan.non_linearity
    left = with_unit(plan, plan.left, 2)
    terms = [line for line in plan.terms if line.share >= SMALL][:MOST_LINES]
    stated = f" The ledger of such a survey would state U95 = {with_unit(plan, plan.stated, 2)}"
    unknown = [line.source for line in plan.terms if math.isnan(line.standard_uncertainty)]
    if unknown:
        stated = f" The ledger of such a survey would not know U95: it cannot tell {', '.join(unknown)}"
    elif terms:
        named = ", ".join(f"{line.source} {significant(line.standard_uncertainty, 2)}" for line in terms)
        stated += f": it cannot know that, and has numerical terms for it (u: {named})"
    return (
        f"A full Monte Carlo of {plan.draws} draws gives the declared sources {percent:+.1f} % against their"
        f" derivatives; the figures hold this. Without any noise the survey would be off by {left} on average."
        f"{stated}."
    )


def _budget(plan: Plan) -> Table:
    table = new_table(("", "left"), ("u", "right"), ("share", "right"), ("", "left"))
    shown = [line for line in plan.budget if line.share >= SMALL]
    for line in shown:
        table.add_row(line.source, significant(line.standard_uncertainty, 2), f"{100 * line.share:.1f} %", line.kind)
    small = [line for line in plan.budget if line.share < SMALL]
    if small:
        u = math.sqrt(sum(line.standard_uncertainty**2 for line in small))
        table.add_row(f"{len(small)} smaller ones", significant(u, 2), "", "")
    return table


def _map(plan: Plan) -> Table:
    table = new_table(
        ("probe's noise", "left"), ("window", "right"), *((f"{1e3 * h:.3g} mm", "right") for h in plan.spacings)
    )
    for c, probe in enumerate(plan.probes):
        for j, margin in enumerate(plan.windows):
            cells = []
            for i in range(len(plan.spacings)):
                u = plan.uncertainty[c, j, i]
                text = "–" if math.isnan(u) else significant(u, 2)
                cells.append(f"{text} x" if plan.failing[c, j, i] else text)
            table.add_row(probe if j == 0 else "", f"{1e3 * margin:.3g} mm", *cells)
    return table


def standing(plan: Plan, one: SetUp) -> tuple[bool, str]:
    """Whether a set-up reaches the target, and what is to be said of it."""
    if one.expanded_uncertainty > plan.target:
        return False, "does NOT reach it"
    if one.failing:
        return False, f"{', '.join(map(words, one.failing))} would FAIL"
    if one.minutes > plan.time_limit:
        return False, "takes TOO LONG"
    return True, "reaches the target"


def _by_probe(plan: Plan) -> Table:
    table = new_table(
        ("probe's noise", "left"), ("every", "right"), ("window", "right"), ("surveys", "right"), ("time", "right"),
        ("U95", "right"), ("its ledger's", "right"), ("", "left"),
    )  # fmt: skip
    for one in plan.by_probe:
        table.add_row(
            one.probe,
            f"{1e3 * one.spacing:.3g} mm",
            f"{1e3 * one.window:.3g} mm",
            str(one.repeats),
            cost_text(one),
            significant(one.expanded_uncertainty, 2),
            significant(one.stated, 2),
            standing(plan, one)[1],
        )
    return table


def _improvements(plan: Plan) -> Table:
    table = new_table(
        ("", "left"), ("U95 then", "right"), ("gain", "right"), ("takes", "right"), ("gain per hour", "right")
    )
    for one in plan.improvements[:MOST_LINES]:
        rate = significant(60 * one.gain_per_minute, 2) if math.isfinite(one.gain_per_minute) else "–"
        table.add_row(
            one.what, significant(one.expanded_uncertainty, 3), significant(one.gain, 2), takes_text(one), rate
        )
    return table
