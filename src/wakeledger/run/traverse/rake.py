"""Several tubes as one traverse: each corrected on its own, then put together and held against each other."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.sources import Source
from wakeledger.core.errors import InputError, SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.intake.probe.pitot import STATIC_INPUT, PitotReduction
from wakeledger.intake.probe.static_tubes import interpolate_static
from wakeledger.intake.probe.traverse import (
    MISALIGNMENT,
    Addition,
    StaticTubes,
    Traverse,
    Tube,
    correction_input,
)
from wakeledger.intake.probe.tube_offsets import (
    TubeOffsets,
    offsets_from_both,
    offsets_from_outer_flow,
    offsets_from_overlap,
)
from wakeledger.run.chain.shear import Displacement
from wakeledger.run.config.tables import ProbeTable
from wakeledger.run.load import SurveyInput
from wakeledger.run.traverse.to_and_fro import BACKLASH, LAG, Apart
from wakeledger.run.traverse.traverse import (
    DRIFT,
    REFERENCE,
    SHEAR,
    ZEROS,
    RawSurvey,
    prepare_traverse,
    quantile,
)
from wakeledger.run.traverse.tubes import RakePoints, listed, subset
from wakeledger.run.traverse.wall_proximity import WALL
from wakeledger.stream.reference import Reference

#: Name of the correction of the tubes' offsets.
TUBES = "tube offsets"
#: Standard uncertainty of a static pressure that is taken from the stream, as a share of q (common practice).
ASSUMED_STATIC = 0.01
_STATIC_SOURCE = "static pressure at the pitots"
_ORDER = (ZEROS, REFERENCE, LAG, BACKLASH, DRIFT, WALL, MISALIGNMENT, SHEAR)
#: Corrections whose error is each tube's own; that of the others is taken as one error of all tubes.
_OWN = (ZEROS, MISALIGNMENT)
_MOST_TEXTS = 4


def prepare_raw(survey: SurveyInput, reference: Reference) -> RawSurvey:
    """The reduction of a survey's hole pressures, of one probe or of a rake.

    Parameters
    ----------
    survey : SurveyInput
        A survey with ``primary = "hole_pressures"``.
    reference : Reference
        The nominal stream.

    Returns
    -------
    RawSurvey

    Raises
    ------
    InputError
        If the survey file, the calibrations and the readings do not fit together.
    """
    return prepare_traverse(survey, reference) if survey.rake is None else _prepare_rake(survey, survey.rake, reference)


@dataclass(frozen=True, eq=False)
class _Part:
    """One tube, prepared on its own."""

    number: int | None
    at: NDArray[np.intp]
    raw: RawSurvey

    def spread(self, values: Array, n: int) -> Array:
        """Values of its points among those of all tubes, 0 elsewhere."""
        found = np.zeros(n)
        found[self.at] = values
        return found


def _prepare_rake(survey: SurveyInput, rake: RakePoints, reference: Reference) -> RawSurvey:
    parts = []
    for index, table in enumerate(rake.tables):
        at = np.flatnonzero(rake.tube == index)
        parts.append(_Part(table.tube, at, _alone(survey, table, subset(survey.points, at), reference)))
    n = survey.points.n
    tubes = tuple(tube for part in parts for tube in _of_all(part))
    kinds = {name: kind for part in parts for name, kind in part.raw.traverse.kinds.items()}
    traverse = Traverse(tubes, kinds, _additions(parts, n))
    sources = _sources([(part.number, part.raw.sources) for part in parts])
    notes = _grouped([(part.number, note) for part in parts for note in part.raw.notes], len(parts))
    said = {}
    for name in _ORDER:
        texts = [(part.number, part.raw.said[name]) for part in parts if name in part.raw.said]
        if texts:
            said[name] = _joined(_grouped(texts, len(parts)))
    if not survey.survey.directed:
        traverse, static_sources, sentences = _with_static(survey, rake, traverse, reference)
        sources += static_sources
        notes = [*sentences, *notes]
    values = {name: channel.values for name, channel in survey.points.channels.items()}
    offsets = _offsets(traverse, values, survey.points, rake, reference)
    if len(parts) > 1 and offsets is None:
        notes.append(
            "The tubes' total pressures could not be held against each other: too few places were seen by several"
            " tubes, and too few tubes have been in the outer flow. How far they are off each other is in no figure."
        )
    if offsets is not None:
        addition, sentence = _offset_addition(offsets, parts, traverse, n)
        traverse = replace(traverse, additions=(*traverse.additions, addition))
        said[TUBES] = sentence
        sources.append(Source("tube offsets (correction)", tuple(addition.per_sigma), "systematic", 1.0))
    return RawSurvey(traverse, _displacement(parts), tuple(sources), tuple(notes), said, _apart(parts, n))


def _of_all(part: _Part) -> list[Tube]:
    """A part's tube, or one for each roll of it, with its points among those of all."""
    found = []
    for tube in part.raw.traverse.tubes:
        at = part.at if tube.points is None else part.at[tube.points]
        turn = tube.turn
        if turn is not None:
            first, second = (_renamed(name, part.number) for name in turn.inputs)
            tube = tube.with_turn(replace(turn, inputs=(first, second)))
        found.append(replace(tube, points=at))
    return found


