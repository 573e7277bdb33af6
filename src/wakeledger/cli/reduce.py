"""``wakeledger reduce``: the main job."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen

_FORMATS = ("pdf", "png", "svg")


def figure_formats(_context: click.Context, _parameter: click.Parameter, given: str | None) -> tuple[str, ...]:
    """Formats of figures as given on the command line.

    Raises
    ------
    click.BadParameter
        If one is not known.
    """
    names = tuple(dict.fromkeys(name.strip().lower() for name in given.split(",") if name.strip())) if given else ()
    for name in names:
        if name not in _FORMATS:
            raise click.BadParameter(f"{name!r} is not a format of figures; allowed: {', '.join(_FORMATS)}")
    return names


@click.command(short_help="Reduce a survey to its drag ledger.")
@click.argument("survey", type=click.Path(path_type=Path), metavar="SURVEY.toml|LEDGER.nc")
@click.option("--out", type=click.Path(path_type=Path), metavar="DIR", help="Folder of the products.")
@click.option(
    "--draws",
    type=click.IntRange(min=100),
    metavar="N",
    help="Monte Carlo draws instead of the survey's.",
)
@click.option(
    "--figures", callback=figure_formats, metavar="pdf,png,svg", help="Also write the figures in these formats."
)
@click.option("--overwrite", is_flag=True, help="Replace existing products.")
@click.option("--quiet", is_flag=True, help="Print neither progress nor the ledger.")
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
    from wakeledger.present.products import require_free, write_products

    directory = out if out is not None else survey.parent / f"{survey.stem}-ledger"
    require_free(directory, overwrite=overwrite)

    from wakeledger.run.survey import load
    from wakeledger.run.survey import reduce as reduce_survey

    loaded = load(survey)
    with screen.progress_bar("Monte Carlo", quiet=quiet) as progress:
        ledger = reduce_survey(loaded, draws=draws, progress=progress, command=command)
    names = write_products(ledger, directory, figures=figures, overwrite=overwrite)
    if not quiet:
        from wakeledger.present.terminal import ledger_text

        screen.show(ledger_text(ledger, width=screen.width(), colour=screen.colour()))
        folders = dict.fromkeys(str(name) if len(name.parts) == 1 else f"{name.parts[0]}/" for name in names)
        screen.show(f"\nWritten to {directory}: {', '.join(folders)}\n")
    return exits.CHECK_FAILED if ledger.failed else exits.DONE
