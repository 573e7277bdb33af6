"""What the commands that end with one record have in common: their options, writing the products, and printing."""

from __future__ import annotations

import functools
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from wakeledger.cli import screen

if TYPE_CHECKING:
    from wakeledger.present.products import Products

Record = TypeVar("Record")

#: Formats figures are written in.
FORMATS = ("pdf", "png", "svg")


def _formats(_context: click.Context, _parameter: click.Parameter, given: str | None) -> tuple[str, ...]:
    """Formats of figures as given on the command line.

    Raises
    ------
    click.BadParameter
        If one is not known, or none is named.
    """
    if given is None:
        return ()
    names = tuple(dict.fromkeys(name.strip().lower() for name in given.split(",") if name.strip()))
    for name in names:
        if name not in FORMATS:
            raise click.BadParameter(f"{name!r} is not a format of figures; allowed: {', '.join(FORMATS)}")
    if not names:
        raise click.BadParameter(f"no format is named; allowed: {', '.join(FORMATS)}, with commas between them")
    return names


figures_option = click.option(
    "--figures", callback=_formats, metavar="pdf,png,svg", help="Also write the figures in these formats."
)
overwrite_option = click.option("--overwrite", is_flag=True, help="Replace existing products.")


@dataclass(frozen=True)
class Delivery:
    """Where a record goes.

    Attributes
    ----------
    as_json : bool
        Whether a JSON document is printed instead of text.
    out : Path or None
        Folder of the products; None where none are written.
    figures : tuple of str
        Formats in which the figures are written, too.
    overwrite : bool
        Whether existing products are replaced.
    """

    as_json: bool
    out: Path | None
    figures: tuple[str, ...]
    overwrite: bool

    def require_free(self, products: Products[Any]) -> None:
        """Refuse a folder that holds products or cannot be written, before any work is done.

        Parameters
        ----------
        products : Products
            What is to be written.

        Raises
        ------
        click.UsageError
            If figures are asked for, and no folder to write them into.
        InputError
            As `wakeledger.present.products.Products.require_free`.
        """
        if self.figures and self.out is None:
            raise click.UsageError(
                "--figures needs --out DIR, the folder to write them into", click.get_current_context()
            )
        if self.out is not None:
            products.require_free(self.out, overwrite=self.overwrite)

    def finish(
        self, record: Record, products: Products[Record], *, document: Callable[[], str], text: Callable[[], str]
    ) -> None:
        """Write the products, where a folder was given, and print the record.

        Parameters
        ----------
        record : object
            The record.
        products : Products
            What is written of it.
        document, text : callable
            Give what is printed: a JSON document, or text for a terminal.

        Raises
        ------
        InputError
            If the products cannot be written.
        """
        names: Sequence[Path] = ()
        if self.out is not None:
            names = products.write(record, self.out, figures=self.figures, overwrite=self.overwrite)
        if self.as_json:
            screen.show(document())
            return
        screen.show(text())
        if self.out is not None:
            screen.show_written(self.out, names)


def delivered(*, json_help: str, drawn: bool = True) -> Callable[[Callable[..., int]], Callable[..., int]]:
    """Give a command the options of a delivery, and its function the `Delivery` as the argument ``delivery``.

    Parameters
    ----------
    json_help : str
        What ``--json`` prints, in a sentence.
    drawn : bool
        Whether the command's figures can be written by themselves.

    Returns
    -------
    callable
        The decorator.
    """

    def decorate(function: Callable[..., int]) -> Callable[..., int]:
        @functools.wraps(function)
        def with_delivery(
            *arguments: Any,
            as_json: bool,
            out: Path | None,
            overwrite: bool,
            figures: Sequence[str] = (),
            **options: Any,
        ) -> int:
            delivery = Delivery(as_json, out, tuple(figures), overwrite)
            return function(*arguments, delivery=delivery, **options)

        options = [
            click.option("--json", "as_json", is_flag=True, help=json_help),
            click.option(
                "--out",
                type=click.Path(path_type=Path),
                metavar="DIR",
                help="Also write the products into this folder.",
            ),
            *([figures_option] if drawn else []),
            overwrite_option,
        ]
        wrapped: Callable[..., int] = with_delivery
        for option in reversed(options):
            wrapped = option(wrapped)
        return wrapped

    return decorate
