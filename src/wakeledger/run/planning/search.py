"""Which set-up is the cheapest that knows enough, and what would make it know more."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.ledger.plan import Improvement, SetUp
from wakeledger.run.config.plan import PlanTable
from wakeledger.run.planning.instrument import Probe
from wakeledger.run.planning.response import Response
from wakeledger.run.planning.simulate import Accuracies, Window
from wakeledger.run.planning.target import Target

#: Factor of a 95 % interval of a normal distribution.
FACTOR = 1.959964
#: Improvements that gain less than this part of the uncertainty are left out.
SMALLEST_GAIN = 1e-3
_ACCURACIES = ("angle_accuracy", "reference_accuracy", "density_accuracy", "reference_drift")

Key = tuple[int, int, int]


@dataclass(frozen=True)
class Choice:
    """One set-up by its places in the ranges.

    Attributes
    ----------
    spacing, window, probe : int
        Places in the ranges.
    accuracies : Accuracies
        Of everything beside the noise.
    repeats : int
        Number of surveys.
    """

    spacing: int
    window: int
    probe: int
    accuracies: Accuracies
    repeats: int

    @property
    def key(self) -> Key:
        """Which response it belongs to."""
        return self.spacing, self.window, self.probe


@dataclass(frozen=True, eq=False)
class Design:
    """Everything that can be chosen, and how each choice answers.

    Attributes
    ----------
    plan : PlanTable
        The ranges.
    target : Target
        What is wanted.
    spacings, margins : tuple of float
        m, ascending.
    probes : tuple of Probe
        The best first.
    windows : mapping of (int, int) to Window
        By the places of spacing and margin; those that are not known are left out.
    responses : mapping of Key to Response
        By the places of spacing, margin and probe.
    """

    plan: PlanTable
    target: Target
    spacings: tuple[float, ...]
    margins: tuple[float, ...]
    probes: tuple[Probe, ...]
    windows: Mapping[tuple[int, int], Window]
    responses: Mapping[Key, Response]

    @property
    def time_limit(self) -> float:
        """Most minutes, infinite where there is no limit."""
        return math.inf if self.plan.time_limit is None else self.plan.time_limit / 60

    def range_of(self, key: str) -> tuple[float, ...]:
        """Values of one accuracy, the best first; zero where none is given."""
        given: tuple[float, ...] | None = getattr(self.plan, key)
        return tuple(sorted(given)) if given is not None else (0.0,)

    def choices(self) -> Iterator[Choice]:
        """Every set-up."""
        accuracies = [Accuracies(*values) for values in itertools.product(*map(self.range_of, _ACCURACIES))]
        for key in self.responses:
            for one, repeats in itertools.product(accuracies, sorted(self.plan.repeats)):
                yield Choice(*key, one, repeats)

    def window_of(self, choice: Choice) -> Window:
        """Where its points stand."""
        return self.windows[choice.spacing, choice.window]

    def minutes(self, choice: Choice) -> float:
        """Time of all its surveys; NaN where the plan does not say."""
        return minutes_of(self.plan, self.window_of(choice), choice.repeats)

    def cost(self, choice: Choice) -> float:
        """Minutes, or points where the time is not known."""
        minutes = self.minutes(choice)
        return minutes if math.isfinite(minutes) else float(self.points(choice))

    def points(self, choice: Choice) -> int:
        """Points of all its surveys."""
        return self.window_of(choice).points * choice.repeats

    def uncertainty(self, choice: Choice) -> float:
        """Expanded uncertainty as shown; NaN where no such survey can be reduced."""
        variance = self.responses[choice.key].scatter(choice.accuracies, choice.repeats)
        return FACTOR * math.sqrt(variance) * self.target.scale if variance >= 0 else math.nan

    def stated(self, choice: Choice) -> float:
        """Expanded uncertainty that the ledgers of such surveys state; NaN where none can be reduced."""
        response = self.responses[choice.key]
        if response.reason is not None:
            return math.nan
        return FACTOR * math.sqrt(response.stated(choice.accuracies, choice.repeats)) * self.target.scale

    def looseness(self, choice: Choice) -> tuple[float, ...]:
        """How little accuracy a choice asks for; more is cheaper to have."""
        ranks = [choice.probe / max(len(self.probes) - 1, 1)]
        for key in _ACCURACIES:
            values = self.range_of(key)
            ranks.append(values.index(getattr(choice.accuracies, key)) / max(len(values) - 1, 1))
        return (sum(ranks), *ranks)

    def allowed(self, choice: Choice) -> bool:
        """Whether a choice can be reduced, passes its checks and is within the time limit."""
        minutes = self.minutes(choice)
        return self.responses[choice.key].usable and not minutes > self.time_limit

    def cheapest(self, probe: int | None = None) -> tuple[Choice | None, bool]:
        """The cheapest set-up that reaches the target, else the one that knows most.

        Parameters
        ----------
        probe : int, optional
            With this probe only.

        Returns
        -------
        (Choice or None, bool)
            None where nothing can be reduced; whether the target is reached. Of several that cost the same the one that
            asks for the least accuracy.
        """
        usable = [one for one in self.choices() if self.responses[one.key].reason is None]
        if probe is not None:
            usable = [one for one in usable if one.probe == probe]
        known = [(self.uncertainty(one), one) for one in usable]
        within = [(u, one) for u, one in known if self.allowed(one)]
        enough = [one for u, one in within if u <= self.target.limit]
        if enough:
            return min(enough, key=lambda one: (self.cost(one), *(-rank for rank in self.looseness(one)))), True
        pool = within or [(u, one) for u, one in known if not self.minutes(one) > self.time_limit]
        if not pool:
            return None, False
        return min(pool, key=lambda pair: (pair[0], self.cost(pair[1])))[1], False

    def beyond(self) -> Choice | None:
        """The cheapest set-up that reaches the target whatever time it takes."""
        enough = [
            one
            for one in self.choices()
            if self.responses[one.key].usable and self.uncertainty(one) <= self.target.limit
        ]
        return min(enough, key=lambda one: (self.cost(one), *(-rank for rank in self.looseness(one))), default=None)

    def set_up(self, choice: Choice) -> SetUp:
        """A choice as it is reported."""
        window, probe, response = self.window_of(choice), self.probes[choice.probe], self.responses[choice.key]
        return SetUp(
            spacing=window.spacing,
            window=window.margin,
            probe=probe.label,
            velocity_noise=probe.velocity,
            total_pressure_noise=probe.total_pressure,
            static_pressure_noise=probe.static_pressure,
            **{key: getattr(choice.accuracies, key) for key in _ACCURACIES},
            repeats=choice.repeats,
            lines_y=window.y.size,
            lines_z=window.z.size,
            points=window.points,
            minutes=self.minutes(choice),
            expanded_uncertainty=self.uncertainty(choice),
            stated=self.stated(choice),
            failing=response.failing,
            reason=response.reason,
        )


def minutes_of(plan: PlanTable, window: Window, repeats: int) -> float:
    """Minutes that surveys of a window take: settling at every point, and the way to and fro."""
    if plan.settling_time is None and plan.traverse_speed is None:
        return math.nan
    way = 0.0 if plan.traverse_speed is None else window.path / plan.traverse_speed
    return repeats * (window.points * (plan.settling_time or 0.0) + way) / 60


def improvements(design: Design, choice: Choice, sources: Mapping[str, float], total: float) -> tuple[Improvement, ...]:
    """What each single improvement of a set-up is worth.

    Parameters
    ----------
    design : Design
        What can be chosen.
    choice : Choice
        The set-up.
    sources : mapping of str to float
        What can be halved, with the variance it causes, in the plan's unit squared.
    total : float
        Variance of the whole, in the same.

    Returns
    -------
    tuple of Improvement
        The one that gains most first.
    """
    now = FACTOR * math.sqrt(total)
    found = []
    for name, variance in sources.items():
        if variance <= 0:
            continue
        after = FACTOR * math.sqrt(max(total - 0.75 * variance, 0.0))
        found.append(Improvement(f"half of the {name}", after, now - after, 0.0))
    predicted = design.uncertainty(choice)
    ratio = now / predicted if predicted > 0 else math.nan
    for what, other in _neighbours(design, choice):
        after = ratio * design.uncertainty(other)
        if math.isfinite(after):
            minutes = design.minutes(other) - design.minutes(choice)
            points = design.points(other) - design.points(choice)
            found.append(Improvement(what, after, now - after, minutes, points))
    return tuple(sorted((one for one in found if one.gain > SMALLEST_GAIN * now), key=lambda one: -one.gain))


def _neighbours(design: Design, choice: Choice) -> Iterator[tuple[str, Choice]]:
    """Set-ups that differ in one thing that takes time."""
    yield (
        f"{choice.repeats + 1} surveys instead of {choice.repeats}",
        replace(choice, repeats=choice.repeats + 1),
    )
    if choice.repeats > 1:
        yield f"{2 * choice.repeats} surveys instead of {choice.repeats}", replace(choice, repeats=2 * choice.repeats)
    finer, wider = choice.spacing - 1, choice.window + 1
    others = []
    if finer >= 0:
        text = f"points every {1e3 * design.spacings[finer]:.3g} mm"
        others.append((text, replace(choice, spacing=finer)))
    if wider < len(design.margins):
        text = f"a window {1e3 * design.margins[wider]:.3g} mm beyond the wake"
        others.append((text, replace(choice, window=wider)))
    for text, other in others:
        response = design.responses.get(other.key)
        if response is not None and response.usable:
            yield text, other


def map_of(design: Design, choice: Choice) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Uncertainty, failing checks and minutes over the axes of the map, everything else as chosen."""
    shape = (len(design.probes), len(design.margins), len(design.spacings))
    uncertainty, failing = np.full(shape, np.nan), np.zeros(shape, dtype=bool)
    minutes = np.full(shape[1:], np.nan)
    for (i, j, c), response in design.responses.items():
        other = replace(choice, spacing=i, window=j, probe=c)
        minutes[j, i] = design.minutes(other)
        if response.reason is None:
            uncertainty[c, j, i] = design.uncertainty(other)
            failing[c, j, i] = bool(response.failing)
    return uncertainty, failing, minutes
