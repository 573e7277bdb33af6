"""Checks of a survey's quality: each with a value, a limit, a verdict and a sentence that says what to do.

Every check compares a dimensionless value with two limits: above the first the survey deserves a look (`warn`), above
the second its figures should not be used as they stand (`fail`). The limits are common practice unless a note says
where one comes from.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from wakeledger.core.grid import Array, UniformGrid
from wakeledger.ledger.rows import Check, CheckVerdict
from wakeledger.physics.fields.boundary import Boundary, ClosedWalls, FreeAir, OpenJet, wall_distance
from wakeledger.physics.fields.edge import edge_integrals
from wakeledger.physics.fields.wake_region import Mask
from wakeledger.run.chain.reduction import Reduction
from wakeledger.run.traverse.probe_range import ProbeRange
from wakeledger.run.uncertainty.channel_noise import FACTOR, NoiseFindings

FREE_AIR = FreeAir()

#: First and second limit of each check.
LIMITS: dict[str, tuple[float, float]] = {
    "net_circulation": (0.02, 0.10),
    "mass_balance": (0.003, 0.02),
    "edge_vorticity": (0.005, 0.03),
    "edge_total_pressure_loss": (0.005, 0.03),
    "core_resolution": (0.8, 1.5),
    "noise_bias": (0.02, 0.10),
    "declared_noise": (FACTOR, math.inf),
    "outer_flow": (0.05, 0.25),
    "missing_points": (0.02, 0.10),
    "probe_range": (0.02, 1.0),
}
#: Width of the strip along the window's edge that must be quiet, in cells.
EDGE_CELLS = 3
#: A window whose edge lies within so many spacings of a wall meets it.
WALL_CELLS = 1.5
#: Closed lines around the wake that the net circulation is averaged over, at most.
_CONTOURS = 5
#: Share of the strongest circulation below which a vortex's core does not matter: its drag goes with the square.
FAINT_VORTEX = 0.1
#: Flow-angle offset that deserves a look, rad.
ANGLE_LIMIT = math.radians(0.5)


class Core(Protocol):
    """A vortex core, as far as its resolution is concerned."""

    @property
    def circulation(self) -> float:
        """Circulation, m²/s."""

    @property
    def core_length(self) -> float:
        """Gaussian core length a, m."""

    @property
    def y(self) -> float:
        """Centre, m."""

    @property
    def z(self) -> float:
        """Centre, m."""


@dataclass(frozen=True)
class Facts:
    """What the checks need beyond the reduction itself.

    Attributes
    ----------
    vortices : sequence of Core
        The vortices found.
    raw_spacing : float
        Larger of the measured points' spacings, m.
    filled : ndarray of bool, shape (nz, ny)
        Places whose value was filled in.
    bias : float
        Noise bias of the induced drag that was subtracted, N; NaN where the noise is unknown.
    loss_zero_uncertainty : float
        Standard uncertainty of the loss zero, Pa.
    spacings : tuple of float
        Larger of the measured points' spacings about each vortex, m; empty where the points are evenly spaced.
    crossflow : bool
        Whether the direction of the flow was measured.
    probe : ProbeRange or None
        Where the probe was used, against where it was calibrated, if its calibration tells a Mach or Reynolds number.
    noise : NoiseFindings or None
        Declared noise beside what the data show; None where nothing is said of it, as on a computed plane.
    boundary : FreeAir, ClosedWalls or OpenJet
        What surrounds the survey, its reflection plane included.
    cut : float
        Distance from the reflection plane y = 0 inside which points were to be left out, m.
    computed : bool
        Whether the flow was computed: it has no noise and no instruments.
    """

    vortices: Sequence[Core]
    raw_spacing: float
    filled: Mask
    bias: float
    loss_zero_uncertainty: float
    spacings: tuple[float, ...] = ()
    crossflow: bool = True
    probe: ProbeRange | None = None
    noise: NoiseFindings | None = None
    boundary: Boundary = FREE_AIR
    cut: float = 0.0
    computed: bool = False


#: Why checks do not apply where the direction of the flow was not measured.
_NO_CROSSFLOW = {
    "net_circulation": "Pitot tubes do not tell the flow's direction, so the circulation of the wake is not known.",
    "edge_vorticity": "Pitot tubes do not tell the flow's direction, so the vorticity of the wake is not known.",
    "core_resolution": "Pitot tubes do not tell the flow's direction, so no vortex core was identified.",
    "noise_bias": "Pitot tubes do not tell the flow's direction, so there is no induced drag that noise could bias.",
}


def all_checks(reduction: Reduction, facts: Facts) -> tuple[Check, ...]:
    """Every check of one plane, in the ledger's order.

    Parameters
    ----------
    reduction : Reduction
        The nominal reduction, with its cross-checks.
    facts : Facts
        What else is known.

    Returns
    -------
    tuple of Check
        The last one only where a calibration tells its Mach or Reynolds number.
    """
    found: tuple[Check, ...] = (
        net_circulation(reduction, facts.boundary),
        mass_balance(reduction),
        edge_vorticity(reduction, facts.boundary),
        edge_total_pressure_loss(reduction, facts.boundary),
        core_resolution(facts),
        noise_bias(reduction, facts),
        declared_noise(facts.noise),
        outer_flow(reduction, facts),
        missing_points(reduction, facts),
    )
    if facts.probe is not None:
        found += (probe_range(facts.probe),)
    if facts.crossflow:
        return found
    return tuple(
        _check(check.name, math.nan, {"not_applicable": _NO_CROSSFLOW[check.name]})
        if check.name in _NO_CROSSFLOW
        else check
        for check in found
    )


def verdict_of(name: str, value: float) -> CheckVerdict:
    """Verdict that a value earns against the limits of a check; not applicable where it is NaN."""
    warn, fail = LIMITS[name]
    if math.isnan(value):
        return "not_applicable"
    if value > fail:
        return "fail"
    return "warn" if value > warn else "pass"


def _check(name: str, value: float, messages: dict[str, str]) -> Check:
    verdict = verdict_of(name, value)
    return Check(name, verdict, value, LIMITS[name][0], messages[verdict] if verdict in messages else messages["warn"])


def net_circulation(reduction: Reduction, boundary: Boundary = FREE_AIR) -> Check:
    """Net circulation of the window over the circulation of the sign that prevails.

    Between closed walls and over the ground the drag is finite with it, as walls or image carry the rest, so that it
    warns at most. Over the ground it is that of the upper half: the mirrored one balances any.
    """
    if boundary.reflection == "y":
        message = "The mirrored half balances the circulation: it says nothing about what the window misses."
        return _check("net_circulation", math.nan, {"not_applicable": message})
    forces = reduction.forces
    prevailing = float(forces.gross_circulation) + abs(float(forces.net_circulation)) / 2
    if prevailing == 0:
        return _check("net_circulation", math.nan, {"not_applicable": "No vorticity was found in the plane."})
    ground, walls = boundary.reflection == "z", isinstance(boundary, ClosedWalls)
    value = abs(_surrounding_circulation(reduction, above_ground=ground)) / prevailing
    limit = LIMITS["net_circulation"][0]
    if (ground or walls) and value > limit:
        where, what = ("Over the ground", "with its image") if ground else ("Between closed walls", "as tested")
        message = (
            f"{value:.1%} of the wake's circulation is unbalanced. {where} the induced drag {what} does not depend on"
            f" where the window ends{'' if ground else ', but that of free air does'}; if a vortex is cut, lift and"
            " drag are those of the part inside: see edge_vorticity, or check the crossflow's calibration."
        )
        return Check("net_circulation", "warn", value, limit, message)
    return _check(
        "net_circulation",
        value,
        {
            "pass": f"{value:.1%} of the wake's circulation is unbalanced around the wake.",
            "warn": f"{value:.1%} of the wake's circulation is unbalanced, so the induced drag depends on where the"
            f" {'jet' if isinstance(boundary, OpenJet) else 'window'} ends; widen the survey on the side whose vortex"
            " is cut, or check the crossflow's calibration.",
        },
    )


def _surrounding_circulation(reduction: Reduction, *, above_ground: bool = False) -> float:
    """Circulation around the wake, m²/s: the mean over a few closed lines between it and the window's edge."""
    grid, mask = reduction.flow.grid, reduction.region.mask
    ground = int(np.argmax(grid.z > -0.25 * grid.dz))
    rows, columns = np.flatnonzero(mask.any(axis=1)), np.flatnonzero(mask.any(axis=0))
    room = 0
    if rows.size:
        below = grid.nz if above_ground else rows[0]
        room = int(min(below, grid.nz - 1 - rows[-1], columns[0], grid.ny - 1 - columns[-1]))
    found = []
    for inset in range(min(room, _CONTOURS - 1) + 1):
        low = ground if above_ground else inset
        window = (slice(low, grid.nz - inset), slice(inset, grid.ny - inset))
        y, z = grid.y[window[1]], grid.z[window[0]]
        inner = UniformGrid(y[0], z[0], grid.dy, grid.dz, y.size, z.size)
        found.append(float(edge_integrals(reduction.flow.v[window], reduction.flow.w[window], inner).circulation))
    return float(np.mean(found))