def _apart(parts: Sequence[_Part], n: int) -> Apart | None:
    """How far rows to and fro stand apart, by the mean of those tubes where they clearly do; None where none does."""
    seen = [(part, part.raw.apart) for part in parts if part.raw.apart is not None]
    # One of many tubes stands apart by chance more often than the only one.
    seen = [(part, replace(one, chance=min(1.0, one.chance * len(seen)))) for part, one in seen]
    found = [(part, one) for part, one in seen if one.clear]
    if not found:
        return None
    weight = np.array([one.standard_uncertainty**-2 for _, one in found])
    value, step, lag = (
        float(weight @ [getattr(one, name) for _, one in found] / weight.sum()) for name in ("value", "step", "lag")
    )
    names = [name for name in (BACKLASH, LAG) if all(name in one.additions for _, one in found)]
    additions = {
        name: tuple(_merged(name, [(part, each) for part, one in found for each in one.additions[name]], n))
        for name in names
    }
    numbers = [part.number or 0 for part, _ in found]
    whose = "" if len(found) == len(parts) else f"tube{'s' if len(numbers) > 1 else ''} {listed(numbers)}"
    chance = min(one.chance for _, one in found)
    rest = any(one.rest for _, one in found)
    sigma, carried = float(weight.sum() ** -0.5), max(one.carried for _, one in found)
    return Apart(value, sigma, step, chance, lag, rest, carried, additions, whose)


def _alone(survey: SurveyInput, table: ProbeTable, points: Points, reference: Reference) -> RawSurvey:
    """A tube's own points prepared as if it were the only one."""
    calibration = survey.calibrations.get(table.calibration or "")
    if calibration is not None:
        # Holes that other tubes have are empty here.
        own = {f"p{number}" for number in range(1, calibration.holes + 1)}
        channels = {
            name: channel
            for name, channel in points.channels.items()
            if name in own or name[:1] != "p" or not name[1:].isdigit() or np.isfinite(channel.values).any()
        }
        points = replace(points, channels=channels)
    alone = replace(
        survey, survey=survey.survey.model_copy(update={"probe": (table,)}), points=points, rake=None, read=None
    )
    try:
        return prepare_traverse(alone, reference)
    except InputError as error:
        if table.tube is not None and error.place is not None:
            error.place = error.place.replace("[probe]", f"[[probe]] tube {table.tube}")
        raise


def _additions(parts: Sequence[_Part], n: int) -> tuple[Addition, ...]:
    """The corrections of all tubes in the order in which they are made, each among the points of all."""
    found: list[Addition] = []
    for name in _ORDER:
        ones = [(part, one) for part in parts for one in part.raw.traverse.additions if one.name == name]
        found += _merged(name, ones, n)
    return tuple(found)


