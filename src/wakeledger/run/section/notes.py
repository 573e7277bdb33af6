"""What was done to a section traverse, said in sentences."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import decode
from wakeledger.core.grid import Array
from wakeledger.intake.probe.traverse import Traverse
from wakeledger.physics.methods.section_drag import SectionDrag
from wakeledger.physics.methods.section_kernels import jones, window_weights
from wakeledger.run.chain.outputs import coefficient_of, corrected_coefficient_of
from wakeledger.run.load import SurveyInput
from wakeledger.run.section.chain import ROW, SectionChain, SectionReduction, SectionVariation
from wakeledger.run.section.state import SectionState
from wakeledger.run.traverse.notes import inputs_of, traverse_without
from wakeledger.run.traverse.traverse import SHEAR, RawSurvey


def section_notes(
    survey: SurveyInput,
    chain: SectionChain,
    nominal: SectionReduction,
    drag: SectionDrag,
    state: SectionState,
    usable: NDArray[np.bool_],
) -> list[str]:
    """Sentences about what was done to the data, each choice named.

    Parameters
    ----------
    survey : SurveyInput
        The survey.
    chain : SectionChain
        It on its places.
    nominal : SectionReduction
        Its nominal reduction.
    drag : SectionDrag
        The three methods on it.
    state : SectionState
        What the points say.
    usable : ndarray of bool, shape (n,)
        Points that are used.

    Returns
    -------
    list of str
    """
    settings, line, window = chain.settings, chain.line, nominal.window
    # Coefficients of a section refer to its chord, so [model] is not missed.
    found = [note for note in survey.survey.notes() if not note.startswith("[model]")]
    found.append(
        f"{survey.points.n} points along {settings.along} at {line.position.size} places, {1e3 * line.spacing:.3g} mm"
        " apart in the median."
    )
    counts = decode(line.flag)
    for count, what in (
        (counts["missing"], "Places without a usable point, filled from their neighbours"),
        (counts["averaged"], "Places measured more than once and averaged"),
        (int(np.count_nonzero(state.impossible)), "Points without a real flow state, which count as missing"),
        (int(np.count_nonzero(state.usable & ~usable)), "Points excluded by the survey file"),
    ):
        if count:
            found.append(f"{what}: {count}.")
    wake = f"from {settings.along} = {window.lower:.4g} m to {window.upper:.4g} m"
    if settings.include or settings.grow:
        found.append(f"The wake was found, and widened by the survey file, {wake}.")
    else:
        found.append(
            f"The wake was found {wake}, where it falls to {settings.level:g} times the noise or a thousandth of its"
            " depth, its tail included."
        )
    if not window.enclosed:
        found.append("The traverse ends before the wake does, or where it does.")
    if chain.drifting:
        found.append("The total pressure beside the wake drifts along the traverse; the wake was found above that.")
    found += _static_notes(chain, nominal)
    found += _wall_notes(survey, chain, nominal)
    lower, upper = nominal.loss_zero
    if math.isfinite(lower) and (lower or upper):
        worth = 0.5 * (lower + upper) * window.width / (nominal.reference.dynamic_pressure * settings.chord)
        found.append(
            f"The total pressure was zeroed in the outer flow: {-lower:+.3g} Pa and {-upper:+.3g} Pa were taken out at"
            f" the wake's edges, straight between ({1e4 * worth:+.2f} counts)."
        )
    if drag.stalled_points:
        found.append(
            "Places where the total pressure lies below a static pressure, so that the flow is taken as brought to"
            f" rest: {drag.stalled_points}."
        )
    return found


def _wall_notes(survey: SurveyInput, chain: SectionChain, nominal: SectionReduction) -> list[str]:
    """What the walls do to the drag and to its coefficient."""
    walls, settings = chain.walls(nominal.reference), chain.settings
    if walls is None or settings.height is None:
        return []
    measured, corrected = nominal.values[coefficient_of(ROW)], nominal.values[corrected_coefficient_of(ROW)]
    scale = nominal.reference.dynamic_pressure * settings.chord
    excess = 2 * nominal.reference.density * settings.height * nominal.wake_blockage**2 / scale
    found = [
        f"Between walls {settings.height:.4g} m apart the wake makes the stream at the section"
        f" {nominal.wake_blockage / nominal.reference.speed:+.3%} faster (c_d c/4h gives {walls.tau * measured:+.3%});"
        f" the methods for an unbounded stream read {1e4 * excess:+.2f} counts too high there, which was taken off."
    ]
    boundary = survey.survey.boundary
    solid = None if boundary is None else boundary.solid_blockage
    thickness = (
        "The section's own thickness blocks too, which no solid_blockage was given for: it is not corrected."
        if solid is None
        else f"Its thickness does {solid.value:+.2%} +- {solid.standard_uncertainty:.2%} more, as given."
    )
    found.append(
        f"{thickness} In an unbounded stream the coefficient is {corrected:.5f} ({1e4 * (corrected - measured):+.2f}"
        f" counts; Allen and Vincenti, at Mach {walls.mach:.3f}); a lift coefficient measured with"
        f" it is to be multiplied by {float(walls.corrected_lift(1.0, measured)):.4f}."
    )
    return found


def _static_notes(chain: SectionChain, nominal: SectionReduction) -> list[str]:
    reference, window, settings = nominal.reference, nominal.window, chain.settings
    z, q = nominal.coordinate, reference.dynamic_pressure
    weights = window_weights(z, window.lower, window.upper)
    if settings.edge_static == "measured":
        mean = float(weights @ (nominal.static_pressure - reference.static_pressure)) / (q * window.width)
        return [f"In the wake the measured static pressure is {mean:+.3f} q off the stream's on average."]
    if settings.edge_static == "edge_speed":
        at = (np.interp((window.lower, window.upper), z, nominal.static_pressure) - reference.static_pressure) / q
        return [
            "The static pressure across the wake is that of the loss-free flow at a speed straight between those at the"
            f" wake's edges: {at[0]:+.3f} q and {at[1]:+.3f} q off the stream's there."
        ]
    shifted = jones(
        z,
        nominal.total_pressure,
        nominal.static_pressure + 0.01 * q,
        reference,
        weights=weights,
        total_temperature=nominal.total_temperature,
    )
    change = float(shifted) / nominal.values[ROW] - 1.0
    off = float(np.mean(nominal.static_pressure) - reference.static_pressure) / q
    lower = f", lower by what the walls add behind the model ({off:+.4f} q)" if off else ""
    return [
        f"The static pressure across the wake is taken as the stream's{lower}. Whether it is cannot be told from this"
        f" traverse and is not in the uncertainty: a pressure 0.01 q higher would change the drag by {change:+.2%}."
    ]


def raw_notes(raw: RawSurvey, chain: SectionChain, nominal: SectionReduction) -> list[str]:
    """Sentences about the tubes that took the readings, each correction with what it is worth.

    Parameters
    ----------
    raw : RawSurvey
        What the raw readings add to the survey.
    chain : SectionChain
        The survey.
    nominal : SectionReduction
        Its nominal reduction.

    Returns
    -------
    list of str
    """
    held = SectionVariation(window=nominal.window)
    scale = 1e4 / (nominal.reference.dynamic_pressure * chain.settings.chord)

    def counts(traverse: Traverse, errors: dict[str, Array]) -> float:
        other = replace(chain, traverse=traverse).reduce(errors, vary=held)
        return scale * (nominal.values[ROW] - other.values[ROW])

    made = []
    assert chain.traverse is not None
    for name, sentence in raw.said.items():
        if name == SHEAR:
            continue
        worth = f"{counts(traverse_without(chain.traverse, name), {}):+.2f} counts"
        inputs = inputs_of(chain.traverse, name)
        if inputs:
            worth += f", +- {math.hypot(*(counts(chain.traverse, {each: np.ones(())}) for each in inputs)):.2f} counts"
        made.append(f"{sentence}: {worth}.")
    if SHEAR in raw.said:
        made.append("The displacement of the tubes in shear is not corrected along a line.")
    return [*made, *raw.notes]