def mass_balance(reduction: Reduction) -> Check:
    """Mean axial velocity outside the wake against the stream's."""
    outer = ~reduction.region.mask
    if not outer.any():
        return _check("mass_balance", math.nan, {"not_applicable": "The wake fills the window: no outer flow is left."})
    faster = 2 * reduction.wake_blockage / reduction.reference.speed
    excess = float((reduction.flow.u[outer] / reduction.reference.speed - 1).mean()) - faster
    value = abs(excess)
    stream = "the stream's" if faster == 0 else f"the stream's and what the wake adds between the walls ({faster:+.2%})"
    return _check(
        "mass_balance",
        value,
        {
            "pass": f"Outside the wake the axial velocity is {stream} within {value:.2%}.",
            "warn": f"Outside the wake the axial velocity is {excess:+.2%} off {stream}; check the reference speed,"
            " the static pressure and the probe's calibration, or blockage if the stream is bounded.",
        },
    )


@dataclass(frozen=True)
class EdgeShare:
    """What lies in the strip along the window's edge.

    Attributes
    ----------
    cut : float
        Share of a field's absolute integral along edges beyond which there is more flow; NaN where the field is zero.
    side : str
        The side with most of that.
    at_walls : float
        Share along edges that meet a wall.
    walls : tuple of str
        Sides that meet a wall.
    short : float
        Distance of that side from the wall beyond it, m; NaN where there is none.
    """

    cut: float
    side: str
    at_walls: float
    walls: tuple[str, ...]
    short: float


