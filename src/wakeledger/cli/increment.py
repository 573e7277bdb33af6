"""``wakeledger increment``: B minus A."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen
from wakeledger.cli.delivery import Delivery, delivered


@click.command(short_help="Take the difference of two ledgers, B minus A.")
@click.argument("a", type=click.Path(path_type=Path), metavar="A.nc")
@click.argument("b", type=click.Path(path_type=Path), metavar="B.nc")
@delivered(json_help="Print a JSON document instead.")
@click.pass_obj
def increment(command: str, a: Path, b: Path, delivery: Delivery) -> int:
    """Take the difference of two ledgers, B minus A.

    Takes the archives of two reductions, or of combined repeats. Errors that both survey files name by one shared_id
    cancel as far as they act alike; all others are added in squares. Prints every row's difference in its unit and in
    counts with its uncertainty, whether it is resolved, and which source cancelled. With --out it writes increment.nc,
    increment.json, increment.csv and report.html. The exit status is 1 where a check of either ledger failed.
    """
    from wakeledger.present.products import OF_INCREMENT

    delivery.require_free(OF_INCREMENT)

    from wakeledger.run.ledgers.increment import increment as take_increment

    found = take_increment(a, b, command=command)

    from wakeledger.ledger.increment import increment_json
    from wakeledger.ledger.tabular import json_text
    from wakeledger.present.increment_text import increment_text

    delivery.finish(
        found,
        OF_INCREMENT,
        document=lambda: json_text(increment_json(found)),
        text=lambda: increment_text(found, width=screen.width(), colour=screen.colour()),
    )
    return exits.CHECK_FAILED if found.failed else exits.DONE
