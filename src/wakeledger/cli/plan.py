"""``wakeledger plan``: which survey is worth making."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen
from wakeledger.cli.delivery import Delivery, delivered


@click.command(short_help="Find the cheapest survey that knows enough.")
@click.argument("plan", type=click.Path(path_type=Path), metavar="PLAN.toml|SURVEY.toml|LEDGER.nc")
@click.option("--target", metavar="TEXT", help='Largest U95 of the row: "2 counts", "0.5 %", "0.1 N".')
@delivered(json_help="Print exactly what plan.json holds.", drawn=False)
@click.pass_obj
def plan(command: str, plan: Path, target: str | None, delivery: Delivery) -> int:
    """Find the cheapest survey that knows enough.

    Takes a plan file, a survey file with a [plan], or the ledger of an earlier survey. Surveys of the flow to expect
    are simulated and reduced for every spacing, window and probe. Prints the set-up that takes the fewest minutes to
    reach the target, its budget, and what would make it know more. With --out it writes plan.json and report.html. The
    exit status is 1 where no set-up reaches the target.
    """
    from wakeledger.present.products import OF_PLAN

    delivery.require_free(OF_PLAN)

    from wakeledger.run.planning import plan as plan_survey

    with screen.progress_bar("simulated surveys", quiet=delivery.as_json) as progress:
        found = plan_survey(plan, target=target, progress=progress, command=command)

    from wakeledger.ledger.tabular import json_text
    from wakeledger.present.plan_text import plan_text

    delivery.finish(
        found,
        OF_PLAN,
        document=lambda: json_text(found.to_dict()),
        text=lambda: plan_text(found, width=screen.width(), colour=screen.colour()),
    )
    return exits.DONE if found.reached else exits.CHECK_FAILED
