"""Checks of a section traverse; those that need a plane say why they do not apply."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array
from wakeledger.ledger.rows import Check
from wakeledger.physics.methods.section_kernels import jones, total_at, window_weights
from wakeledger.run.checks import EDGE_CELLS, LIMITS, declared_noise, verdict_of
from wakeledger.run.section.chain import ROW, SectionReduction, SectionSettings
from wakeledger.run.uncertainty.channel_noise import NoiseFindings

_SIDES = {"y": ("port", "starboard"), "z": ("lower", "upper")}
_NO_PLANE = {
    "net_circulation": "A line traverse does not see the crossflow's vorticity, so it has no net circulation.",
    "mass_balance": "Beside a section's wake the speed is that of its own potential flow, which is not the stream's.",
    "edge_vorticity": "A line traverse does not see the crossflow's vorticity.",
    "core_resolution": "A line traverse behind a section meets no vortex core.",
}


@dataclass(frozen=True)
class SectionFacts:
    """What the checks need beyond the reduction itself.

    Attributes
    ----------
    settings : SectionSettings
        The survey's settings.
    filled : ndarray of bool, shape (m,)
        Places whose value was filled in.
    level_effect : float
        What the choice of the outer flow beside the wake is worth, as a share of the drag.
    noise : NoiseFindings or None
        Declared noise beside what the data show.
    """

    settings: SectionSettings
    filled: NDArray[np.bool_]
    level_effect: float
    noise: NoiseFindings | None = None


def section_checks(reduction: SectionReduction, facts: SectionFacts) -> tuple[Check, ...]:
    """Every check of one traverse, in the ledger's order.

    Parameters
    ----------
    reduction : SectionReduction
        The nominal reduction.
    facts : SectionFacts
        What else is known.

    Returns
    -------
    tuple of Check
    """
    return (
        _not_applicable("net_circulation"),
        _not_applicable("mass_balance"),
        _not_applicable("edge_vorticity"),
        edge_total_pressure_loss(reduction, facts.settings.along),
        _not_applicable("core_resolution"),
        noise_bias(reduction, facts.settings),
        declared_noise(facts.noise),
        outer_flow(reduction, facts),
        missing_points(reduction, facts),
    )


def _not_applicable(name: str) -> Check:
    return Check(name, "not_applicable", math.nan, LIMITS[name][0], _NO_PLANE[name])


def _check(name: str, value: float, passed: str, wrong: str) -> Check:
    verdict = verdict_of(name, value)
    return Check(name, verdict, value, LIMITS[name][0], passed if verdict == "pass" else wrong)


def edge_losses(reduction: SectionReduction) -> tuple[float, float]:
    """Share of the loss inside the window that lies in the outermost places, at the lower and at the upper end."""
    inside = np.where(reduction.inside, np.abs(reduction.loss), 0.0)
    lost = inside * window_weights(reduction.coordinate, -math.inf, math.inf)
    total = float(lost.sum())
    return float(lost[:EDGE_CELLS].sum()) / total, float(lost[-EDGE_CELLS:].sum()) / total


def edge_total_pressure_loss(reduction: SectionReduction, along: str) -> Check:
    """Share of the total-pressure loss that touches the ends of the traverse."""
    shares = edge_losses(reduction)
    value = sum(shares)
    side = _SIDES[along][int(np.argmax(shares))]
    return _check(
        "edge_total_pressure_loss",
        value,
        "The traverse encloses the wake.",
        f"{value:.1%} of the total-pressure loss lies at the ends of the traverse, most of it at the {side} one: the"
        " wake is cut off; traverse further there. The drag is that of the part inside.",
    )


def noise_bias(reduction: SectionReduction, settings: SectionSettings) -> Check:
    """What the point-to-point noise adds to the drag on average, over the drag."""
    value = abs(noise_shift(reduction, settings)) / abs(reduction.values[ROW])
    if math.isnan(value):
        message = "The noise is unknown: there is no outer flow that shows it."
        return Check("noise_bias", "not_applicable", value, LIMITS["noise_bias"][0], message)
    return _check(
        "noise_bias",
        value,
        f"The point-to-point noise moves the drag by {value:.2%} on average; it has not been subtracted.",
        f"The point-to-point noise moves the drag by {value:.1%} on average, which has not been subtracted; sample"
        " longer.",
    )


def noise_shift(reduction: SectionReduction, settings: SectionSettings) -> float:
    """Mean change of the drag by noise of the size that the outer flow shows, N/m; NaN where it shows none.

    Half the sum of the changes by one standard deviation up and down is what noise adds on average, to second order.
    The drag is a sum over places of what each gives alone, so that all of them are moved at once.
    """
    sigma = reduction.window.noise
    z, reference, heat = reduction.coordinate, reduction.reference, reduction.total_temperature
    weights = window_weights(z, reduction.window.lower, reduction.window.upper)

    def drag(total: Array) -> Array:
        return jones(z, total, reduction.static_pressure, reference, weights=weights, total_temperature=heat)

    def moved(sign: float) -> Array:
        # The window's noise is that of the speed where no total pressure was measured.
        if settings.primary == "velocity" and settings.edge_static != "measured":
            here, there = (
                total_at(speed, reduction.static_pressure, reference, total_temperature=heat)
                for speed in (reduction.speed, reduction.speed + sign * sigma)
            )
            return reduction.total_pressure + there - here
        return reduction.total_pressure + sign * sigma

    if math.isnan(sigma):
        return math.nan
    return float((drag(moved(1.0)) + drag(moved(-1.0))) / 2.0 - drag(reduction.total_pressure))


def outer_flow(reduction: SectionReduction, facts: SectionFacts) -> Check:
    """What the outer flow's level, or the doubt about it, is worth in the drag."""
    name, limit = "outer_flow", LIMITS["outer_flow"][0]
    window, drag = reduction.window, abs(reduction.values[ROW])
    beside = int(np.count_nonzero(~reduction.inside))
    if not math.isfinite(reduction.loss_zero[0]) or beside == 0:
        message = (
            "The wake fills the traverse: no outer flow is left that would show the level of the total pressure;"
            " traverse further to both sides."
        )
        return Check(name, "fail", math.nan, limit, message)
    if facts.settings.edge_static == "edge_speed":
        return _check(
            name,
            facts.level_effect,
            f"The speed beside the wake is straight enough: other stretches of it change the drag by"
            f" {facts.level_effect:.1%}.",
            f"The speed beside the wake is uneven: other stretches of it change the drag by {facts.level_effect:.1%};"
            " traverse further out, or further behind the section, or measure the static pressure.",
        )
    lower, upper = reduction.loss_zero
    worth = 0.5 * (lower + upper) * window.width / drag
    found = (
        f"Beside the wake the total pressure is {-lower:+.3g} Pa and {-upper:+.3g} Pa off the stream's"
        f" ({worth:+.1%} of the drag; taken out)."
    )
    return _check(name, abs(worth), found, f"{found} Check the total-pressure reference's drift.")


def missing_points(reduction: SectionReduction, facts: SectionFacts) -> Check:
    """Share of the wake that was filled in, and whether its deepest place was."""
    inside, filled = reduction.inside, facts.filled
    value = float(np.count_nonzero(filled & inside)) / max(int(np.count_nonzero(inside)), 1)
    deepest = int(np.argmax(np.where(inside, reduction.loss, -math.inf)))
    if filled[deepest]:
        message = (
            f"The wake's deepest place, at {facts.settings.along} = {reduction.coordinate[deepest]:.4g} m, was not"
            " measured but filled in; measure it again."
        )
        warn, fail = LIMITS["missing_points"]
        return Check("missing_points", "fail" if value > fail else "warn", max(value, warn), warn, message)
    return _check(
        "missing_points",
        value,
        f"{value:.1%} of the wake and {filled.mean():.1%} of the traverse were filled from their neighbours.",
        f"{value:.1%} of the wake was filled from its neighbours; measure the missing points again.",
    )