def _merged(name: str, ones: Sequence[tuple[_Part, Addition]], n: int) -> list[Addition]:
    """One correction of several tubes among the points of all."""
    size: dict[str, Array] = {}
    per_sigma: dict[str, dict[str, Array]] = {}
    for part, one in ones:
        for hole, values in one.size.items():
            size[hole] = size.get(hole, 0.0) + part.spread(values, n)
        for key, changes in one.per_sigma.items():
            mine = per_sigma.setdefault(_renamed(key, part.number), {})
            for hole, values in changes.items():
                mine[hole] = mine.get(hole, 0.0) + part.spread(values, n)
    lags = [
        Addition(name, {}, lag=replace(one.lag, order=part.at[one.lag.order]))
        for part, one in ones
        if one.lag is not None
    ]
    return [*lags, Addition(name, size, per_sigma, raw=ones[0][1].raw)] if ones else lags


def _renamed(name: str, number: int | None) -> str:
    """An input of a tube's own error by the name of the tube."""
    for own in _OWN:
        start = correction_input(own)
        if name.startswith(start) and number is not None:
            return f"{start}.tube {number}{name.removeprefix(start)}"
    return name


def _sources(given: Sequence[tuple[int | None, Sequence[Source]]]) -> list[Source]:
    """The tubes' sources, those of one name as one."""
    found: dict[str, Source] = {}
    for number, sources in given:
        for source in sources:
            inputs = tuple(_renamed(name, number) for name in source.applies_to)
            before = found[source.name].applies_to if source.name in found else ()
            found[source.name] = replace(source, applies_to=tuple(dict.fromkeys((*before, *inputs))))
    return list(found.values())


def _grouped(given: Sequence[tuple[int | None, str]], tubes: int) -> list[str]:
    """Sentences of tubes, each once, with the tubes it is true of where it is not true of all."""
    by_text: dict[str, list[int]] = {}
    for number, text in given:
        by_text.setdefault(text, []).append(0 if number is None else number)
    found = []
    for text, numbers in by_text.items():
        if len(numbers) == tubes:
            found.append(text)
        else:
            found.append(f"Tube{'s' if len(numbers) > 1 else ''} {listed(numbers)}: {text}")
    return found


def _joined(texts: Sequence[str]) -> str:
    """Half sentences one after the other, the first ones of many."""
    more = len(texts) - _MOST_TEXTS
    return "; ".join(texts[:_MOST_TEXTS]) + (f"; and so on for {more} more" if more > 0 else "")


def _displacement(parts: Sequence[_Part]) -> Displacement | None:
    found = [part.raw.displacement for part in parts]
    kinds = {None if one is None else (one.diameter, one.coefficient) for one in found}
    if len(kinds) > 1:
        raise SurveyError(
            "the tubes differ in tip_diameter or displacement, and the displacement is corrected on the whole plane",
            place="[[probe]] tip_diameter",
            remedy="give all tubes the same, or displacement = 0 for all",
        )
    return found[0]


# -- static pressure of pitots ----------------------------------------------------------------------------------------


def _with_static(
    survey: SurveyInput, rake: RakePoints, traverse: Traverse, reference: Reference
) -> tuple[Traverse, list[Source], list[str]]:
    """Pitots with a static pressure: measured beside them, by static tubes elsewhere, or the stream's."""
    section = survey.survey.section
    alone = "The tubes are pitots, which tell no direction: the profile drag is all that follows. "
    if section is not None:
        alone = ""
    assumed = ASSUMED_STATIC * reference.dynamic_pressure
    source = Source(_STATIC_SOURCE, (STATIC_INPUT,), "systematic", 1.0)
    if "static_pressure" in survey.points.channels:
        return traverse, [], [f"{alone}The pitots' static pressure was measured beside them."]
    if not rake.static:
        tubes = tuple(_assumed(tube, assumed) for tube in traverse.tubes)
        if section is not None:
            return traverse, [], []
        sentence = (
            f"{alone}No static pressure was measured: that of the stream is taken to hold at every point, +-"
            f" {assumed:.3g} Pa ({ASSUMED_STATIC:.0%} of q, common practice)."
        )
        return replace(traverse, tubes=tubes), [source], [sentence]
    statics, sources, places, readings = [], [], [], []
    for number, points in rake.static.items():
        raw = _alone(survey, rake.static_tables[number], points, reference)
        values = {name: channel.values for name, channel in points.channels.items()}
        own = tuple(
            replace(one, per_sigma={_renamed(key, number): changes for key, changes in one.per_sigma.items()})
            for one in raw.traverse.additions
        )
        statics.append((replace(raw.traverse, additions=own), values))
        sources.append((number, raw.sources))
        places.append(np.stack([points.y, points.z], axis=1))
        readings.append(statics[-1][0].pressures(values, reference)["p1"])
    found = interpolate_static(
        np.concatenate(places), np.concatenate(readings), np.stack([survey.points.y, survey.points.z], axis=1)
    )
    how = f"left-out readings are met to {found.left_out:.3g} Pa"
    if not math.isfinite(found.left_out):
        found = replace(found, standard_uncertainty=np.full(survey.points.n, assumed))
        how = f"too few to tell how well; {ASSUMED_STATIC:.0%} of q is taken, common practice"
    tubes_text = f"static tube{'s' if len(statics) > 1 else ''} {listed(list(rake.static))}"
    most, count = float(np.max(found.standard_uncertainty)), sum(map(len, readings))
    sentence = (
        f"{alone}The pitots' static pressure was interpolated from the {count} readings of {tubes_text},"
        f" up to {1e3 * float(found.distance.max()):.3g} mm away, +- {most:.3g} Pa at most"
        f" ({how})."
    )
    if found.beyond:
        sentence += f" {found.beyond} points lie beyond these readings and take the nearest."
    sentence += " An error that all readings of the static tubes share is in no figure."
    attached = StaticTubes(tuple(one for one, _ in statics), tuple(values for _, values in statics), found)
    return replace(traverse, statics=attached), [*_sources(sources), source], [sentence]


