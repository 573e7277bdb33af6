"""``wakeledger reduce``: the main job."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen
from wakeledger.cli.delivery import figures_option, overwrite_option


@click.command(short_help="Reduce a survey to its drag ledger.")
@click.argument("survey", type=click.Path(path_type=Path), metavar="SURVEY.toml|LEDGER.nc")
@click.option("--out", type=click.Path(path_type=Path), metavar="DIR", help="Folder of the products.")
@click.option(
    "--draws",
    type=click.IntRange(min=100),
    metavar="N",
    help="Monte Carlo draws instead of the survey's.",
)
@figures_option
@overwrite_option
@click.option("--quiet", is_flag=True, help="Print neither progress nor the ledger; failed checks are named.")
@click.pass_obj
def reduce(
    command: str,
    survey: Path,
    out: Path | None,
    draws: int | None,
    figures: tuple[str, ...],
    overwrite: bool,
    quiet: bool,
) -> int:
    """Reduce a survey to its drag ledger.

    Takes a survey file, or the archive of an earlier reduction. Writes ledger.nc (the archive), ledger.json,
    ledger.csv and report.html into DIR, by default <survey>-ledger beside the survey file, and prints the ledger and
    the verdict of each check.
    """
    from wakeledger.present.products import OF_LEDGER

    directory = out if out is not None else survey.parent / f"{survey.stem}-ledger"
    OF_LEDGER.require_free(directory, overwrite=overwrite)

    from wakeledger.run.survey import load
    from wakeledger.run.survey import reduce as reduce_survey

    loaded = load(survey)
    with screen.progress_bar("Monte Carlo", quiet=quiet) as progress:
        ledger = reduce_survey(loaded, draws=draws, progress=progress, command=command)
    names = OF_LEDGER.write(ledger, directory, figures=figures, overwrite=overwrite)
    if not quiet:
        from wakeledger.present.terminal import ledger_text

        screen.show(ledger_text(ledger, width=screen.width(), colour=screen.colour()))
        screen.show_written(directory, names)
    elif ledger.failed:
        # Without a word the exit status alone would look like a failure of the program.
        named = [check.name for check in ledger.checks if check.verdict == "fail"]
        exits.say(f"the ledger is written to {directory}, but these of its checks fail: {', '.join(named)}")
    return exits.CHECK_FAILED if ledger.failed else exits.DONE
