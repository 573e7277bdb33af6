"""Raw traverses written to disk for end-to-end tests: a calibrated sphere probe in an exact wake, its survey file."""

import runpy
from pathlib import Path

import numpy as np

from wakeledger.intake.probe.stored import write_calibration
from wakeledger.run.traverse.calibrate import calibrate_probe
from wakeledger.synthetic.probes import TraverseConditions, record_traverse, sphere_probe, with_revisits
from wakeledger.synthetic.recordings import grid_positions

_kit = runpy.run_path(str(Path(__file__).resolve().with_name("survey_kit.py")))
DEGREE = np.pi / 180


def directions(step=5.0, half=30.0):
    """Pitch and yaw of a square grid of directions, rad."""
    side = DEGREE * np.arange(-half, half + 0.1, step)
    return tuple(part.ravel() for part in np.meshgrid(side, side))


def write_probe(folder, probe, table=None):
    """A probe file with its calibration table; gives the path of the probe file."""
    folder.mkdir(parents=True, exist_ok=True)
    table = probe.calibration_table(*directions()) if table is None else table
    _kit["write_csv"](folder / "calibration.csv", table)
    angles = ("pitch", "yaw")
    units = {name: "rad" if name in angles else "Pa" for name in table if name != "mach"}
    entries = [f'{name} = {{ column = "{name}", unit = "{unit}" }}' for name, unit in units.items()]
    entries += ['mach = { column = "mach" }'] if "mach" in table else []
    head = f'title = "sphere"\nholes = {probe.holes}\n[data]\nfile = "calibration.csv"\n[data.columns]\n'
    path = folder / "probe.toml"
    path.write_text(head + "\n".join(entries) + "\n", encoding="utf-8")
    return path


def stored_probe(folder, probe, table=None):
    """The stored calibration of a probe; gives its path."""
    path = folder / "probe.nc"
    write_calibration(calibrate_probe(write_probe(folder, probe, table)), path)
    return path


def positions(*, revisit=None, **options):
    """Rows to and fro over the usual window; `revisit` is (y, z, every)."""
    at = grid_positions(*_kit["axes"](**options), serpentine=True)
    if revisit is None:
        return at
    y, z, every = revisit
    return with_revisits(at, y=y, z=z, every=every)


def columns(values, *, relative=True, row=True):
    """``[plane.columns]`` of a raw traverse."""
    entries = {name: {"column": name, "unit": "m"} for name in ("y", "z")}
    if row:
        entries["row"] = {"column": "row"}
    for name in values:
        unit = {"time": "s", "temperature": "K"}.get(name, "Pa")
        entries[name] = {"column": name, "unit": unit}
        if relative and name[0] == "p":
            entries[name]["relative_to"] = "static"
    return entries


def traverse(folder, wake, head, calibration, *, how=None, at=None, seed=1, keep=None, table=None, **changes):
    """Record a raw traverse, write it with its survey file; gives the survey file's path.

    `keep` chooses columns beside y, z and the holes, `table` edits the columns before they are written.
    """
    how = TraverseConditions() if how is None else how
    at = positions() if at is None else at
    raw = record_traverse(wake, at, head, generator=np.random.default_rng(seed), conditions=how)
    values = {name: array for name, array in raw.values.items() if keep is None or name[0] == "p" or name in keep}
    row = keep is None or "row" in keep
    data = {"y": at.y, "z": at.z} | ({"row": at.row.astype(float)} if row else {}) | values
    stated = {name: f"{getattr(how, name) / DEGREE!r} deg" for name in ("pitch", "yaw", "roll")}
    content = {
        "plane": {"primary": "hole_pressures", "columns": columns(values, relative=how.relative, row=row)},
        "probe": {"calibration": str(calibration), **stated},
    }
    content = _kit["merged"](_kit["merged"](_kit["description"](), content), changes)
    return _kit["write"](folder, data if table is None else table(data), content)


def zeros(before, after=None):
    """``zeros`` of ``[probe]``."""
    found = {"before": {f"p{k}": f"{value} Pa" for k, value in enumerate(before, start=1)}}
    if after is not None:
        found["after"] = {f"p{k}": f"{value} Pa" for k, value in enumerate(after, start=1)}
    return found


__all__ = ["sphere_probe", "stored_probe", "traverse", "write_probe", "zeros"]
