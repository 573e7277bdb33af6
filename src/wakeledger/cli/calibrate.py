"""``wakeledger calibrate``: from a table of known flows to a probe's calibration."""

from __future__ import annotations

from pathlib import Path

import click

from wakeledger.cli import exits, screen

#: Largest share of the points that may be bad, or lead back to no direction, without failing.
_FAILING = 0.05


@click.command(short_help="Calibrate a five- or seven-hole probe.")
@click.argument("probe", type=click.Path(path_type=Path), metavar="PROBE.toml")
@click.option("--out", type=click.Path(path_type=Path), metavar="FILE.nc", help="The calibration file.")
@click.option("--overwrite", is_flag=True, help="Replace existing products.")
@click.option("--quiet", is_flag=True, help="Print nothing.")
@click.pass_obj
def calibrate(command: str, probe: Path, out: Path | None, overwrite: bool, quiet: bool) -> int:
    """Calibrate a five- or seven-hole probe.

    Takes a probe file that names a table of flow directions, hole pressures, total and static pressure. Writes the
    calibration (netCDF), by default <probe>.nc beside the probe file, and a figure of the coefficient grid and the
    residuals beside it (SVG). Prints the calibration's standard uncertainty and names every bad point. The exit status
    is 1 where more than one point in twenty cannot be used.
    """
    from wakeledger.core.errors import DataError
    from wakeledger.present import placing

    target = out if out is not None else probe.with_suffix(".nc")
    picture = target.with_suffix(".svg")
    if target.is_dir():
        raise DataError("this is a directory", file=target, remedy="give a file with --out")
    files = target.name, picture.name
    placing.require_free(target.parent, files, overwrite=overwrite)

    from wakeledger.intake.probe.stored import write_calibration
    from wakeledger.run.traverse.calibrate import calibrate_probe

    found = calibrate_probe(probe, command=command)

    from wakeledger.present.figures.calibration import calibration_figure
    from wakeledger.present.figures.canvas import figure_bytes

    def build(folder: Path) -> tuple[Path, ...]:
        (folder / picture.name).write_bytes(figure_bytes(calibration_figure(found), "svg"))
        write_calibration(found, folder / target.name)
        return tuple(map(Path, files))

    names = placing.write_whole(target.parent, build, files=files, overwrite=overwrite)
    if not quiet:
        from wakeledger.present.calibration_text import calibration_text

        screen.show(calibration_text(found, width=screen.width()))
        screen.show_written(target.parent, names)
    lost = (found.bad | ~found.covered).mean()
    return exits.CHECK_FAILED if lost > _FAILING else exits.DONE
