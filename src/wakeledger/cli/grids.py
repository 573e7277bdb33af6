"""``wakeledger grids``: one computed case on several grids."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen
from wakeledger.cli.delivery import Delivery, delivered


def _numbers(_context: click.Context, _parameter: click.Parameter, given: str) -> tuple[int, ...]:
    """Numbers of cells as given on the command line.

    Raises
    ------
    click.BadParameter
        If one is no whole number.
    """
    found = []
    for text in given.split(","):
        try:
            found.append(int(text))
        except ValueError as error:
            raise click.BadParameter(f"{text.strip()!r} is no whole number; write 80000,220000,667000") from error
    return tuple(found)


@click.command(short_help="Order and convergence index of one case on several grids.")
@click.argument("ledgers", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="COARSE.nc ... FINE.nc")
@click.option(
    "--cells", required=True, callback=_numbers, metavar="N,N,...", help="Number of cells of each grid, in that order."
)
@click.option(
    "--dimensions",
    type=click.Choice(["2", "3"]),
    default="3",
    show_default=True,
    help="Dimensions in which the grids are refined.",
)
@click.option("--order", type=float, metavar="P", help="Order of the scheme, for two grids, which show none.")
@delivered(json_help="Print a JSON document instead.")
@click.pass_obj
def grids(
    command: str,
    ledgers: tuple[Path, ...],
    cells: tuple[int, ...],
    dimensions: str,
    order: float | None,
    delivery: Delivery,
) -> int:
    """Compare one computed case on several grids.

    Takes the archives of reductions of the same case, from coarse to fine, and the number of cells of each of the flow
    solver's grids. For every row, and for every near-field value beside it, prints the value on each grid, the observed
    order, the extrapolated value, the grid convergence index of the finest grid and its standard uncertainty, and
    whether the order can be trusted. With --out it writes grids.json, grids.csv and report.html. The exit status is 1
    where a check of any ledger failed.
    """
    from wakeledger.present.products import OF_GRID_SERIES

    delivery.require_free(OF_GRID_SERIES)

    from wakeledger.run.ledgers.grid_series import grid_series

    found = grid_series(ledgers, cells=cells, dimensions=int(dimensions), order=order, command=command)

    from wakeledger.ledger.grid_series import grid_series_json
    from wakeledger.ledger.tabular import json_text
    from wakeledger.present.grid_series_text import grid_series_text

    delivery.finish(
        found,
        OF_GRID_SERIES,
        document=lambda: json_text(grid_series_json(found)),
        text=lambda: grid_series_text(found, width=screen.width(), colour=screen.colour()),
    )
    return exits.CHECK_FAILED if found.failed else exits.DONE
