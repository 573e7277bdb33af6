"""``wakeledger inspect``: read and check a survey without reducing it."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen


@click.command(short_help="Read and check a survey without reducing it.")
@click.argument("survey", type=click.Path(path_type=Path), metavar="SURVEY.toml")
@click.option("--json", "as_json", is_flag=True, help="Print a JSON document instead.")
def inspect(survey: Path, as_json: bool) -> int:
    """Read and check a survey without reducing it.

    Prints the grid that was found, a map of its points, the range and noise of each variable, the flow angles, how well
    points repeat, the state of the window's edges, the checks, and what to do next.
    """
    from wakeledger.run.survey import inspect as inspect_survey
    from wakeledger.run.survey import load

    found = inspect_survey(load(survey))
    if as_json:
        from wakeledger.ledger.tabular import json_text

        screen.show(json_text(found.to_dict()))
    else:
        from wakeledger.present.terminal import inspection_text

        text = inspection_text(found, width=screen.width(), colour=screen.colour(), unicode=screen.unicode())
        screen.show(text)
    return exits.CHECK_FAILED if found.failed else exits.DONE