def _edge_share(field: Array, mask: Mask, grid: UniformGrid, boundary: Boundary) -> EdgeShare:
    inside = np.where(mask, np.abs(field), 0.0)
    total = float(inside.sum())
    gaps = _distances(grid, boundary)
    reach = WALL_CELLS * max(grid.dy, grid.dz)
    walls = tuple(side for side, gap in gaps.items() if gap <= reach and side not in _inner(boundary))
    if total == 0:
        return EdgeShare(math.nan, "", math.nan, walls, math.nan)
    n = EDGE_CELLS
    strips = {
        "starboard": (slice(None), slice(-n, None)),
        "port": (slice(None), slice(None, n)),
        "lower": (slice(None, n), slice(None)),
        "upper": (slice(-n, None), slice(None)),
    }
    amounts = {side: float(inside[strip].sum()) for side, strip in strips.items() if side not in _inner(boundary)}
    cut = np.zeros(grid.shape, dtype=bool)
    at_walls = cut.copy()
    for side in amounts:
        (at_walls if side in walls else cut)[strips[side]] = True
    open_sides = {side: amount for side, amount in amounts.items() if side not in walls}
    worst = max(open_sides, key=lambda side: open_sides[side]) if open_sides else ""
    shares = [float(inside[strip].sum()) / total for strip in (cut, at_walls & ~cut)]
    return EdgeShare(shares[0], worst, shares[1], walls, gaps.get(worst, math.nan))


def _inner(boundary: Boundary) -> tuple[str, ...]:
    """Sides of a mirrored window that say nothing of their own."""
    return {"y": ("port",), "z": ("lower",), None: ()}[boundary.reflection]


def _distances(grid: UniformGrid, boundary: Boundary) -> dict[str, float]:
    """Distance of each side of the window from the wall beyond it, m: the nearest along that side."""
    if not isinstance(boundary, ClosedWalls):
        return {}
    y, z = grid.y, grid.z
    found = {}
    for side, edge_y, edge_z in (
        ("starboard", np.full(grid.nz, y[-1]), z),
        ("port", np.full(grid.nz, y[0]), z),
        ("lower", y, np.full(grid.ny, z[0])),
        ("upper", y, np.full(grid.ny, z[-1])),
    ):
        # Of a slanting or round wall the middle of the side counts: its ends come close to it in any window.
        gap = wall_distance(boundary.section, edge_y, edge_z)
        found[side] = float(np.median(gap))
    return found


def _at_walls(share: EdgeShare, what: str) -> str:
    """Half a sentence about what meets the walls."""
    if not share.walls or not share.at_walls > 0:
        return ""
    return (
        f" {share.at_walls:.1%} of {what} lies where the window meets the {_listed(share.walls)} wall: it ends there."
    )


def _short(share: EdgeShare) -> str:
    if math.isnan(share.short):
        return ""
    return f" That side ends {1e3 * share.short:.3g} mm short of the wall, with more of it in between."


