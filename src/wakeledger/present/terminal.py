"""The ledger and the inspection as text for a terminal; pure functions, nothing is printed here."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from typing import TYPE_CHECKING

from wakeledger.ledger.rounding import rounded, significant
from wakeledger.present.computed_text import (
    closure_notes,
    closure_table,
    diagnostic_lines,
    diagnostic_meanings,
    diagnostic_tables,
)
from wakeledger.present.map_text import map_lines, plain
from wakeledger.present.printing import (
    bullet,
    heading,
    joined,
    new_console,
    new_table,
    section,
    sentences_of,
    text_of,
    with_statement,
)
from wakeledger.present.repeats_text import repeats_table
from wakeledger.present.stations_text import (
    fit_sentence,
    stations_tables,
    verdict_lines,
    verdict_reasons,
    verdict_tables,
)
from wakeledger.present.tunnel_text import (
    corrected_cells,
    corrected_table,
    tunnel_planes,
    tunnel_reasons,
    tunnel_tables,
)
from wakeledger.present.wording import (
    ABOUT_COUNTS,
    ABOUT_ERROR,
    ABOUT_U,
    ABOUT_U95,
    VERDICT_STYLES,
    VERDICT_WORDS,
    coefficient_text,
    digits,
    error_text,
    grouped_reasons,
    signed,
    unit_text,
    words,
)

if TYPE_CHECKING:
    from rich.console import Console, RenderableType
    from rich.table import Table

    from wakeledger.ledger.inspection import AngleRange, ChannelSummary, EdgeState, Inspection
    from wakeledger.ledger.ledger import Ledger
    from wakeledger.ledger.rows import Check, Comparison, CrossCheck, Row

#: From this width on, estimates show their value.
ROOMY = 92

#: From this width on, a check's message stands beside its figures.
WIDE = 120


def ledger_text(ledger: Ledger, *, width: int = 100, colour: bool = False) -> str:
    """A ledger as text: rows, estimates, comparisons, checks, notes.

    Parameters
    ----------
    ledger : Ledger
        The ledger.
    width : int
        Columns of the terminal.
    colour : bool
        Whether to write the terminal's colour codes; nothing is said by colour alone.

    Returns
    -------
    str
        Lines without trailing blanks, ended by a line feed.
    """
    console = new_console(width, colour)
    heading(console, ledger.title, ledger.test)
    console.print(_rows_table(ledger.rows))
    for sentence in grouped_reasons((words(row.name), row.reason) for row in ledger.rows):
        bullet(console, sentence)
    if ledger.repeats is not None:
        section(console, f"The {ledger.repeats.sizes['run']} runs, and how far they lie apart (k = 1)")
        console.print(repeats_table(ledger, ledger.repeats))
    _stations(console, ledger)
    _tunnel(console, ledger)
    if ledger.estimates:
        section(console, "Other methods against the primary one")
        console.print(_estimates_table(ledger.estimates, roomy=console.width >= ROOMY))
        reasons = [(f"{words(line.row)}, {words(line.method)}", line.reason) for line in ledger.estimates]
        for sentence in grouped_reasons(reasons):
            bullet(console, sentence)
    if ledger.comparisons:
        section(console, "Comparison with other values")
        console.print(_comparisons_table(ledger.comparisons))
        reasons = [(f"{line.name}, {words(line.row)}", line.reason) for line in ledger.comparisons]
        for sentence in grouped_reasons(reasons):
            bullet(console, sentence)
    _closures(console, ledger)
    _checks(console, ledger.checks)
    _diagnostics(console, ledger)
    sentences_of(console, "Notes", ledger.notes)
    return with_statement(console, *_terms(ledger))


def _terms(ledger: Ledger) -> Iterator[str]:
    """What the signs mean that stand in the tables of this ledger."""
    yield ABOUT_U95
    yield ABOUT_U
    if any(coefficient_text(row)[2] for row in ledger.rows):
        yield ABOUT_COUNTS
    if ledger.comparisons or any(one.estimates for one in (ledger, *ledger.stations)):
        yield ABOUT_ERROR


def inspection_text(inspection: Inspection, *, width: int = 100, colour: bool = False, unicode: bool = True) -> str:
    """What `inspect` found, as text.

    Parameters
    ----------
    inspection : Inspection
        The record.
    width : int
        Columns of the terminal.
    colour : bool
        Whether to write the terminal's colour codes.
    unicode : bool
        Whether the terminal has other characters than ASCII.

    Returns
    -------
    str
        Lines without trailing blanks, ended by a line feed.
    """
    # Some characters become several in ASCII.
    console = new_console(width if unicode else width - 4, colour)
    heading(console, inspection.title, inspection.test)
    facts = new_table(("", "left"), ("", "left"), header=False)
    for name, fact in _facts(inspection):
        facts.add_row(name, fact)
    console.print(facts)
    if inspection.map is not None:
        line = inspection.map.is_line
        section(console, "Places along the traverse" if line else "Map of the points, seen from behind")
        for text in map_lines(inspection.map, width=console.width, unicode=unicode):
            console.print(text, no_wrap=True, crop=False)
    if inspection.channels:
        section(console, "Measured variables")
        console.print(_channels_table(inspection.channels))
    if inspection.angles:
        section(console, "Flow angles, with where they occur (y, z in m)")
        console.print(_angles_table(inspection.angles))
    if inspection.edges:
        section(console, "Edges of the window, inside the wake region")
        console.print(_edges_table(inspection.edges))
    _checks(console, inspection.checks)
    sentences_of(console, "What to do", [advice.message for advice in inspection.recommendations])
    sentences_of(console, "Notes", inspection.notes)
    return text_of(console) if unicode else plain(text_of(console))


def _channels_table(channels: Sequence[ChannelSummary]) -> Table:
    """One line for each variable; columns that would be empty are left out."""
    declared = any(math.isfinite(channel.declared_noise) for channel in channels)
    repeated = any(math.isfinite(channel.repeatability) for channel in channels)
    missing = any(channel.missing for channel in channels)
    shown = (True, True, True, True, True, declared, repeated, missing)
    heads = (
        ("variable", "left"), ("from", "right"), ("to", "right"), ("unit", "left"), ("noise", "right"),
        ("declared", "right"), ("repeats", "right"), ("missing", "right"),
    )  # fmt: skip
    table = new_table(*(head for head, kept in zip(heads, shown, strict=True) if kept))
    for channel in channels:
        cells = (
            words(channel.name),
            digits(channel.minimum),
            digits(channel.maximum),
            unit_text(channel.unit),
            digits(channel.noise, 2),
            digits(channel.declared_noise, 2),
            digits(channel.repeatability, 2),
            str(channel.missing) if channel.missing else "–",
        )
        table.add_row(*(cell for cell, kept in zip(cells, shown, strict=True) if kept))
    return table


def _angles_table(angles: Sequence[AngleRange]) -> Table:
    table = new_table(
        ("angle", "left"), ("from", "right"), ("at", "right"), ("to", "right"), ("at", "right"), ("unit", "left")
    )
    for angle in angles:
        low, high = (f"{math.degrees(value):.1f}" for value in (angle.minimum, angle.maximum))
        places = [", ".join(f"{round(x, 6) + 0.0:.4g}" for x in at) for at in (angle.minimum_at, angle.maximum_at)]
        table.add_row(words(angle.name), low, places[0], high, places[1], "deg")
    return table


def _edges_table(edges: Sequence[EdgeState]) -> Table:
    """Largest values near each edge and shares in its last line; vorticity only where it was measured."""
    turning = any(math.isfinite(edge.vorticity) for edge in edges)
    heads = [("edge", "left"), ("loss / q", "right"), ("of the loss", "right")]
    if turning:
        heads += [("vorticity / largest", "right"), ("of the vorticity", "right")]
    table = new_table(*heads, ("", "left"))
    for edge in edges:
        cells = [edge.side, digits(edge.total_pressure_loss, 2), _share(edge.loss_share)]
        if turning:
            cells += [digits(edge.vorticity, 2), _share(edge.vorticity_share)]
        table.add_row(*cells, "quiet" if edge.quiet else "TOUCHED")
    return table


def _share(share: float) -> str:
    return f"{100 * share:.1f} %" if math.isfinite(share) else "–"


def _facts(inspection: Inspection) -> Iterable[tuple[str, str]]:
    ny, nz = inspection.shape
    dy, dz = (1e3 * step for step in inspection.spacing)
    y0, y1, z0, z1 = inspection.window
    yield "data", inspection.source
    yield "points", f"{inspection.points}, {inspection.arrangement}"
    if min(ny, nz) == 1:
        along, places, step, start, stop = ("z", nz, dz, z0, z1) if ny == 1 else ("y", ny, dy, y0, y1)
        yield "traverse", f"{places} places, {significant(step, 3)} mm apart"
        yield "window", f"{along} {start:.4g} … {stop:.4g} m"
    else:
        yield "plane", f"{ny} × {nz} points (y × z), {significant(dy, 3)} × {significant(dz, 3)} mm apart"
        yield "window", f"y {y0:.4g} … {y1:.4g} m, z {z0:.4g} … {z1:.4g} m"
    if math.isfinite(inspection.station):
        yield "station", f"{inspection.station:.4g} m behind the trailing edge"
    yield "coverage", f"{100 * inspection.coverage:.1f} % of the window's cells hold a measurement"
    flagged = ", ".join(f"{count} {words(name)}" for name, count in inspection.flags.items() if count)
    yield "flagged cells", flagged or "none"
    lost = len(inspection.missing_places)
    if lost:
        yield "lost places", f"{lost}, of them {inspection.missing_in_wake} in the wake region"
    repeats = inspection.repeats
    if repeats.places:
        again = f"; {repeats.revisited} of them left and visited again" if repeats.revisited else ""
        where = "1 place" if repeats.places == 1 else f"{repeats.places} places"
        yield "repeats", f"{where} measured {repeats.points} times{again}"


def _stations(console: Console, ledger: Ledger) -> None:
    """The planes of several stations beside each other, and what the other methods say of each."""
    if ledger.combined is None:
        return
    section(console, f"The {len(ledger.stations)} planes, ± U95, by their distance behind the trailing edge")
    _blocks(console, stations_tables(ledger, console.width))
    fitted = fit_sentence(ledger.combined)
    if fitted:
        bullet(console, fitted)
    if verdict_lines(ledger):
        section(console, "Other methods against the primary one on each plane: verdict and E_n")
        _blocks(console, verdict_tables(ledger, console.width))
        for sentence in grouped_reasons(verdict_reasons(ledger)):
            bullet(console, sentence)


def _blocks(console: Console, tables: Sequence[Table]) -> None:
    """Print the blocks of a table that is wider than the terminal."""
    for k, table in enumerate(tables):
        if k:
            console.print()
        console.print(table)


def _tunnel(console: Console, ledger: Ledger) -> None:
    """What the walls do at the model, and the coefficients corrected for blockage."""
    if tunnel_planes(ledger):
        section(console, "What the walls do at the model")
        _blocks(console, tunnel_tables(ledger, console.width))
        for sentence in grouped_reasons(tunnel_reasons(ledger)):
            bullet(console, sentence)
    if corrected_cells(ledger):
        section(console, "Coefficients on the dynamic pressure corrected for blockage")
        console.print(corrected_table(ledger))


def _closures(console: Console, ledger: Ledger) -> None:
    """Far field less near field, and what is known to make them differ."""
    if not ledger.closures:
        return
    section(console, "Far field less near field, and what makes them differ")
    console.print(closure_table(ledger))
    for sentence in closure_notes(ledger):
        bullet(console, sentence)


def _diagnostics(console: Console, ledger: Ledger) -> None:
    """Other forms of the drag and where the power goes, of every plane that has such figures."""
    if not diagnostic_lines(ledger):
        return
    section(console, "For information: figures of the computed planes that are in no row; without uncertainty")
    _blocks(console, diagnostic_tables(ledger, console.width))
    for sentence in diagnostic_meanings(ledger):
        bullet(console, sentence)


def _rows_table(rows: Sequence[Row]) -> Table:
    figures = [rounded(row.value, row.expanded_uncertainty) for row in rows]
    coefficients = [coefficient_text(row) for row in rows]
    values = joined(figures)
    shares = joined([text[:2] for text in coefficients])
    table = new_table(
        ("", "left"), ("value ± U95", "left"), ("unit", "left"), ("u (k = 1)", "right"), ("coefficient ± U95", "left"),
        ("", "left"),
    )  # fmt: skip
    for row, value, share, coefficient in zip(rows, values, shares, coefficients, strict=True):
        u = significant(row.standard_uncertainty, 2)
        table.add_row(words(row.name), value, unit_text(row.unit), u, share, coefficient[2])
    return table


def _estimates_table(estimates: Sequence[CrossCheck], *, roomy: bool) -> Table:
    table = new_table(
        ("", "left"), ("method", "left"), *([("estimate ± u", "left")] if roomy else []), ("difference", "right"),
        ("expected", "right"), ("", "left"), ("E_n", "right"), ("verdict", "left"),
    )  # fmt: skip
    values = joined([rounded(line.value, line.standard_uncertainty) for line in estimates])
    for line, value in zip(estimates, values, strict=True):
        u = line.standard_uncertainty
        difference, expected = (signed(figure, u) for figure in (line.difference, line.expected_difference))
        cells: list[RenderableType] = [words(line.row), words(line.method), *([value] if roomy else [])]
        cells += [difference, expected, unit_text(line.unit), error_text(line.normalised_error), _verdict(line.verdict)]
        table.add_row(*cells)
    return table


def _comparisons_table(comparisons: Sequence[Comparison]) -> Table:
    table = new_table(
        ("", "left"), ("row", "left"), ("value ± u", "left"), ("row − value", "right"), ("", "left"), ("E_n", "right"),
        ("verdict", "left"),
    )  # fmt: skip
    values = joined([rounded(line.value, line.standard_uncertainty) for line in comparisons])
    for line, value in zip(comparisons, values, strict=True):
        difference = signed(line.difference, line.standard_uncertainty)
        verdict = _verdict(line.verdict)
        error = error_text(line.normalised_error)
        table.add_row(line.name, words(line.row), value, difference, unit_text(line.unit), error, verdict)
    return table


def _checks(console: Console, checks: Sequence[Check]) -> None:
    from rich.padding import Padding
    from rich.table import Table
    from rich.text import Text

    if not checks:
        return
    section(console, "Checks")
    wide = console.width >= WIDE
    widths = (4, 24, 8, 14)
    for check in checks:
        grid = Table.grid(padding=(0, 2, 0, 0))
        for width, side in zip(widths, ("left", "left", "right", "right"), strict=True):
            grid.add_column(width=width, justify="right" if side == "right" else "left")
        cells: list[RenderableType] = [_verdict(check.verdict), words(check.name), digits(check.value, 2)]
        cells.append(f"limit {digits(check.limit, 2)}")
        if wide:
            grid.add_column(ratio=1)
            cells.append(Text(check.message))
        grid.add_row(*cells)
        console.print(grid)
        if not wide:
            console.print(Padding(Text(check.message), (0, 0, 0, widths[0] + 2)))


def _verdict(verdict: str) -> RenderableType:
    from rich.text import Text

    return Text(VERDICT_WORDS[verdict], style=VERDICT_STYLES[verdict])
