"""``wakeledger repeats``: several surveys of one configuration as one ledger."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen
from wakeledger.cli.reduce import figure_formats


@click.command(short_help="Combine repeats of one configuration.")
@click.argument("ledgers", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="LEDGER.nc LEDGER.nc ...")
@click.option("--json", "as_json", is_flag=True, help="Print exactly what ledger.json holds.")
@click.option("--out", type=click.Path(path_type=Path), metavar="DIR", help="Also write the products into this folder.")
@click.option(
    "--figures", callback=figure_formats, metavar="pdf,png,svg", help="Also write the figures in these formats."
)
@click.option("--overwrite", is_flag=True, help="Replace existing products.")
@click.pass_obj
def repeats(
    command: str,
    ledgers: tuple[Path, ...],
    as_json: bool,
    out: Path | None,
    figures: tuple[str, ...],
    overwrite: bool,
) -> int:
    """Combine repeats of one configuration.

    Takes the archives of two or more reductions. Each row is the weighted mean of the runs; errors that all share are
    not averaged down. Says whether the scatter between the runs is the declared one. With --out it writes ledger.nc,
    ledger.json, ledger.csv and report.html; that archive can be shown, and taken for an increment. The exit status is 1
    where a check of any run failed.
    """
    if figures and out is None:
        raise click.UsageError("--figures needs --out DIR, the folder to write them into")

    from wakeledger.present.products import require_free, write_products

    if out is not None:
        require_free(out, overwrite=overwrite)

    from wakeledger.run.ledgers.repeats import combine

    ledger = combine(ledgers, command=command)
    names = write_products(ledger, out, figures=figures, overwrite=overwrite) if out is not None else ()
    if as_json:
        from wakeledger.ledger.tabular import json_text, ledger_json

        screen.show(json_text(ledger_json(ledger)))
    else:
        from wakeledger.present.terminal import ledger_text

        screen.show(ledger_text(ledger, width=screen.width(), colour=screen.colour()))
        if out is not None:
            folders = dict.fromkeys(str(name) if len(name.parts) == 1 else f"{name.parts[0]}/" for name in names)
            screen.show(f"\nWritten to {out}: {', '.join(folders)}\n")
    return exits.CHECK_FAILED if ledger.failed else exits.DONE
