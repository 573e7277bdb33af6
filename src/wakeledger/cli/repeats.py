"""``wakeledger repeats``: several surveys of one configuration as one ledger."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen
from wakeledger.cli.delivery import Delivery, delivered


@click.command(short_help="Combine repeats of one configuration.")
@click.argument("ledgers", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="LEDGER.nc LEDGER.nc ...")
@delivered(json_help="Print exactly what ledger.json holds.")
@click.pass_obj
def repeats(command: str, ledgers: tuple[Path, ...], delivery: Delivery) -> int:
    """Combine repeats of one configuration.

    Takes the archives of two or more reductions. Each row is the weighted mean of the runs; errors that all share are
    not averaged down. Says whether the scatter between the runs is the declared one. With --out it writes ledger.nc,
    ledger.json, ledger.csv and report.html; that archive can be shown, and taken for an increment. The exit status is 1
    where a check of any run failed.
    """
    from wakeledger.present.products import OF_LEDGER

    delivery.require_free(OF_LEDGER)

    from wakeledger.run.ledgers.repeats import combine

    ledger = combine(ledgers, command=command)

    from wakeledger.ledger.tabular import json_text, ledger_json
    from wakeledger.present.terminal import ledger_text

    delivery.finish(
        ledger,
        OF_LEDGER,
        document=lambda: json_text(ledger_json(ledger)),
        text=lambda: ledger_text(ledger, width=screen.width(), colour=screen.colour()),
    )
    return exits.CHECK_FAILED if ledger.failed else exits.DONE