def _assumed(tube: Tube, uncertainty: float) -> Tube:
    assert isinstance(tube.reduction, PitotReduction)
    return replace(tube, reduction=replace(tube.reduction, static_uncertainty=uncertainty))


# -- tubes against each other -----------------------------------------------------------------------------------------


def _offsets(
    traverse: Traverse, values: Mapping[str, Array], points: Points, rake: RakePoints, reference: Reference
) -> TubeOffsets | None:
    count = len(rake.tables)
    if count == 1:
        return None
    total = traverse.state(values, reference).total_pressure
    assert total is not None
    overlap = offsets_from_overlap(total, rake.tube, points.y, points.z, tubes=count)
    outer = offsets_from_outer_flow(total, rake.tube, tubes=count, dynamic_pressure=reference.dynamic_pressure)
    if overlap is None or outer is None:
        return outer if overlap is None else overlap
    return offsets_from_both(overlap, outer)


def _offset_addition(offsets: TubeOffsets, parts: Sequence[_Part], traverse: Traverse, n: int) -> tuple[Addition, str]:
    """What brings the tubes to their common mean, and half a sentence."""
    taken, carried = np.zeros(n), {}
    texts, left = [], []
    for part, value, sigma, freedom in zip(
        parts, offsets.value, offsets.standard_uncertainty, offsets.degrees_of_freedom, strict=True
    ):
        if not math.isfinite(value):
            left.append(part.number or 0)
            continue
        clear = math.isfinite(sigma) and abs(value) > quantile(int(freedom)) * sigma
        if clear:
            taken[part.at] = -value
        size = sigma if clear else math.hypot(value, np.nan_to_num(sigma))
        name = correction_input(f"{TUBES}.{part.number}")
        carried[name] = _on_all_holes(part.spread(np.full(part.at.size, size), n), traverse)
        texts.append(f"{part.number} {value:+.3g} +- {sigma:.2g} Pa{'' if clear else ' (carried)'}")
    where = {
        "overlap": f"from {offsets.count} places that several tubes have seen",
        "outer flow": f"from {offsets.count} points in the outer flow",
        "both": f"from {offsets.count} places that several tubes have seen and {offsets.second} points in the outer"
        " flow, weighted",
    }
    sentence = (
        f"Total pressures of the tubes off their mean, {where[offsets.source]}: tube {', '.join(texts)}; they were"
        " taken out as zeros common to the holes of a tube, or carried as an uncertainty where not clear of the scatter"
    )
    if left:
        sentence += f" (tube {listed(left)} has not been in the outer flow and is left as it is)"
    return Addition(TUBES, _on_all_holes(taken, traverse), carried), sentence


def _on_all_holes(change: Array, traverse: Traverse) -> dict[str, Array]:
    return {hole: change for hole in traverse.holes if hole != "static_pressure"}
