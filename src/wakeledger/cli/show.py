"""``wakeledger show``: a finished ledger."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen


@click.command(short_help="Show a finished ledger.")
@click.argument("archive", type=click.Path(path_type=Path), metavar="LEDGER.nc")
@click.option("--json", "as_json", is_flag=True, help="Print exactly what ledger.json holds.")
def show(archive: Path, as_json: bool) -> int:
    """Show a finished ledger: its rows, cross-checks, comparisons and checks."""
    from wakeledger.ledger.archive import open_archive

    ledger = open_archive(archive)
    if as_json:
        from wakeledger.ledger.tabular import json_text, ledger_json

        screen.show(json_text(ledger_json(ledger)))
    else:
        from wakeledger.present.terminal import ledger_text

        screen.show(ledger_text(ledger, width=screen.width(), colour=screen.colour()))
    return exits.CHECK_FAILED if ledger.failed else exits.DONE
