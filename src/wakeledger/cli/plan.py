"""``wakeledger plan``: which survey is worth making."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen


@click.command(short_help="Find the cheapest survey that knows enough.")
@click.argument("plan", type=click.Path(path_type=Path), metavar="PLAN.toml|SURVEY.toml|LEDGER.nc")
@click.option("--target", metavar="TEXT", help='Largest U95 of the row: "2 counts", "0.5 %", "0.1 N".')
@click.option("--json", "as_json", is_flag=True, help="Print exactly what plan.json holds.")
@click.option("--out", type=click.Path(path_type=Path), metavar="DIR", help="Folder of the products.")
@click.option("--overwrite", is_flag=True, help="Replace existing products.")
@click.pass_obj
def plan(command: str, plan: Path, target: str | None, as_json: bool, out: Path | None, overwrite: bool) -> int:
    """Find the cheapest survey that knows enough.

    Takes a plan file, a survey file with a [plan], or the ledger of an earlier survey. Surveys of the flow to expect
    are simulated and reduced for every spacing, window and probe. Prints the set-up that takes the fewest minutes to
    reach the target, its budget, and what would make it know more. With --out it writes plan.json and report.html. The
    exit status is 1 where no set-up reaches the target.
    """
    from wakeledger.present.products import PLAN_FILES, require_free, write_plan

    if out is not None:
        require_free(out, overwrite=overwrite, files=PLAN_FILES)

    from wakeledger.run.planning import plan as plan_survey

    with screen.progress_bar("simulated surveys", quiet=as_json) as progress:
        found = plan_survey(plan, target=target, progress=progress, command=command)
    names = write_plan(found, out, overwrite=overwrite) if out is not None else ()
    if as_json:
        from wakeledger.ledger.tabular import json_text

        screen.show(json_text(found.to_dict()))
    else:
        from wakeledger.present.plan_text import plan_text

        screen.show(plan_text(found, width=screen.width(), colour=screen.colour()))
        if out is not None:
            screen.show(f"\nWritten to {out}: {', '.join(map(str, names))}\n")
    return exits.DONE if found.reached else exits.CHECK_FAILED
