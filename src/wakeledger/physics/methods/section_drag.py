"""Drag of a section from one traverse through its wake: three methods, one window, and how much the window matters."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from wakeledger.core.errors import DataError
from wakeledger.core.estimate import Estimate
from wakeledger.core.grid import Array
from wakeledger.physics.fields.traverse_window import WakeWindow, edge_levels, wake_edges
from wakeledger.physics.methods.section_kernels import (
    KERNELS,
    betz,
    jones,
    momentum_outer_part,
    static_at,
    total_at,
    window_weights,
)
from wakeledger.stream.reference import Reference

EdgeStatic = Literal["measured", "stream", "edge_speed"]

#: Widths of the window, relative to the chosen one, that its uncertainty is taken from. The narrowest still holds
#: 99.9 % of a Gaussian wake's deficit; the widest reaches well into the outer flow.
SWEEP = (0.9, 0.95, 1.0, 1.1, 1.25)


@dataclass(frozen=True)
class SectionDrag:
    """Drag of a section per unit span by three methods, and the window it was taken over.

    Attributes
    ----------
    window : WakeWindow
        The part of the traverse that was integrated.
    jones, betz, momentum : float
        Drag per unit span, N/m, positive downstream.
    expected_difference : mapping of str to float
        What each method is expected to read above Jones at this static pressure, N/m: to first order in the loss, and
        for the momentum balance with what the window leaves of the outer flow.
    sweep : mapping of str to (float, float)
        Least and greatest value of each method while the window's width is swept over `SWEEP`, N/m.
    edge_static : {"measured", "stream", "edge_speed"}
        Where the static pressure comes from.
    coordinate, total_pressure, static_pressure : ndarray, shape (n,)
        The traverse as it was integrated, ascending; m and Pa.
    stalled_points : int
        Points of the window whose total pressure is below the local or the stream's static pressure, where the recovery
        that Jones assumes does not exist; their speed is taken as zero.
    outer_loss : float
        Mean loss of total pressure outside the window, Pa; zero but for drift of the reference. NaN without points.
    """

    window: WakeWindow
    jones: float
    betz: float
    momentum: float
    expected_difference: Mapping[str, float]
    sweep: Mapping[str, tuple[float, float]]
    edge_static: EdgeStatic
    coordinate: Array
    total_pressure: Array
    static_pressure: Array
    stalled_points: int
    outer_loss: float

    def estimates(self) -> tuple[Estimate, ...]:
        """The three methods as estimates of the row ``section_drag``, Jones first.

        Returns
        -------
        tuple of Estimate
            The method uncertainty is the standard deviation of a uniform distribution over the sweep of the window.
        """
        return tuple(
            Estimate(
                "section_drag",
                name,
                value=getattr(self, name),
                method_uncertainty=(self.sweep[name][1] - self.sweep[name][0]) / math.sqrt(12.0),
                expected_difference=self.expected_difference[name],
                reason="the uncertainty of the measurement has not been propagated yet",
                terms=MappingProxyType(
                    {
                        "window_lower": self.window.lower,
                        "window_upper": self.window.upper,
                        "sweep_low": self.sweep[name][0],
                        "sweep_high": self.sweep[name][1],
                        "stalled_points": float(self.stalled_points),
                    }
                ),
            )
            for name in KERNELS
        )


def section_drag(
    coordinate: ArrayLike,
    total_pressure: ArrayLike | None,
    static_pressure: ArrayLike | None,
    reference: Reference,
    *,
    speed: ArrayLike | None = None,
    total_temperature: ArrayLike | None = None,
    edge_static: EdgeStatic = "measured",
    window: tuple[float, float] | None = None,
    level: float = 3.0,
    noise: float | None = None,
) -> SectionDrag:
    """Drag of a section per unit span from a traverse through its wake.

    Parameters
    ----------
    coordinate : array_like, shape (n,)
        Positions across the wake, normal to stream and span, m; any spacing, ascending or descending.
    total_pressure : array_like, shape (n,), or None
        Total pressure, Pa, on the same zero as the reference's; None where `speed` is given in its place.
    static_pressure : array_like, shape (n,), or None
        Static pressure, Pa; needed for ``edge_static="measured"`` only.
    reference : Reference
        The undisturbed stream.
    speed : array_like, shape (n,), optional
        Speed along the stream, m/s, where no total pressure was measured.
    total_temperature : array_like, shape (n,), optional
        Total temperature, K; the stream's where not given. Used in compressible flow only.
    edge_static : {"measured", "stream", "edge_speed"}
        Static pressure across the wake: as measured; the stream's; or from the speed of the loss-free flow, straight
        between the speeds at the two wake edges.
    window : (float, float), optional
        Lower and upper edge of the wake, m; found from the traverse where not given (`wake_edges`).
    level : float
        How many standard deviations of the noise the wake's edge stands out of it.
    noise : float, optional
        Standard deviation of one point, Pa (m/s with ``speed``); estimated outside the wake where not given.

    Returns
    -------
    SectionDrag

    Raises
    ------
    DataError
        If arrays are missing, differ in shape, are not finite, not physical, or repeat a position; if no wake stands
        out of the noise; or if the window is not inside the traverse.

    Notes
    -----
    Inside the window the loss is used with its sign, so that noise cancels. Integrands are taken as straight between
    points. With ``"edge_speed"`` the local static pressure follows from p = p_inf + (rho/2)(U^2 - u_e^2).
    """
    traverse = _Traverse.checked(
        coordinate, total_pressure, static_pressure, reference, speed, total_temperature, edge_static
    )
    if window is None:
        chosen = wake_edges(traverse.z, traverse.deficit, level=level, noise=noise, sloping=speed is not None)
    else:
        chosen = WakeWindow.given(traverse.z, traverse.deficit, *window)
    return traverse.reduce(chosen)


def window_sweep(
    method: str,
    coordinate: ArrayLike,
    total_pressure: ArrayLike | None,
    static_pressure: ArrayLike | None,
    reference: Reference,
    *,
    window: tuple[float, float],
    widths: Sequence[float] = SWEEP,
    speed: ArrayLike | None = None,
    total_temperature: ArrayLike | None = None,
    edge_static: EdgeStatic = "measured",
) -> tuple[float, float, float]:
    """How much the choice of the window matters.

    Parameters
    ----------
    method : {"jones", "betz", "momentum"}
        The method.
    coordinate, total_pressure, static_pressure, reference, speed, total_temperature, edge_static
        As for `section_drag`.
    window : (float, float)
        Lower and upper edge of the wake, m.
    widths : sequence of float
        Widths to try, relative to the window's, about its centre; cut off where the traverse ends.

    Returns
    -------
    value, low, high : float
        Drag per unit span in the window, and the least and greatest over the sweep, N/m.

    Raises
    ------
    DataError
        As for `section_drag`.
    """
    if method not in KERNELS:
        raise ValueError(f"method must be one of {', '.join(KERNELS)}, {method!r} was given")
    traverse = _Traverse.checked(
        coordinate, total_pressure, static_pressure, reference, speed, total_temperature, edge_static
    )
    chosen = WakeWindow.given(traverse.z, traverse.deficit, *window)
    values = [traverse.drag(chosen.scaled(width, traverse.z))[method] for width in (1.0, *widths)]
    return values[0], min(values), max(values)


@dataclass(frozen=True)
class _Traverse:
    """A checked traverse, ascending; with `edge_speed` the pressures it gives depend on the window."""

    z: Array
    total: Array | None
    static: Array | None
    speed: Array | None
    total_temperature: Array | None
    reference: Reference
    edge_static: EdgeStatic

    @classmethod
    def checked(
        cls,
        coordinate: ArrayLike,
        total_pressure: ArrayLike | None,
        static_pressure: ArrayLike | None,
        reference: Reference,
        speed: ArrayLike | None,
        total_temperature: ArrayLike | None,
        edge_static: EdgeStatic,
    ) -> _Traverse:
        if edge_static not in ("measured", "stream", "edge_speed"):
            raise DataError(f"edge_static is {edge_static!r}", remedy="it is measured, stream or edge_speed")
        if (total_pressure is None) == (speed is None):
            raise DataError(
                "a section traverse needs its total pressure or its speed", remedy="give exactly one of them"
            )
        if edge_static == "measured" and static_pressure is None:
            raise DataError(
                "edge_static is measured, but the traverse has no static pressure",
                remedy="give static_pressure, or set edge_static to stream or edge_speed",
            )
        if edge_static == "edge_speed" and speed is None:
            raise DataError(
                "edge_static is edge_speed, but the traverse has no speed", remedy="give u, or use measured"
            )
        z = np.asarray(coordinate, dtype=float)
        order = np.argsort(z, kind="stable")
        if z.ndim != 1 or z.size < 5:
            raise DataError(
                f"a section traverse of shape {z.shape} was given", remedy="give at least 5 points on one line"
            )
        if not np.all(np.diff(z[order]) > 0.0):
            raise DataError(
                "the section traverse repeats a position or has one that is missing", remedy="average repeats"
            )
        found: dict[str, Array | None] = {}
        for name, values in (
            ("total pressure", total_pressure),
            ("static pressure", static_pressure if edge_static == "measured" else None),
            ("speed", speed),
            ("total temperature", total_temperature),
        ):
            array = None if values is None else np.asarray(values, dtype=float)
            if array is not None and array.shape != z.shape:
                raise DataError(
                    f"the {name} has shape {array.shape}, the traverse {z.shape}", remedy="give one per point"
                )
            if array is not None and not np.all(np.isfinite(array)):
                raise DataError(f"the {name} of the section traverse is not finite everywhere", remedy="leave gaps out")
            found[name] = None if array is None else array[order]
        if reference.compressible and found["speed"] is not None:
            limit = math.sqrt(2.0 * reference.heat_capacity * reference.total_temperature)
            if np.any(np.abs(found["speed"]) >= limit):
                raise DataError(
                    "a speed of the traverse exceeds what the total temperature allows", remedy="check units"
                )
        for name in ("total pressure", "static pressure"):
            pressure = found[name]
            if reference.compressible and pressure is not None and not np.all(pressure > 0.0):
                raise DataError(
                    f"the {name} of the section traverse is not positive everywhere", remedy="give it absolute"
                )
        total = found["total pressure"]
        if total is not None:
            static = reference.static_pressure if found["static pressure"] is None else found["static pressure"]
            below = int(np.count_nonzero(total < static))
            if 2 * below > z.size:
                raise DataError(
                    f"the total pressure is below the static pressure at {below} of {z.size} points of the traverse",
                    remedy="check whether the two are exchanged and what each is relative_to",
                )
        return cls(
            z=z[order],
            total=found["total pressure"],
            static=found["static pressure"],
            speed=found["speed"],
            total_temperature=found["total temperature"],
            reference=reference,
            edge_static=edge_static,
        )

    @property
    def deficit(self) -> Array:
        """What marks the wake: loss of total pressure, Pa, or of speed, m/s."""
        if self.total is not None:
            return self.reference.total_pressure - self.total
        assert self.speed is not None
        return self.reference.speed - self.speed

    def pressures(self, window: WakeWindow) -> tuple[Array, Array]:
        """Total and static pressure on the traverse, Pa."""
        if self.edge_static == "measured":
            assert self.static is not None
            static = self.static
        elif self.edge_static == "stream":
            static = np.full(self.z.size, self.reference.static_pressure)
        else:
            assert self.speed is not None
            at_lower, at_upper = edge_levels(self.z, self.speed, window)
            share = (self.z - window.lower) / window.width
            static = static_at(at_lower + (at_upper - at_lower) * share, self.reference)
        if self.total is not None:
            return self.total, static
        assert self.speed is not None
        return total_at(self.speed, static, self.reference, total_temperature=self.total_temperature), static

    def drag(self, window: WakeWindow) -> dict[str, float]:
        """Drag per unit span by every method, N/m."""
        total, static = self.pressures(window)
        weights = window_weights(self.z, window.lower, window.upper)
        options = {"weights": weights, "total_temperature": self.total_temperature}
        return {
            name: float(kernel(self.z, total, static, self.reference, **options)) for name, kernel in KERNELS.items()
        }

    def expected(self, total: Array, static: Array, weights: Array) -> dict[str, float]:
        """What each method reads above Jones for a loss so small that second order does not count, N/m."""
        ref, small = self.reference, 1e-3
        heat = None
        if self.total_temperature is not None:
            heat = ref.total_temperature + small * (self.total_temperature - ref.total_temperature)
        faint = ref.total_pressure + small * (total - ref.total_pressure)
        options = {"weights": weights, "total_temperature": heat}
        over = float(betz(self.z, faint, static, ref, **options) - jones(self.z, faint, static, ref, **options)) / small
        outer = float(momentum_outer_part(self.z, static, ref, weights=weights))
        return {"jones": 0.0, "betz": over, "momentum": over + outer}

    def reduce(self, window: WakeWindow) -> SectionDrag:
        total, static = self.pressures(window)
        weights = window_weights(self.z, window.lower, window.upper)
        swept = [self.drag(window.scaled(width, self.z)) for width in SWEEP]
        inside = (self.z >= window.lower) & (self.z <= window.upper)
        loss = self.reference.total_pressure - total
        outside = window_weights(self.z, -math.inf, math.inf) - weights
        span = float(outside.sum())
        return SectionDrag(
            window=window,
            **self.drag(window),
            expected_difference=MappingProxyType(self.expected(total, static, weights)),
            sweep=MappingProxyType(
                {name: (min(v[name] for v in swept), max(v[name] for v in swept)) for name in KERNELS},
            ),
            edge_static=self.edge_static,
            coordinate=self.z,
            total_pressure=total,
            static_pressure=static,
            stalled_points=int(np.count_nonzero(inside & (total < np.maximum(static, self.reference.static_pressure)))),
            outer_loss=float(outside @ loss) / span if span > 0.0 else math.nan,
        )
