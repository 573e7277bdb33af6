"""A map of a survey in characters: which places were measured, lost, flagged or repeated, and where the wake is."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

#: What each character of a map stands for, the least important first: of several in one place the last one shows.
SYMBOLS: Mapping[str, str] = MappingProxyType(
    {
        " ": "not covered",
        ".": "measured",
        "#": "measured, wake region",
        "=": "averaged repeats",
        "o": "missing",
        "!": "flagged or out of range",
    }
)
_UNCOVERED, _MEASURED, _WAKE, _REPEATED, _MISSING, _FLAGGED = range(len(SYMBOLS))
#: A character is about twice as tall as it is wide.
_TALL = 2.0
#: Fewest and most lines of a drawn map.
_FEWEST_LINES, _MOST_LINES = 5, 36


@dataclass(frozen=True)
class PlaneMap:
    """The places of a plane or of a line traverse, one character each.

    Attributes
    ----------
    rows : tuple of str
        Lines of the plane from the uppermost to the lowest, each from port to starboard as seen from behind
        (`SYMBOLS`); one string from the first place to the last one for a line traverse.
    y, z : (float, float)
        First and last place along each axis, m; 0 twice across a line traverse.
    """

    rows: tuple[str, ...]
    y: tuple[float, float]
    z: tuple[float, float]

    @property
    def is_line(self) -> bool:
        """Whether it is the map of a line traverse."""
        return len(self.rows) == 1

    def drawn(self, columns: int) -> PlaneMap:
        """The map in as few characters as a terminal has room for.

        Parameters
        ----------
        columns : int
            Most characters in a line.

        Returns
        -------
        PlaneMap
            In true proportions, as far as there are places. A lost, flagged or repeated place always shows; of the
            other places in one character, those that are more.
        """
        codes = self._codes()
        nz, ny = codes.shape
        width = min(ny, max(1, columns))
        if self.is_line:
            return PlaneMap(_rows(_condensed(codes, 1, width)), self.y, self.z)
        across, up = self.y[1] - self.y[0], self.z[1] - self.z[0]
        shape = up / across / _TALL if across > 0 else 1.0
        lines = round(width * shape)
        if lines > _MOST_LINES:
            lines, width = _MOST_LINES, max(1, min(width, round(_MOST_LINES / shape)))
        lines = min(max(lines, _FEWEST_LINES), nz)
        return PlaneMap(_rows(_condensed(codes, lines, width)), self.y, self.z)

    def _codes(self) -> NDArray[np.int8]:
        number = {symbol: k for k, symbol in enumerate(SYMBOLS)}
        return np.array([[number[symbol] for symbol in row] for row in self.rows], dtype=np.int8)


def plane_map(
    *,
    wake: NDArray[np.bool_],
    missing: NDArray[np.bool_],
    flagged: NDArray[np.bool_],
    repeated: NDArray[np.bool_],
    uncovered: NDArray[np.bool_],
    y: tuple[float, float],
    z: tuple[float, float],
) -> PlaneMap:
    """Draw a map.

    Parameters
    ----------
    wake, missing, flagged, repeated, uncovered : ndarray of bool, shape (nz, ny)
        What is known of each place, z upwards; shape (1, m) for a line traverse.
    y, z : (float, float)
        First and last place along each axis, m.

    Returns
    -------
    PlaneMap
    """
    codes = np.full(wake.shape, _MEASURED, dtype=np.int8)
    codes[wake] = _WAKE
    codes[uncovered] = _UNCOVERED
    codes[repeated] = _REPEATED
    codes[missing & ~uncovered] = _MISSING
    codes[flagged] = _FLAGGED
    return PlaneMap(_rows(codes[::-1]), y, z)


def _rows(codes: NDArray[np.int8]) -> tuple[str, ...]:
    symbols = "".join(SYMBOLS)
    return tuple("".join(symbols[code] for code in row) for row in codes)


def _condensed(codes: NDArray[np.int8], lines: int, columns: int) -> NDArray[np.int8]:
    """Codes of blocks of places."""
    nz, ny = codes.shape
    starts_z = (np.arange(lines) * nz) // lines
    starts_y = (np.arange(columns) * ny) // columns

    def summed(chosen: NDArray[np.bool_]) -> NDArray[np.int64]:
        rows = np.add.reduceat(chosen.astype(np.int64), starts_z, axis=0)
        return np.asarray(np.add.reduceat(rows, starts_y, axis=1))

    counts = [summed(codes == code) for code in (_UNCOVERED, _MEASURED, _WAKE)]
    found = np.argmax(np.stack(counts[::-1]), axis=0)
    result: NDArray[np.int8] = (_WAKE - found).astype(np.int8)
    for code in (_REPEATED, _MISSING, _FLAGGED):
        result[summed(codes == code) > 0] = code
    return result