def _listed(sides: Sequence[str]) -> str:
    return sides[0] if len(sides) == 1 else ", ".join(sides[:-1]) + " and " + sides[-1]


def edge_vorticity(reduction: Reduction, boundary: Boundary = FREE_AIR) -> Check:
    """Share of the wake's vorticity that touches the window's edge where the flow goes on beyond it."""
    share = _edge_share(reduction.vorticity, reduction.region.mask, reduction.flow.grid, boundary)
    return _check(
        "edge_vorticity",
        share.cut,
        {
            "pass": "The window encloses the wake's vorticity." + _at_walls(share, "it"),
            "warn": f"{share.cut:.1%} of the wake's vorticity lies along the window's edge, most of it on the"
            f" {share.side} side: the survey does not enclose its wake; widen it there. Lift and induced drag are those"
            " of the part inside." + _short(share) + _at_walls(share, "the vorticity"),
            "not_applicable": "No vorticity was found in the plane.",
        },
    )


def edge_total_pressure_loss(reduction: Reduction, boundary: Boundary = FREE_AIR) -> Check:
    """Share of the total-pressure loss that touches the window's edge where the flow goes on beyond it."""
    loss = reduction.reference.total_pressure - reduction.flow.total_pressure
    share = _edge_share(loss, reduction.region.mask, reduction.flow.grid, boundary)
    return _check(
        "edge_total_pressure_loss",
        share.cut,
        {
            "pass": "The window encloses the wake's total-pressure loss." + _at_walls(share, "it"),
            "warn": f"{share.cut:.1%} of the total-pressure loss lies along the window's edge, most of it on the"
            f" {share.side} side: the wake still touches it; widen the survey there. The profile drag is that of the"
            " part inside." + _short(share) + _at_walls(share, "the loss"),
            "not_applicable": "No loss was found in the plane.",
        },
    )


def worst_core(facts: Facts) -> tuple[float, Core] | None:
    """The core measured most coarsely among the vortices that count: spacing over core length, and the vortex."""
    spacings = facts.spacings or (facts.raw_spacing,) * len(facts.vortices)
    least = FAINT_VORTEX * max((abs(vortex.circulation) for vortex in facts.vortices), default=0.0)
    cores = [
        (spacing / vortex.core_length, vortex)
        for vortex, spacing in zip(facts.vortices, spacings, strict=True)
        if vortex.core_length > 0 and abs(vortex.circulation) >= least
    ]
    return max(cores, key=lambda core: core[0], default=None)


def core_resolution(facts: Facts) -> Check:
    """Spacing of the measured points over the core length, where that is largest among the vortices that count."""
    worst = worst_core(facts)
    if worst is None:
        return _check("core_resolution", math.nan, {"not_applicable": "No vortex core was identified."})
    value, smallest = worst
    where = f"the core at y = {smallest.y:.4g} m, z = {smallest.z:.4g} m (a = {smallest.core_length:.3g} m)"
    return _check(
        "core_resolution",
        value,
        {
            "pass": f"The points are {value:.2f} core lengths apart in {where}.",
            "warn": f"The points are {value:.2f} core lengths apart in {where}: its induced drag is smeared; measure it"
            f" at a spacing of {0.5 * smallest.core_length:.2g} m. A good lift does not prove a good induced drag.",
        },
    )


def noise_bias(reduction: Reduction, facts: Facts) -> Check:
    """Noise bias of the induced drag over the induced drag."""
    induced = abs(float(reduction.forces.induced_drag))
    if facts.computed:
        return _check("noise_bias", math.nan, {"not_applicable": "A computed flow has no noise."})
    if math.isnan(facts.bias):
        message = (
            "The noise of the crossflow is neither declared nor can it be told from the data, so what it adds to the"
            " induced drag is unknown and not subtracted: declare it as an [[uncertainty.source]] of plane.v and"
            " plane.w."
        )
        return _check("noise_bias", math.nan, {"not_applicable": message})
    value = abs(facts.bias) / induced if induced > 0 else math.nan
    return _check(
        "noise_bias",
        value,
        {
            "pass": f"Noise adds {value:.2%} to the induced drag; it has been subtracted.",
            "warn": f"Noise adds {value:.1%} to the induced drag; it has been subtracted, but its own uncertainty now"
            " counts: sample longer, or measure the wake alone more closely.",
            "not_applicable": "There is no induced drag that noise could bias.",
        },
    )


