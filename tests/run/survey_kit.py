"""Surveys written to disk for end-to-end tests: an exact wake, its recording in any form, and the survey file."""

import json
from pathlib import Path

import numpy as np

from wakeledger.run.survey import load, reduce
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import GaussianLosses, SyntheticWake, wing_and_tail_wake, wing_wake

SPEED, DENSITY, PRESSURE = 40.0, 1.2, 100_000.0
SPAN, AREA, CHORD = 1.2, 0.18, 0.15
#: A large core keeps the planes small: 2.5 cm is half of it.
CORE, SPACING = 0.05, 0.025
REFERENCE = Reference(speed=SPEED, density=DENSITY, static_pressure=PRESSURE)
ROWS = ("profile_drag", "induced_drag", "residual_drag", "total_drag", "lift", "side_force", "rolling_moment")


def axes(*, spacing=SPACING, y=(-1.1, 1.1), z=(-0.7, 0.6)):
    """Lines of a uniform tensor grid, m."""
    return tuple(low + spacing * np.arange(round((high - low) / spacing) + 1) for low, high in (y, z))


def asymmetric(eta):
    """A loading with more lift to port: starboard wing down, so the rolling moment is positive."""
    return np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - 0.3 * eta)


def wing(reference=REFERENCE, **options):
    """Rolled-up wake of a wing."""
    return wing_wake(reference, **{"span": SPAN, "core": CORE, "x": 1.2, "n": 120, **options})


def wing_and_tail(reference=REFERENCE, **options):
    """Rolled-up wake of a wing and a tailplane that carries a download."""
    return wing_and_tail_wake(
        reference, **{"span": SPAN, "core": CORE, "x": 1.4, "n": 120, "n_tail": 60, "tail_z": 0.2, **options}
    )


def turned(wake, angle):
    """The whole wake turned about the x axis, counter-clockwise seen from behind."""
    losses = wake.losses
    c, s = np.cos(angle), np.sin(angle)
    return SyntheticWake(
        wake.reference,
        tuple(sheet.rotated(angle) for sheet in wake.sheets),
        GaussianLosses(c * losses.y - s * losses.z, s * losses.y + c * losses.z, losses.strength, losses.width),
        None if wake.cores is None else wake.cores.rotated(angle),
    )


def table(wake, y, z):
    """Columns in SI at the points of a tensor grid, row after row; pressures absolute."""
    yy, zz = np.meshgrid(y, z)
    return at(wake, yy.ravel(), zz.ravel())


def at(wake, y, z):
    """Columns in SI at any points; pressures absolute."""
    state = wake.state(y, z)
    names = ("u", "v", "w", "total_pressure", "static_pressure")
    return {"y": y, "z": z, **{name: np.asarray(getattr(state, name)) for name in names}}


UNITS = {"y": "m", "z": "m", "u": "m/s", "v": "m/s", "w": "m/s", "total_pressure": "Pa", "static_pressure": "Pa"}


def columns(**changes):
    """``[plane.columns]`` in SI with absolute pressures; a change replaces an entry, None removes it."""
    entries = {name: {"column": name, "unit": unit} for name, unit in UNITS.items()} | changes
    return {name: entry for name, entry in entries.items() if entry is not None}


def description(**changes):
    """A survey file's content; a change is merged into its table, None removes a key."""
    base = {
        "title": "test survey",
        "reference": {"speed": f"{SPEED} m/s", "density": f"{DENSITY} kg/m^3", "static_pressure": f"{PRESSURE} Pa"},
        "model": {"reference_area": f"{AREA} m^2", "span": f"{SPAN} m", "mean_chord": f"{CHORD} m"},
        # Far behind a synthetic wake without a bound line.
        "plane": {"file": "plane.csv", "station": "1000 m", "primary": "total_pressure", "columns": columns()},
        "boundary": {"kind": "free_air"},
    }
    return merged(base, changes)


def merged(base, changes):
    """Nested merge; None removes a key."""
    result = dict(base)
    for key, value in changes.items():
        if value is None:
            result.pop(key, None)
        elif isinstance(value, dict) and isinstance(result.get(key), dict) and key != "columns":
            result[key] = merged(result[key], value)
        else:
            result[key] = value
    return result


def toml(content):
    """The content as TOML; nested tables are written inline."""

    def value(item):
        if isinstance(item, dict):
            return "{ " + ", ".join(f"{json.dumps(key)} = {value(entry)}" for key, entry in item.items()) + " }"
        if isinstance(item, list | tuple):
            return "[" + ", ".join(value(entry) for entry in item) + "]"
        return json.dumps(item)

    lines = [f"{key} = {value(item)}" for key, item in content.items() if not isinstance(item, dict | list)]
    for key, item in content.items():
        if isinstance(item, dict):
            lines += [f"[{key}]", *(f"{name} = {value(entry)}" for name, entry in item.items())]
        elif isinstance(item, list):
            for entry in item:
                lines += [f"[[{key}]]", *(f"{name} = {value(part)}" for name, part in entry.items())]
    return "\n".join(lines) + "\n"


def write_csv(path, data, *, separator=",", decimal=".", comment=None):
    """The columns as a table with a heading, at full precision; NaN becomes an empty cell."""
    lines = [separator.join(data)]
    if comment is not None:
        lines.insert(0, comment)
    for row in zip(*data.values(), strict=True):
        cells = ("" if np.isnan(cell) else repr(float(cell)).replace(".", decimal) for cell in row)
        lines.append(separator.join(cells))
    Path(path).write_text("\n".join(lines) + "\n", encoding="utf-8")


def write(folder, data, content, **options):
    """The data (where given) and the survey file; gives the survey file's path."""
    folder.mkdir(parents=True, exist_ok=True)
    if data is not None:
        write_csv(folder / content["plane"]["file"], data, **options)
    path = folder / "survey.toml"
    path.write_text(toml(content), encoding="utf-8")
    return path


def ledger(folder, data, content=None, **options):
    """Write, load and reduce."""
    return reduce(load(write(folder, data, description() if content is None else content, **options)))


def values(found):
    """The rows' values by name."""
    return {row.name: row.value for row in found.rows}


def source(name, applies_to, amount, effect="systematic", **more):
    """One ``[[uncertainty.source]]``."""
    return {
        "name": name,
        "applies_to": [applies_to] if isinstance(applies_to, str) else list(applies_to),
        "effect": effect,
        "standard_uncertainty": amount,
        **more,
    }
