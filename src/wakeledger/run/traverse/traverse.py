"""The raw traverse of a survey file: its probe, and the corrections of its readings worked out once.

In this order: zeros, reference condition, lag, backlash, drift, wall proximity, misalignment from a roll pair; the
displacement in shear and a misalignment from the outer flow act on the gridded plane.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from wakeledger.confidence.sources import Source
from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array
from wakeledger.core.points import Channel, Points
from wakeledger.intake.probe.backlash import correct_backlash
from wakeledger.intake.probe.displacement import COEFFICIENT, STANDARD_UNCERTAINTY
from wakeledger.intake.probe.lag import correct_lag, make_rate_filter
from wakeledger.intake.probe.mounting import Mounting
from wakeledger.intake.probe.pitot import PitotReduction
from wakeledger.intake.probe.readings import (
    check_dynamic_pressure,
    estimate_drift,
    find_revisits,
    progress,
    subtract_zeros,
)
from wakeledger.intake.probe.reduction import CALIBRATION_INPUTS, HoleReduction
from wakeledger.intake.probe.traverse import (
    DYNAMIC,
    MISALIGNMENT,
    STATIC,
    Addition,
    LagFilter,
    Traverse,
    Tube,
    correction_input,
)
from wakeledger.run.chain.shear import Displacement
from wakeledger.run.config.tables import HoleReadings, ProbeTable
from wakeledger.run.load import SurveyInput
from wakeledger.run.traverse.calibration_use import calibration_notes, calibration_of, check_columns
from wakeledger.run.traverse.roll_pair import by_roll, head_turn, refuse_contrary_rolls
from wakeledger.run.traverse.to_and_fro import (
    BACKLASH,
    LAG,
    STATED,
    Apart,
    estimated_backlash,
    find_apart,
    lag_uncertainty,
)
from wakeledger.run.traverse.travel import travel_of
from wakeledger.run.traverse.wall_proximity import WALL, wall_correction
from wakeledger.stream.reference import Reference

#: Names of the corrections.
ZEROS, REFERENCE, DRIFT, SHEAR = "zeros", "reference readings", "drift", "displacement"
#: A drift is taken out if it is this unlikely to be the scatter of the repeats, else it is carried as an uncertainty.
SIGNIFICANCE = 0.05
_CALIBRATION = "probe calibration"


@dataclass(frozen=True, eq=False)
class RawSurvey:
    """What a raw traverse adds to a survey.

    Attributes
    ----------
    traverse : Traverse
        From readings to flow states.
    displacement : Displacement or None
        Correction on the gridded plane.
    sources : tuple of Source
        Of the calibration, unless the survey file declares its own, and of the corrections.
    notes : tuple of str
        Sentences about what was found and what was not corrected.
    said : mapping of str to str
        Half a sentence about each correction that is made, by name, to be completed by what it is worth.
    apart : Apart or None
        How far rows taken to and fro stand apart where nothing was asked for that takes it out.
    """

    traverse: Traverse
    displacement: Displacement | None
    sources: tuple[Source, ...]
    notes: tuple[str, ...]
    said: Mapping[str, str]
    apart: Apart | None = None


def prepare_traverse(survey: SurveyInput, reference: Reference) -> RawSurvey:
    """The reduction of a survey's hole pressures, every correction worked out.

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
        If the survey file, the calibration and the readings do not fit together.
    """
    return _Preparation(survey, reference).run()


class _Preparation:
    """Works out one correction after the other."""

    def __init__(self, survey: SurveyInput, reference: Reference) -> None:
        self.survey, self.points, self.reference = survey.survey, survey.points, reference
        self.probe: ProbeTable = self.survey.probe[0]
        self.values = {name: channel.values for name, channel in self.points.channels.items()}
        self.calibration = calibration_of(survey, self.probe)
        reduction = self._reduction()
        self.holes = tuple(name for name in reduction.names if name != "static_pressure")
        if self.calibration is not None:
            check_columns(self.values, self.holes)
        self.path = travel_of(self.points)
        self.sources: list[Source] = []
        self.notes: list[str] = []
        self.said: dict[str, str] = {}
        kinds = {name: replace(self.points.channels[name], values=np.empty(0)) for name in reduction.names}
        tubes = (Tube(reduction),) if isinstance(reduction, PitotReduction) else by_roll(reduction, self.points)
        self.traverse = Traverse(tubes, kinds)
        self.apart: Apart | None = None
        self._known: dict[str, float] = {}

    def _reduction(self) -> HoleReduction | PitotReduction:
        probe = self.probe
        if self.calibration is None:
            return PitotReduction(measured_static=probe.role == "flow" and "static_pressure" in self.values)
        return HoleReduction(
            self.calibration,
            Mounting(pitch=probe.pitch, yaw=probe.yaw, roll=probe.roll),
            tip_diameter=math.nan if probe.tip_diameter is None else probe.tip_diameter,
        )

    def run(self) -> RawSurvey:
        self._calibrated()
        self._zeros()
        self._readings()
        self._lag()
        self._backlash()
        self._to_and_fro()
        self._drift()
        self._walls()
        self._misalignment()
        displacement = self._shear()
        self._not_corrected()
        traverse = self.traverse.frozen_on(self.values, self.reference)
        beyond = int(np.count_nonzero(traverse.out_of_range(self.values, self.reference)))
        if beyond:
            self.notes.append(
                f"{beyond} of {self.points.n} points lie outside the calibrated range: they are flagged out_of_range"
                " and count as missing."
            )
        return RawSurvey(traverse, displacement, tuple(self.sources), tuple(self.notes), self.said, self.apart)

    # -- what is there ----------------------------------------------------------------------------------------------

    def _calibrated(self) -> None:
        if self.calibration is None:
            return
        self.notes += calibration_notes(self.calibration)
        declared = self.survey.uncertainty.source
        if not any("calibration" in source.applies_to for source in declared):
            self.sources.append(Source(_CALIBRATION, CALIBRATION_INPUTS, "systematic", 1.0))
        if not declared:
            self.notes.append(
                "No source of uncertainty is declared: only those of the calibration and of the corrections are in the"
                " figures, not noise, mounting and reference readings."
            )

    # -- corrections of the readings --------------------------------------------------------------------------------

    def _zeros(self) -> None:
        given = self.probe.zeros
        if given is None or (given.before is None and given.after is None):
            self.notes.append("No zeros of the holes are given: their readings are taken as they stand.")
            return
        for hole in self.holes:
            if self.points.channels[hole].normalised_by is not None:
                raise SurveyError(
                    f"zeros are given, and {hole} is normalised_by dynamic_pressure",
                    place="[probe] zeros",
                    remedy="give the holes as read, in a unit of pressure, or take the zeros out of them beforehand",
                )
        first, last = (
            None if table is None else self._readings_of(table, side)
            for table, side in ((given.before, "before"), (given.after, "after"))
        )
        only = first is None or last is None
        before = last if first is None else first
        assert before is not None
        path = self.path
        done = progress(path.n, time=path.time)
        correction = subtract_zeros(
            path.taken(np.stack([self.values[hole] for hole in self.holes])),
            before[:, None],
            None if only else np.asarray(last)[:, None],
            done,
        )
        drifts = (
            {}
            if not np.any(np.nan_to_num(correction.per_sigma))
            else self._one_per_hole(ZEROS, path.filed(correction.per_sigma))
        )
        self._add(ZEROS, path.filed(correction.size), drifts, raw=True)
        size = float(np.max(np.abs(before)))
        change = "one reading, so their drift is unknown and in no figure"
        if first is not None and last is not None:
            most = float(np.max(np.abs(last - first)))
            change = f"they changed by up to {most:.3g} Pa, taken as even"
            if most == 0:
                change = "alike before and after, so no drift is carried; how well they were read is in no figure"
        self.said[ZEROS] = f"Zeros of the holes (up to {size:.3g} Pa; {change}) were taken out"
        self._carry(ZEROS, "zeros of the holes", tuple(drifts))

    def _readings_of(self, table: HoleReadings, side: str) -> Array:
        found = [getattr(table, hole) for hole in self.holes]
        for hole, value in zip(self.holes, found, strict=True):
            if value is None:
                raise SurveyError(
                    f"{hole} is missing", place=f"[probe] zeros.{side}", remedy="give the zero of every hole"
                )
        return np.array(found, dtype=float)

    def _readings(self) -> None:
        names = [name for name in (DYNAMIC, STATIC) if name in self.values]
        if not names:
            self.notes.append(
                "The stream was not read at each point: it is taken to have held the reference condition."
            )
            return
        absolute = [hole for hole in self.holes if self.points.channels[hole].relative_to is None]
        if absolute and STATIC not in names:
            self.notes.append(
                "The holes are absolute pressures, and the stream's static pressure was not read at each point: it is"
                " taken to have held that of [reference]; an error of this is in no figure."
            )
        if DYNAMIC in names:
            check_dynamic_pressure(self.values[DYNAMIC], self.reference.dynamic_pressure, line=self.points.line)
        for name in names:
            missing = int(np.count_nonzero(np.isnan(self.values[name])))
            if missing:
                self.notes.append(f"{missing} points have no {name} and count as missing.")
        spread = ""
        if DYNAMIC in names:
            low, high = (
                float(x(self.values[DYNAMIC])) / self.reference.dynamic_pressure for x in (np.nanmin, np.nanmax)
            )
            spread = f" (q {low:.2%} to {high:.2%} of the reference)"
        self.said[REFERENCE] = f"Each point was brought to the reference condition by its own readings{spread}"

    def _lag(self) -> None:
        lag = self.probe.lag
        if not lag:
            self.notes.append("No lag of the tubing is given: none was taken out.")
            return
        path = self.path
        if path.time is None:
            raise SurveyError(
                "a lag needs the time of each point", place="[probe] lag", remedy="add time to [plane.columns]"
            )
        pressures = self._pressures()
        rates = make_rate_filter(path.time, path.row, values=pressures)
        sigma, how = lag_uncertainty(path, self._comparable(pressures), lag=lag, backlash=bool(self.probe.backlash))
        correction = correct_lag(pressures, rates, lag=lag, standard_uncertainty=sigma)
        parts = self._one_for_all(LAG, path.filed(correction.per_sigma))
        self._add(LAG, None, parts, lag=LagFilter(rates, lag, path.order))
        self._known[LAG] = sigma
        self.said[LAG] = f"A lag of the tubing of {1e3 * lag:.3g} ms ({how}) was taken out"
        self._carry(LAG, "lag of the tubing", (correction_input(LAG),))

    def _backlash(self) -> None:
        asked = self.probe.backlash
        if not asked:
            self.notes.append("No backlash of the traverse is given: none was taken out.")
            return
        path, pressures = self.path, self._pressures()
        along, _ = path.along_and_across
        if asked == "estimate":
            found, how = estimated_backlash(path, self._comparable(pressures))
            value, sigma = found.value, found.standard_uncertainty
            if not math.isfinite(sigma):
                self.notes.append(f"The backlash of the traverse could not be estimated ({how}): none was taken out.")
                return
        else:
            value, sigma, how = asked, STATED * asked, f"taken as known to {STATED:.0%}"
        correction = correct_backlash(pressures, along, path.row, backlash=value, standard_uncertainty=sigma)
        if not np.any(correction.per_sigma):
            self.notes.append("All rows were taken in the same direction: a backlash moves the plane as a whole.")
            return
        parts = self._one_for_all(BACKLASH, path.filed(correction.per_sigma))
        self._add(BACKLASH, path.filed(correction.size), parts)
        self._known[BACKLASH] = sigma
        self.said[BACKLASH] = f"A backlash of the traverse of {1e3 * value:.3g} mm ({how}) was taken out"
        self._carry(BACKLASH, "backlash of the traverse", (correction_input(BACKLASH),))

    def _to_and_fro(self) -> None:
        """What the rows still say of a lag or a backlash that the survey file does not tell."""
        probe = self.probe
        if probe.role == "static" or probe.backlash == "estimate":
            return
        pressures = self._comparable(self._pressures())
        self.apart = find_apart(self.path, pressures, self.holes, **self._known)

    def _drift(self) -> None:
        if self.probe.role == "static":
            return
        path = self.path
        place = np.where(self._as_most, find_revisits(path.y, path.z), -1)
        state = self.traverse.state(self.values, self.reference)
        assert state.total_pressure is not None and state.static_pressure is not None
        total, static = path.taken(state.total_pressure), path.taken(state.static_pressure)
        found = estimate_drift(np.stack([total, total - static]), path.clock, place)
        if found is None:
            self.notes.append(
                "No place was visited again: a drift of the readings over the traverse is unknown and in no figure."
            )
            return
        since = path.clock - float(np.mean(path.clock))
        here = (place >= 0) & np.isfinite(total)
        level, dynamic = (float(np.mean(x[here])) for x in (total, total - static))
        zero = self.reference.static_pressure
        pressures = self._pressures()

        def on_holes(by_total: Array, by_dynamic: Array) -> Array:
            # The change of the holes that changes H and q of the visited places by this much, everywhere alike.
            gain = by_dynamic / dynamic
            return by_total - gain * (level - zero) + gain * (pressures - zero)

        still, once = np.zeros(path.n), np.ones(path.n)
        size = np.zeros(pressures.shape)
        parts: dict[str, dict[str, Array]] = {}
        level_change = np.zeros(2)
        sentences = []
        names = (("total pressure", "total_pressure"), ("dynamic pressure", "dynamic_pressure"))
        span = float(np.ptp(path.clock))
        share = span / self.reference.dynamic_pressure
        for index, (name, key) in enumerate(names):
            rate, sigma = float(found.rate[index]), float(found.standard_uncertainty[index])
            clear = math.isfinite(sigma) and abs(rate) > quantile(found.degrees_of_freedom) * sigma
            unit = on_holes(*((since, still) if index == 0 else (still, since)))
            if clear:
                size -= rate * unit
            carried = sigma if clear else math.hypot(rate, np.nan_to_num(sigma))
            level_change[index] = rate if clear else math.copysign(carried, rate)
            parts |= self._one_for_all(f"{DRIFT}.{key}", path.filed(carried * unit))
            known = f"+- {abs(sigma) * share:.2%}" if math.isfinite(sigma) else "one repeat, so its scatter is unknown"
            done = "taken out" if clear else "not clear of the scatter, so carried as an uncertainty"
            changed = "changed " if index == 0 else ""
            sentences.append(f"the {name} {changed}by {rate * share:+.2%} of q ({known}; {done})")
        # What drifts was right at the first or at the last point, and the visits do not tell which.
        moved = 0.5 * span * level_change
        parts |= self._one_for_all(f"{DRIFT}.level", path.filed(on_holes(moved[0] * once, moved[1] * once)))
        self._add(DRIFT, path.filed(size), parts)
        self.said[DRIFT] = (
            f"{found.visits} visits to {found.places} place{'' if found.places == 1 else 's'} show that over the"
            f" traverse {' and '.join(sentences)}"
        )
        self._carry(DRIFT, "drift of the readings", tuple(parts))

    def _walls(self) -> None:
        if self.probe.walls is None:
            return
        pressures = self.traverse.pressures(self.values, self.reference)
        holes = np.stack([pressures[hole] for hole in self.holes])
        static = self.traverse.state(self.values, self.reference).static_pressure
        assert static is not None
        correction, sentence = wall_correction(self.survey, self.probe, self.points, holes, static)
        if correction is None:
            self.notes.append(sentence)
            return
        parts = self._one_for_all(WALL, correction.per_sigma)
        self._add(WALL, correction.size, parts)
        self.said[WALL] = sentence
        self._carry(WALL, "nearness of walls", tuple(parts))

    def _misalignment(self) -> None:
        row = self.path.filed(self.path.row)
        if self.probe.misalignment is None:
            refuse_contrary_rolls(self.traverse, self.values, self.points, row, self.reference)
        if self.probe.misalignment != "roll_pair":
            return
        turn, sentence = head_turn(self.traverse, self.values, self.points, row, self.reference)
        self.traverse = replace(self.traverse, tubes=tuple(tube.with_turn(turn) for tube in self.traverse.tubes))
        self.said[MISALIGNMENT] = sentence
        self._carry(MISALIGNMENT, "misalignment of the head", turn.inputs)

    def _not_corrected(self) -> None:
        walls = "for the nearness of walls (none are given)"
        seen = "the outer flow's angles below show the sum of that and of the stream's own"
        head = f"for a misalignment of its head ({seen})"
        if self.calibration is None:
            if self.probe.role == "flow" and self.probe.walls is None:
                self.notes.append(f"The tube was not corrected {walls}.")
            return
        left = [walls] * (self.probe.walls is None) + [head] * (self.probe.misalignment is None)
        if left:
            self.notes.append(f"The probe was not corrected {', nor '.join(left)}.")

    def _shear(self) -> Displacement | None:
        if self.probe.role == "static":
            return None
        coefficient, diameter = self.probe.displacement, self.probe.tip_diameter
        if coefficient is None:
            coefficient = COEFFICIENT if diameter is not None else 0.0
        if not coefficient:
            why = "switched off" if self.probe.displacement is not None else "tip_diameter is not given"
            self.notes.append(f"The probe's displacement in shear was not corrected ({why}).")
            return None
        if diameter is None:
            raise SurveyError(
                "a displacement needs the diameter of the tip",
                place="[probe] displacement",
                remedy='add tip_diameter = "3.2 mm", or write displacement = 0',
            )
        self.said[SHEAR] = (
            f"The displacement in shear of {coefficient:g} tip diameters (+- {STANDARD_UNCERTAINTY:g}, common practice)"
            " was taken out"
        )
        self._carry(SHEAR, "displacement in shear", (correction_input(SHEAR),))
        return Displacement(diameter, coefficient)

    # -- bookkeeping ------------------------------------------------------------------------------------------------

    def _pressures(self) -> Array:
        """Hole pressures as corrected so far, in the order in which they were taken, shape (holes, n)."""
        found = self.traverse.pressures(self.values, self.reference)
        return self.path.taken(np.stack([found[hole] for hole in self.holes]))

    @property
    def _as_most(self) -> NDArray[np.bool_]:
        """Points at the roll of most of them, in the order in which they were taken, shape (n,)."""
        most = self.traverse.tubes[0].points
        every = np.arange(self.path.n)
        return self.path.taken(every >= 0 if most is None else np.isin(every, most))

    def _comparable(self, pressures: Array) -> Array:
        """Pressures that follow each other from row to row: those of a probe rolled otherwise are left out as NaN."""
        return np.where(self._as_most, pressures, np.nan)

    def _one_for_all(self, name: str, per_sigma: Array) -> dict[str, dict[str, Array]]:
        return {correction_input(name): dict(zip(self.holes, np.nan_to_num(per_sigma), strict=True))}

    def _one_per_hole(self, name: str, per_sigma: Array) -> dict[str, dict[str, Array]]:
        return {
            correction_input(f"{name}.{hole}"): {hole: change}
            for hole, change in zip(self.holes, np.nan_to_num(per_sigma), strict=True)
        }

    def _add(
        self,
        name: str,
        size: Array | None,
        per_sigma: Mapping[str, Mapping[str, Array]],
        *,
        raw: bool = False,
        lag: LagFilter | None = None,
    ) -> None:
        sizes = {} if size is None else dict(zip(self.holes, np.nan_to_num(size), strict=True))
        addition = Addition(name, sizes, dict(per_sigma), raw=raw, lag=lag)
        self.traverse = replace(self.traverse, additions=(*self.traverse.additions, addition))

    def _carry(self, name: str, label: str, inputs: tuple[str, ...]) -> None:
        if inputs:
            self.sources.append(Source(f"{label} (correction)", inputs, "systematic", 1.0))


def quantile(freedom: int) -> float:
    """Two-sided quantile of Student's t."""
    from scipy.special import stdtrit

    return float(stdtrit(freedom, 1 - SIGNIFICANCE / 2)) if freedom > 0 else math.inf


def corrected_points(points: Points, traverse: Traverse, reference: Reference) -> Points:
    """The points with values that repeat where the flow does, at the reference condition and corrected.

    Hole pressures of one probe; of several, whose holes differ, the pressures and velocities they were reduced to.
    """
    values = {name: channel.values for name, channel in points.channels.items()}
    if len(traverse.tubes) > 1:
        state = traverse.state(values, reference)
        found = {name: getattr(state, name) for name in ("total_pressure", "static_pressure", "u", "v", "w")}
        return replace(points, channels={name: Channel(array) for name, array in found.items() if array is not None})
    pressures = traverse.pressures(values, reference)
    channels = {hole: replace(points.channels[hole], values=found) for hole, found in pressures.items()}
    return replace(points, channels=channels)
