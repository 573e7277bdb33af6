"""Surveys in test sections for end-to-end tests: a wing between walls, in a jet or on a reflection plane, exact."""

import numpy as np

from wakeledger.stream.reference import Reference
from wakeledger.synthetic import GaussianLosses, TunnelWake, shed, sheet_losses, straight_edge

SPEED, DENSITY, PRESSURE = 40.0, 1.2, 100_000.0
REFERENCE = Reference(speed=SPEED, density=DENSITY, static_pressure=PRESSURE)
AREA, SPAN, CHORD = 0.18, 1.2, 0.15
#: A large core keeps the planes small: 4 cm is half of it.
CORE, SPACING = 0.08, 0.04
COUNT = 0.5 * DENSITY * SPEED**2 * AREA * 1e-4


def asymmetric(eta):
    """A loading with more lift to port."""
    return np.sqrt(np.clip(1 - eta**2, 0, None)) * (1 - 0.3 * eta)


def wing(section=None, reflection=None, *, loading=None, y=0.0, z=0.04, empty=None, core=CORE):
    """A straight wing's flat wake; with a reflection plane "y" its starboard half."""
    shape = loading or ("elliptic" if reflection == "y" else asymmetric)
    elements = shed(shape, straight_edge(SPAN, y=y, z=z), peak=2.0, core=core, n=60)
    losses = sheet_losses(elements, elements, total=4.0, width=0.09)
    if reflection == "y":
        half = losses.y > 0
        losses = GaussianLosses(losses.y[half], losses.z[half], losses.strength[half], losses.width[half])
        elements = elements[elements.y > 0]
    return TunnelWake(REFERENCE, elements, losses, section, reflection, empty=empty)


def points(y, z, spacing=SPACING):
    """Places of a uniform grid in rows, m."""
    lines = (low + spacing * np.arange(round((high - low) / spacing) + 1) for low, high in (y, z))
    yy, zz = np.meshgrid(*lines)
    return yy.ravel(), zz.ravel()


def columns(state, y, z, *, noise=0.0, seed=0):
    """Columns in SI, with one noise on all velocities, m/s."""
    rng = np.random.default_rng(seed)
    data = {"y": y, "z": z}
    for name in ("u", "v", "w"):
        data[name] = getattr(state, name) + noise * rng.standard_normal(y.size)
    return data | {name: np.asarray(getattr(state, name)) for name in ("total_pressure", "static_pressure")}


def description(kit, boundary, **more):
    """A survey file's content with its boundary; the wake region is kept near the wake."""
    content = kit.description(boundary=boundary, wake={"grow": "80 mm"})
    return kit.merged(content, more)


def table(duct, kind="closed_walls", **more):
    """``[boundary]`` of a rectangular section."""
    y, z = ([f"{place!r} m" for place in walls] for walls in (duct.y, duct.z))
    return {"kind": kind, "y": y, "z": z, **more}
