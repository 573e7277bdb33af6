"""``wakeledger increment``: B minus A."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen
from wakeledger.cli.reduce import figure_formats


@click.command(short_help="Take the difference of two ledgers, B minus A.")
@click.argument("a", type=click.Path(path_type=Path), metavar="A.nc")
@click.argument("b", type=click.Path(path_type=Path), metavar="B.nc")
@click.option("--json", "as_json", is_flag=True, help="Print a JSON document instead.")
@click.option("--out", type=click.Path(path_type=Path), metavar="DIR", help="Also write the products into this folder.")
@click.option(
    "--figures", callback=figure_formats, metavar="pdf,png,svg", help="Also write the figures in these formats."
)
@click.option("--overwrite", is_flag=True, help="Replace existing products.")
@click.pass_obj
def increment(
    command: str, a: Path, b: Path, as_json: bool, out: Path | None, figures: tuple[str, ...], overwrite: bool
) -> int:
    """Take the difference of two ledgers, B minus A.

    Takes the archives of two reductions, or of combined repeats. Errors that both survey files name by one shared_id
    cancel as far as they act alike; all others are added in squares. Prints every row's difference in its unit and in
    counts with its uncertainty, whether it is resolved, and which source cancelled. With --out it writes increment.nc,
    increment.json, increment.csv and report.html. The exit status is 1 where a check of either ledger failed.
    """
    if figures and out is None:
        raise click.UsageError("--figures needs --out DIR, the folder to write them into")

    from wakeledger.present.products import INCREMENT_FILES, require_free, write_increment

    if out is not None:
        require_free(out, overwrite=overwrite, files=INCREMENT_FILES)

    from wakeledger.run.ledgers.increment import increment as take_increment

    found = take_increment(a, b, command=command)
    names = write_increment(found, out, figures=figures, overwrite=overwrite) if out is not None else ()
    if as_json:
        from wakeledger.ledger.increment import increment_json
        from wakeledger.ledger.tabular import json_text

        screen.show(json_text(increment_json(found)))
    else:
        from wakeledger.present.increment_text import increment_text

        screen.show(increment_text(found, width=screen.width(), colour=screen.colour()))
        if out is not None:
            folders = dict.fromkeys(str(name) if len(name.parts) == 1 else f"{name.parts[0]}/" for name in names)
            screen.show(f"\nWritten to {out}: {', '.join(folders)}\n")
    return exits.CHECK_FAILED if found.failed else exits.DONE
