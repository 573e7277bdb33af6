"""What rows taken to and fro tell of a lag and a backlash: of those that are stated, and of those that are not.

Either moves a row against its direction of travel. Where neither is stated and the rows stand apart, nothing is taken
out, since the two cannot be told apart at one speed; what it is worth is said.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from wakeledger.core.grid import Array
from wakeledger.intake.probe.backlash import Backlash, correct_backlash, estimate_backlash
from wakeledger.intake.probe.lag import estimate_lag, make_rate_filter
from wakeledger.intake.probe.traverse import Addition, LagFilter
from wakeledger.run.traverse.travel import Travel

#: Names of the corrections.
LAG, BACKLASH = "lag", "backlash"
#: How well a lag or a backlash is known that the survey file states, as a share of it.
STATED = 0.1
#: Rows stand apart if their scatter gives it less than this chance, and if it is more than this share of the step.
CHANCE, LEAST = 0.005, 0.005
#: An estimate that the scatter gives more than this chance is not clear of it.
_DOUBTFUL = 0.05
#: What is within this many standard uncertainties of what was taken out is carried with it.
_COVERED = 2.0


@dataclass(frozen=True, eq=False)
class Apart:
    """How far rows taken to and fro stand apart after the corrections that were asked for.

    Attributes
    ----------
    value, standard_uncertainty : float
        As a backlash, m.
    step : float
        Typical distance between the points of a row, m.
    chance : float
        How likely the scatter between the rows alone is to do so.
    lag : float
        The time constant that would do the same at the speed of the traverse, s; NaN where the time is not known.
    rest : bool
        Whether a lag or a backlash was taken out before.
    carried : float
        What of it is carried as an uncertainty by then, m.
    additions : mapping of str to tuple of Addition
        What taking it out would add to the holes, by `BACKLASH` and `LAG`, as either of them.
    whose : str
        Which tubes of a rake it is true of; empty for all.
    """

    value: float
    standard_uncertainty: float
    step: float
    chance: float
    lag: float
    rest: bool
    carried: float = 0.0
    additions: Mapping[str, tuple[Addition, ...]] = field(default_factory=dict)
    whose: str = ""

    @property
    def clear(self) -> bool:
        """Whether it is more than the scatter between the rows, and worth a word."""
        return self.chance < CHANCE and abs(self.value) > max(LEAST * self.step, _COVERED * self.carried)

    @property
    def sentence(self) -> str:
        """What is seen, without its worth."""
        left = "still stand apart, after what was taken out," if self.rest else "stand apart"
        rows = f"Rows of {self.whose} taken to and fro" if self.whose else "Rows taken to and fro"
        found = (
            f"{rows} {left} by {1e3 * self.value:+.3g} mm (+- {1e3 * self.standard_uncertainty:.2g} mm),"
            " as by a backlash of the traverse"
        )
        if LAG in self.additions:
            found += f", or by a lag of the tubing of {1e3 * self.lag:.3g} ms"
        return found + (", that is not stated" if not self.rest else "")

    @property
    def remedy(self) -> str:
        """What to do about it."""
        if self.value < 0:
            return (
                "The probe seems to run ahead of its indicated place: check the order and the times of the points and"
                ' what the traverse does about its play, or write backlash = "estimate" in [probe]'
            )
        if LAG in self.additions:
            return (
                f'Write backlash = "estimate", or lag = "{1e3 * self.lag:.3g} ms", in [probe]; one row traversed at two'
                " speeds tells which"
            )
        return 'Write backlash = "estimate" in [probe]'


def lag_uncertainty(path: Travel, pressures: Array, *, lag: float, backlash: bool) -> tuple[float, str]:
    """Standard uncertainty of a stated lag, s, and how it is known.

    Parameters
    ----------
    path : Travel
        The way of the probe, with its times.
    pressures : ndarray, shape (holes, n)
        In the order in which they were taken, Pa; NaN ones are not used.
    lag : float
        As stated, s.
    backlash : bool
        Whether a backlash is to be taken out, too.
    """
    known = f"taken as known to {STATED:.0%}"
    if backlash:
        return STATED * lag, f"{known}; with play of the traverse beside it, rows taken both ways cannot tell it"
    assert path.time is not None
    found = estimate_lag(*path.along_and_across, path.row, path.time, pressures)
    if not (math.isfinite(found.value) and math.isfinite(found.standard_uncertainty)):
        return STATED * lag, f"{known}; {found.reason or 'the scatter between rows cannot be told'}"
    return math.hypot(found.standard_uncertainty, found.value - lag), (
        f"rows taken both ways show {1e3 * found.value:.3g} +- {1e3 * found.standard_uncertainty:.2g} ms,"
        " and the difference is its uncertainty"
    )


def estimated_backlash(path: Travel, pressures: Array) -> tuple[Backlash, str]:
    """Backlash between the rows, and how well it is known; why it cannot be had, where its uncertainty is NaN.

    One that is not clear of the scatter between the rows is 0, its uncertainty what was found and that of it together.
    """
    found = estimate_backlash(*path.along_and_across, path.row, pressures)
    if found.reason is not None or not math.isfinite(found.standard_uncertainty):
        return found, found.reason or "its uncertainty cannot be told"
    how = f"estimated from {found.rows} rows, +- {1e3 * found.standard_uncertainty:.2g} mm"
    if not found.chance < _DOUBTFUL:
        how = f"{1e3 * found.value:+.2g} mm were {how}: not clear of the scatter between rows, so carried alone"
        carried = math.hypot(found.value, found.standard_uncertainty)
        return replace(found, value=0.0, standard_uncertainty=carried), how
    if found.value < 0:
        how += (
            "; a play is never negative: check the order and the times of the points, and what the traverse does about"
            " its play"
        )
    return found, how


def find_apart(
    path: Travel, pressures: Array, holes: tuple[str, ...], *, lag: float | None = None, backlash: float | None = None
) -> Apart | None:
    """How far rows taken to and fro stand apart.

    Parameters
    ----------
    path : Travel
        The way of the probe.
    pressures : ndarray, shape (holes, n)
        As corrected so far, in the order in which they were taken, Pa; NaN ones are not used.
    holes : tuple of str
        Names of the holes.
    lag, backlash : float, optional
        Standard uncertainties of those that were taken out already, s and m.

    Returns
    -------
    Apart or None
        None where the scatter between rows may do it, rows run one way, or too few do to tell.
    """
    along, across = path.along_and_across
    found = estimate_backlash(along, across, path.row, pressures, below=CHANCE)
    if found.reason is not None or not math.isfinite(found.standard_uncertainty):
        return None
    step = np.abs(np.diff(along)[np.diff(path.row) == 0])
    step = step[step > 0]
    typical = float(np.median(step))
    if not found.chance < CHANCE:
        return None
    size = correct_backlash(pressures, along, path.row, backlash=found.value).size
    rest = lag is not None or backlash is not None
    carried = 0.0 if backlash is None else backlash
    if lag is not None:
        carried = math.hypot(carried, 2.0 * lag * _speed(path))
    additions = {BACKLASH: (Addition(BACKLASH, _by_hole(holes, path.filed(size))),)}
    tau = math.nan if rest else _equal_lag(path, pressures, found.value)
    if tau > 0:
        assert path.time is not None
        rates = make_rate_filter(path.time, path.row, values=pressures)
        additions[LAG] = (Addition(LAG, {}, lag=LagFilter(rates, tau, path.order)),)
    return Apart(found.value, found.standard_uncertainty, typical, found.chance, tau, rest, carried, additions)


def _equal_lag(path: Travel, pressures: Array, value: float) -> float:
    """Time constant that moves rows apart as far as a backlash does, s; from rows taken both ways where there are."""
    if path.time is None or not value > 0:
        return math.nan
    along, across = path.along_and_across
    if not (np.diff(path.time)[np.diff(path.row) == 0] > 0).all():
        return math.nan
    found = estimate_lag(along, across, path.row, path.time, pressures)
    if math.isfinite(found.value) and found.value > 0:
        return found.value
    return value / (2.0 * _speed(path))


def _speed(path: Travel) -> float:
    """Typical speed along the rows, m/s."""
    assert path.time is not None
    within = np.diff(path.row) == 0
    along, _ = path.along_and_across
    return float(np.median(np.abs(np.diff(along)[within]) / np.diff(path.time)[within]))


def _by_hole(holes: tuple[str, ...], values: Array) -> dict[str, Array]:
    return dict(zip(holes, np.nan_to_num(values), strict=True))
