"""Taking times, and what a time is held against."""

from __future__ import annotations

import math
import statistics
import time
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True)
class Timing:
    """Medians over several runs, s.

    Attributes
    ----------
    wall : float
        Time on the clock.
    cpu : float
        Time this process, or the one it started, kept its processors busy; NaN where it was not taken.
    """

    wall: float
    cpu: float = math.nan

    def __truediv__(self, yardstick: Timing) -> Timing:
        return Timing(self.wall / yardstick.wall, self.cpu / yardstick.cpu)

    def __mul__(self, factor: float) -> Timing:
        return Timing(self.wall * factor, self.cpu * factor)

    def __add__(self, other: Timing) -> Timing:
        return Timing(self.wall + other.wall, self.cpu + other.cpu)


#: No measurement is repeated beyond this time, s.
_ENOUGH = 4.0


def timed(call: Callable[[], object], *, runs: int = 5, warm: bool = True) -> Timing:
    """Median wall and CPU time of a call; one run before them fills the caches unless `warm` is False."""
    start = time.perf_counter()
    if warm:
        call()
    wall: list[float] = []
    cpu: list[float] = []
    while not wall or (len(wall) < runs and time.perf_counter() - start < _ENOUGH):
        busy, clock = time.process_time(), time.perf_counter()
        call()
        wall.append(time.perf_counter() - clock)
        cpu.append(time.process_time() - busy)
    return Timing(statistics.median(wall), statistics.median(cpu))


@dataclass(frozen=True)
class Result:
    """One measurement.

    Attributes
    ----------
    what : str
        What was measured.
    measured : Timing
        In `unit`.
    target : float or None
        Largest value wanted on an idle machine; None where there is no target.
    unit : str
        s, or free-space solves.
    how : str
        How it was measured.
    cores : int
        Processors it uses: its CPU time over these is the wall time of an idle machine.
    """

    what: str
    measured: Timing
    target: float | None
    unit: str
    how: str
    cores: int = 1

    @property
    def verdict(self) -> str:
        """Whether wall time meets the target; else whether the CPU time says that an idle machine would."""
        if self.target is None:
            return ""
        if self.measured.wall <= self.target:
            return "met"
        if self.measured.cpu / self.cores <= self.target:
            return "met by CPU time"
        return "missed" if math.isfinite(self.measured.wall) else "not measured"

    @property
    def target_text(self) -> str:
        """Target with its unit."""
        return "" if self.target is None else f"<= {self.target:g} {self.unit}"

    @property
    def measured_text(self) -> str:
        """Wall time with its unit."""
        return f"{self.measured.wall:.3g} {self.unit}"

    @property
    def cpu_text(self) -> str:
        """CPU time with its unit."""
        return f"{self.measured.cpu:.3g} {self.unit}" if math.isfinite(self.measured.cpu) else ""
