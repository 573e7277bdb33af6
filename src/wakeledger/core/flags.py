"""Quality flags of the plane's cells, defined once and stored as CF flag masks."""

from __future__ import annotations

from enum import IntFlag

import numpy as np
from numpy.typing import NDArray


class Flag(IntFlag):
    """What is known of one cell of the plane; a cell without any flag was measured and used as it stands."""

    MISSING = 1
    """No usable measurement; the value is filled from its neighbours."""
    AVERAGED = 2
    """Mean of several points measured at the same place."""
    INTERPOLATED = 4
    """Interpolated from points that lie elsewhere (scattered or non-uniform positions)."""
    FAR_FROM_DATA = 8
    """Further from any measured point than the data's own spacing allows; not trusted."""
    OUT_OF_RANGE = 16
    """Outside the probe's calibrated range."""
    NON_PHYSICAL = 32
    """No real flow state (total pressure below static, no real velocity); treated as missing."""


def decode(flags: NDArray[np.integer]) -> dict[str, int]:
    """Count how many cells carry each flag.

    Parameters
    ----------
    flags : ndarray of int
        Flag values.

    Returns
    -------
    dict of str to int
        Number of cells by flag name in lower case; every flag is listed.

    Examples
    --------
    >>> decode(np.array([0, 1, 5]))["missing"]
    2
    """
    values = np.asarray(flags)
    return {str(flag.name).lower(): int(np.count_nonzero(values & flag.value)) for flag in Flag}


def cf_attributes() -> dict[str, object]:
    """Attributes that make a flag variable readable to CF tools.

    Returns
    -------
    dict
        ``flag_masks`` and ``flag_meanings``.
    """
    return {
        "flag_masks": np.array([flag.value for flag in Flag], dtype=np.int32),
        "flag_meanings": " ".join(str(flag.name).lower() for flag in Flag),
    }