def declared_noise(found: NoiseFindings | None) -> Check:
    """Factor between the noise that the data show and the declared one, the largest of all channels.

    Parameters
    ----------
    found : NoiseFindings or None
        Both, by channel; None where there is nothing to say.

    Returns
    -------
    Check
        It never fails: the figures may be right, and which of the two noises is wrong is not known.
    """
    if found is None:
        message = "No noise is declared that the data could be held against."
        return _check("declared_noise", math.nan, {"not_applicable": message})
    return _check("declared_noise", found.factor, found.messages)


def outer_flow(reduction: Reduction, facts: Facts) -> Check:
    """Zero errors found in the outer flow: what the loss zero is worth in the total drag, and the flow-angle offset."""
    reference, region = reduction.reference, reduction.region
    if not region.mask.any():
        message = (
            "No wake stands out of the window: the figures are zero because none was found. Either there is none, or it"
            " is wider than the window, or [wake] (level, exclude) hides it."
        )
        return Check("outer_flow", "fail", math.nan, LIMITS["outer_flow"][0], message)
    outer = ~region.mask
    if outer.mean() < 0.1:
        message = "The wake fills the window: too little outer flow is left to zero the total pressure and flow angles."
        return Check("outer_flow", "fail", math.nan, LIMITS["outer_flow"][0], message)
    counted = 0.5 if facts.boundary.reflection == "z" else 1.0
    worth = counted * reduction.loss_zero * float(region.mask.sum()) * reduction.flow.grid.cell_area
    total = abs(reduction.values[reduction.drag])
    value = abs(worth) / total if total > 0 else math.nan
    pitch = math.degrees(math.atan2(reduction.crossflow_offset[1], reference.speed))
    yaw = math.degrees(math.atan2(reduction.crossflow_offset[0], reference.speed))
    found = (
        f"Outside the wake the total pressure is {0.0 - reduction.loss_zero:+.3g} Pa off the stream's"
        f" ({worth / max(total, 1e-300):+.1%} of the drag; taken out)"
    )
    found += (
        f" and the flow is turned by {pitch:+.2f} deg in pitch and {yaw:+.2f} deg in yaw (taken out of the energy form"
        " only)."
        if facts.crossflow
        else "."
    )
    remedy = (
        "Look whether the stream of [reference] is the computation's, and how far its boundaries are."
        if facts.computed
        else "Check the total-pressure reference's drift."
    )
    check = _check("outer_flow", value, {"pass": found, "warn": f"{found} {remedy}"})
    turned = math.radians(math.hypot(pitch, yaw))
    if check.verdict == "pass" and turned > ANGLE_LIMIT:
        why = "direction of the computed stream" if facts.computed else "probe's alignment or the stream's upflow"
        message = f"{found} Check the {why}."
        return Check("outer_flow", "warn", turned / ANGLE_LIMIT * LIMITS["outer_flow"][0], check.limit, message)
    return check


def missing_points(reduction: Reduction, facts: Facts) -> Check:
    """Share of the wake region that was filled in, and whether a core was."""
    mask, grid = reduction.region.mask, reduction.flow.grid
    # What the survey file asks to leave out is not missing; its influence is an uncertainty of its own.
    filled = facts.filled & ~(np.abs(grid.mesh()[0]) < facts.cut)
    value = float((filled & mask).sum()) / max(int(mask.sum()), 1)
    for vortex in facts.vortices:
        iz = min(max(round((vortex.z - grid.z0) / grid.dz), 0), grid.nz - 1)
        iy = min(max(round((vortex.y - grid.y0) / grid.dy), 0), grid.ny - 1)
        if filled[iz, iy]:
            message = (
                f"The centre of the vortex at y = {vortex.y:.4g} m, z = {vortex.z:.4g} m was not measured but filled"
                " in: its circulation and induced drag are guesses; measure it again."
            )
            return Check("missing_points", "fail", max(value, LIMITS["missing_points"][1]), 0.02, message)
    total = float(filled.mean())
    return _check(
        "missing_points",
        value,
        {
            "pass": f"{value:.1%} of the wake region and {total:.1%} of the window were filled from their neighbours.",
            "warn": f"{value:.1%} of the wake region was filled from its neighbours; measure the missing points again.",
        },
    )


def probe_range(found: ProbeRange) -> Check:
    """Share of the points at a Mach or Reynolds number that the probe was not calibrated at."""
    remedy = "calibrate the probe at the survey's speed"
    if found.name == "reynolds":
        remedy += ", or take a tip of another diameter: separation from it depends on the Reynolds number"
    return _check("probe_range", found.outside, {"pass": found.sentence, "warn": f"{found.sentence[:-1]}; {remedy}."})
