"""Noise of the channels of a survey as it is declared and as the data show it, and what is said of the two.

The data show noise twice: neighbouring points outside the wake differ by it, and so do points that were taken again.
Only these see what changes slowly. Nothing is changed on the data's word: one of the two is wrong.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import chdtri, fdtrc

from wakeledger.confidence.revisits import Scatter

#: Factor between shown and declared noise from which on it is told.
FACTOR = 1.5
#: Largest factor that is given: exact data show no noise at all.
MOST = 1000.0
#: Standard errors of what neighbours show that are allowed for beside it.
_ERRORS = 3.0
#: Chance of what re-visits show below which it is not left to chance: with five channels in two regions 0.2 % in all.
CHANCE = 2e-4
#: Re-visits of fewer degrees of freedom do not stand in for noise that is not declared.
FEWEST_REVISITS = 5
#: Noise below this share of the largest declared one does not matter beside it.
_MATTERS = 0.1
#: Names of the channels in sentences, their units, and whether they are pressures.
CHANNELS: Mapping[str, tuple[str, str, bool]] = {
    "u": ("u", "m/s", False),
    "v": ("v", "m/s", False),
    "w": ("w", "m/s", False),
    "speed": ("speed", "m/s", False),
    "pitch": ("pitch", "rad", False),
    "yaw": ("yaw", "rad", False),
    "total_pressure": ("total pressure", "Pa", True),
    "static_pressure": ("static pressure", "Pa", True),
}
#: Names of the regions that points were taken again in.
OUTSIDE, WAKE = "outside the wake", "in the wake"


@dataclass(frozen=True)
class Shown:
    """Noise of one channel as neighbouring points outside the wake show it.

    Attributes
    ----------
    deviation : float
        Standard deviation of one point, in the channel's unit; NaN where it cannot be had.
    lengths : (float, float)
        Length along z and y over which neighbours share it, m; NaN where they do not, or where that is not told.
    size : float
        Number of independent values that would fix the deviation equally well.
    sums : float
        By what factor sums over many points err more than with errors of each point's own: √(Σ correlation).
    """

    deviation: float
    lengths: tuple[float, float]
    size: float
    sums: float = 1.0

    @property
    def length(self) -> float:
        """The larger of the two lengths, m; NaN where neighbours share nothing."""
        known = [length for length in self.lengths if math.isfinite(length)]
        return max(known, default=math.nan)


def sums_factor(cells: Sequence[float]) -> float:
    """√(Σ exp(-(d/L)²/2)) over a grid, for correlation lengths L along its axes in cells; NaN for none."""
    lags = np.arange(-50, 51)
    sums = [float(np.exp(-0.5 * (lags / length) ** 2).sum()) for length in cells if math.isfinite(length)]
    return math.sqrt(math.prod(sums))


@dataclass(frozen=True)
class Again:
    """Points of one channel that were taken again, in one region.

    Attributes
    ----------
    where : str
        Outside the wake or in it.
    scatter : Scatter
        Of visits to places that were left in between.
    once : Scatter
        Of points taken one after the other.
    declared : float
        Standard deviation between visits by all sources together; 0 where none makes them differ.
    change : float
        Even change over the survey that the visits show, in the channel's unit; NaN where they show none.
    """

    where: str
    scatter: Scatter
    once: Scatter
    declared: float
    change: float


@dataclass(frozen=True)
class ChannelNoise:
    """Noise of one channel, shown and declared.

    Attributes
    ----------
    name : str
        Of `CHANNELS`.
    shown : Shown
        By neighbouring points.
    white : float
        Declared of each point alone, root mean square over the places that `shown` rests on.
    shared : bool
        Whether errors that neighbours share are declared as well.
    again : tuple of Again
        By points that were taken again.
    matters : bool
        Whether the rows depend on it.
    sources : tuple of str
        Those that declare noise of it.
    """

    name: str
    shown: Shown
    white: float
    shared: bool
    again: tuple[Again, ...] = ()
    matters: bool = True
    sources: tuple[str, ...] = ()

    @property
    def words(self) -> str:
        """Its name in a sentence."""
        return CHANNELS[self.name][0]

    @property
    def unit(self) -> str:
        """Its unit in a sentence."""
        return CHANNELS[self.name][1]

    @property
    def declares(self) -> bool:
        """Whether noise of this channel is declared."""
        return self.white > 0 or self.shared

    @property
    def compared(self) -> bool:
        """Whether there is declared noise that the data can be held against."""
        by_visits = self.declares and any(one.scatter.degrees_of_freedom for one in self.again)
        return (self.white > 0 and math.isfinite(self.shown.deviation)) or by_visits

    @property
    def ratio(self) -> float:
        """Noise that neighbours show over the declared one; NaN where either is not known."""
        return self.shown.deviation / self.white if self.white > 0 else math.nan

    @property
    def off(self) -> float:
        """Factor by which neighbours show another noise than declared, 3 standard errors taken off; at least 1."""
        if math.isnan(self.ratio):
            return 1.0
        allowed = _ERRORS / math.sqrt(2 * max(self.shown.size, 1.0))
        return min(max(_apart(self.ratio) * math.exp(-allowed), 1.0), MOST)

    @property
    def together(self) -> bool:
        """Whether neighbours share noise that is declared for each point alone."""
        return self.white > 0 and not self.shared and math.isfinite(self.shown.length)

    def drifts(self, one: Again) -> bool:
        """Whether re-visits outside the wake differ by more than neighbours and the declared sources explain."""
        short, size = self.short
        if one.where != OUTSIDE or not one.scatter.degrees_of_freedom or not short > 0:
            return False
        expected = math.sqrt(short**2 + max(one.declared**2 - self.white**2, 0.0))
        ratio = one.scatter.deviation / expected
        return ratio > FACTOR and fdtrc(one.scatter.degrees_of_freedom, max(size, 1.0), ratio**2) < CHANCE

    @property
    def short(self) -> tuple[float, float]:
        """Noise from point to point, and how many independent values fix it: NaN and 0 where it is not known."""
        parts = [(self.shown.deviation, self.shown.size)]
        parts += [(one.once.deviation, one.once.degrees_of_freedom) for one in self.again if one.where == OUTSIDE]
        return _pooled(parts)

    def best(self) -> tuple[float, str]:
        """Noise from point to point as all the data show it, and what shows it; NaN where nothing does."""
        short, size = self.short
        outside = [one for one in self.again if one.where == OUTSIDE]
        visits = sum(one.scatter.degrees_of_freedom + one.once.degrees_of_freedom for one in outside)
        if math.isfinite(self.shown.deviation):
            if visits < FEWEST_REVISITS or any(self.drifts(one) for one in outside):
                return short, "the data"
            again = _pooled([(one.scatter.deviation, one.scatter.degrees_of_freedom) for one in outside])
            if again[1] and short > 0 and fdtrc(size, again[1], (short / max(again[0], 1e-300)) ** 2) < CHANCE:
                # Neighbours differ by the flow itself as well.
                return again[0], f"the re-visits ({again[1]:.0f} degrees of freedom)"
            both = _pooled([(short, size), again])
            return both[0], f"neighbouring points and re-visits ({visits} degrees of freedom)"
        every = _pooled(
            [(part.deviation, part.degrees_of_freedom) for one in self.again for part in (one.scatter, one.once)]
        )
        if every[1] < FEWEST_REVISITS:
            return math.nan, ""
        return every[0], f"the re-visits ({every[1]:.0f} degrees of freedom)"


def _apart(ratio: float) -> float:
    return max(ratio, 1 / ratio) if ratio > 0 else math.inf


def _pooled(parts: Sequence[tuple[float, float]]) -> tuple[float, float]:
    known = [(deviation, size) for deviation, size in parts if size > 0 and math.isfinite(deviation)]
    total = sum(size for _, size in known)
    if not total:
        return math.nan, 0.0
    return math.sqrt(sum(size * deviation**2 for deviation, size in known) / total), total


def visits_off(one: Again) -> float:
    """Factor by which re-visits scatter otherwise than declared, what chance may do taken off; at least 1."""
    nu = one.scatter.degrees_of_freedom
    if not nu or not one.declared > 0:
        return 1.0
    ratio = one.scatter.deviation / one.declared
    bound = math.sqrt(float(chdtri(nu, CHANCE if ratio > 1 else 1 - CHANCE)) / nu)
    sure = ratio / bound if ratio > 1 else bound / max(ratio, 1e-300)
    return min(max(sure, 1.0), MOST)


@dataclass(frozen=True)
class NoiseFindings:
    """What the data say about the noise that the survey file declares.

    Attributes
    ----------
    channels : tuple of ChannelNoise
        Those that were measured.
    pressure_per_speed : float
        ρU, by which noise of pressures and of velocities is compared, Pa s/m.
    """

    channels: tuple[ChannelNoise, ...]
    pressure_per_speed: float

    def __getitem__(self, name: str) -> ChannelNoise:
        """The channel of this name; KeyError where there is none."""
        for one in self.channels:
            if one.name == name:
                return one
        raise KeyError(name)

    @property
    def declares(self) -> bool:
        """Whether any noise is declared."""
        return any(one.declares for one in self.channels)

    @property
    def compared(self) -> tuple[ChannelNoise, ...]:
        """Channels whose declared noise could be held against the data."""
        return tuple(one for one in self.channels if one.compared)

    @property
    def factor(self) -> float:
        """Largest factor by which the data surely show another noise than declared; NaN where nothing is compared."""
        if not self.compared:
            return math.nan
        found = [1.0]
        for one in self.compared:
            found += [one.off, *(visits_off(each) for each in one.again)]
            if one.together:
                # However short the length, the declaration is wrong.
                found.append(max(one.shown.sums, math.nextafter(FACTOR, 2)))
        return max(found)

    @property
    def disagreements(self) -> tuple[str, ...]:
        """Sentences about declared noise that is not what the data show, with what to do."""
        wrong = [
            f"{one.words} {one.shown.deviation:.2g} {one.unit}, declared {one.white:.2g} {one.unit}"
            for one in self.channels
            if one.off > FACTOR
        ]
        together = [f"{one.words} over about {1e3 * one.shown.length:.2g} mm" for one in self.channels if one.together]
        apart = [
            f"{one.words} {each.scatter.deviation:.2g} {one.unit} {each.where}, declared {each.declared:.2g} {one.unit}"
            for one in self.compared
            for each in one.again
            if visits_off(each) > FACTOR and not (one.off > FACTOR and each.where == OUTSIDE)
        ]
        found = []
        if wrong:
            found.append(
                f"The point-to-point noise shown by the data is not the declared one ({'; '.join(wrong)}): correct the"
                f" size of {self._named(one for one in self.channels if one.off > FACTOR)}, or find what makes it so."
            )
        if together:
            found.append(
                f"Neighbouring points share their noise ({'; '.join(together)}), which the survey file declares for"
                " each point alone, so that its part of the uncertainty is too small: give the source a"
                ' correlation_length, or effect = "per_row".'
            )
        if apart:
            found.append(
                f"Points taken again scatter otherwise than declared ({'; '.join(apart)}); in a wake the places may"
                " not repeat, or the flow may not be steady: correct the sources, or declare what changes in between."
            )
        return tuple(found)

    @property
    def drift(self) -> str | None:
        """A sentence about what changes between visits, where they show more than noise from point to point."""
        found, places, uneven = [], 0, False
        for one in self.channels:
            for each in one.again:
                if not one.drifts(each):
                    continue
                places = max(places, each.scatter.places)
                text = f"{one.words} {each.scatter.deviation:.2g} {one.unit} against {one.short[0]:.2g} {one.unit}"
                if math.isfinite(each.change):
                    text += f", a drift of {each.change:+.2g} {one.unit} over the survey"
                else:
                    uneven = True
                found.append(text)
        if not found:
            return None
        what = "an uneven drift, or hysteresis, if" if uneven else "a drift, if"
        where = "a place" if places == 1 else f"{places} places"
        return (
            f"Re-visits to {where} outside the wake differ by more than neighbouring points do ({'; '.join(found)}):"
            f" {what} the flow itself did not change. Noise from point to point does not hold it: read the reference"
            ' along with each point, or declare it as a source with effect = "per_row".'
        )

    @property
    def undeclared(self) -> str | None:
        """A sentence about channels whose noise is not declared beside others whose is, and matters."""
        declared = max((self._as_speed(one, one.white) for one in self.channels), default=0.0)
        missing = [
            f"{one.words} {one.shown.deviation:.2g} {one.unit}"
            for one in self.channels
            if one.matters and not one.declares and self._as_speed(one, one.shown.deviation) > _MATTERS * declared > 0
        ]
        if not missing:
            return None
        return (
            f"The data show noise that no source declares ({'; '.join(missing)}), so that it is in no uncertainty:"
            " declare it as a random source."
        )

    @property
    def _ratios(self) -> str:
        """Shown over declared noise by channel; where only re-visits show any, theirs."""
        found = []
        for one in self.compared:
            ratios = [one.ratio] + [each.scatter.deviation / each.declared for each in one.again if each.declared > 0]
            known = [ratio for ratio in ratios if math.isfinite(ratio)]
            found += [f"{one.words} {known[0]:.2g}"] if known else []
        return f"shown over declared: {', '.join(found)}"

    @staticmethod
    def _named(channels: Iterable[ChannelNoise]) -> str:
        """The sources that declare noise of channels."""
        names = dict.fromkeys(f"{name!r}" for one in channels for name in one.sources)
        return " and ".join(names) or "its source"

    def _as_speed(self, one: ChannelNoise, deviation: float) -> float:
        return deviation / self.pressure_per_speed if CHANNELS[one.name][2] else deviation

    @property
    def notes(self) -> tuple[str, ...]:
        """What the check `declared_noise` does not say."""
        drift = None if self.disagreements else self.drift
        return tuple(sentence for sentence in (drift, self.undeclared) if sentence)

    @property
    def messages(self) -> dict[str, str]:
        """What the check `declared_noise` says, by its verdict."""
        if not self.declares:
            missing = "No noise is declared that the data could be held against."
        elif any(one.white > 0 for one in self.channels):
            missing = "Too little flow outside the wake is left to show whether the declared noise is right."
        else:
            missing = "The declared noise is shared by neighbouring points, and no point was taken again to show it."
        drift = self.drift
        return {
            "not_applicable": missing,
            "pass": f"The data show the noise that is declared, as far as they tell ({self._ratios}).",
            "warn": " ".join([*self.disagreements, *([drift] if drift else [])]),
        }
