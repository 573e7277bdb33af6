"""A pitot tube: it reads the total pressure, and nothing of the flow's direction."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.flags import Flag
from wakeledger.core.grid import Array
from wakeledger.intake.state import State, Stream, point_state

#: Input that an error of a static pressure which no pitot measured itself is drawn for: a standard normal number.
STATIC_INPUT = "correction.static pressure"
_NO_ERRORS: Mapping[str, Array | float] = MappingProxyType({})


@dataclass(frozen=True)
class PitotReduction:
    """Flow states from total pressures, in the place of a probe's calibration.

    Attributes
    ----------
    measured_static : bool
        Whether each point has a ``static_pressure`` of its own.
    static_uncertainty : float
        Standard uncertainty of the stream's static pressure taken for that of the points, Pa.

    Notes
    -----
    The flow is taken to run along the x axis: the speed is right, and the crossflow, which is not known, counts with
    it. Whatever rests on the crossflow must not be read off such a state.
    """

    measured_static: bool = False
    static_uncertainty: float = 0.0

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the readings."""
        return ("p1", "static_pressure") if self.measured_static else ("p1",)

    def frozen_on(self, values: Mapping[str, Array], reference: Stream) -> PitotReduction:
        """Itself: a pitot has no range that points come and go from."""
        return self

    def flags(self, values: Mapping[str, Array], reference: Stream) -> NDArray[np.int32]:
        """MISSING where a reading has no value, shape (..., n)."""
        missing = np.zeros(np.shape(values["p1"]), dtype=bool)
        for name in ("p1", "static_pressure"):
            if name in values:
                missing |= np.isnan(values[name])
        return (missing * np.int32(Flag.MISSING)).astype(np.int32)

    def state(
        self,
        values: Mapping[str, Array],
        reference: Stream,
        errors: Mapping[str, Array | float] = _NO_ERRORS,
        *,
        rotation: Array | None = None,
    ) -> State:
        """Flow state at each point.

        Parameters
        ----------
        values : mapping of str to ndarray, shape (..., n)
            ``p1``, and ``static_pressure`` where it is known at the points, Pa, absolute or above the same zero as the
            reference's; ``density`` or ``total_temperature`` where they were measured.
        reference : Stream
            The undisturbed stream.
        errors : mapping of str to array_like, optional
            `STATIC_INPUT`, a standard normal number.
        rotation : ndarray, optional
            Not used: there is no direction that could be turned.

        Returns
        -------
        State
            u is the speed, v and w are zero.
        """
        total = np.asarray(values["p1"], dtype=float)
        static = values.get("static_pressure")
        if static is None:
            error = np.asarray(errors.get(STATIC_INPUT, 0.0)) * self.static_uncertainty
            static = np.broadcast_to(reference.static_pressure + error, total.shape)
        still = np.zeros(total.shape)
        channels = {"u": still + 1.0, "v": still, "w": still, "total_pressure": total, "static_pressure": static}
        channels |= {name: values[name] for name in ("density", "temperature", "total_temperature") if name in values}
        return point_state(channels, {}, reference, primary="total_pressure", axes=np.eye(3), rotation=np.eye(3))
