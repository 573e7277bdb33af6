"""Pressure coefficients of five- and seven-hole probes, with the hole numbers of this program.

Five holes: p1 centre; p2 port, p3 starboard; p4 lower, p5 upper. Seven holes: p1 centre, then counter-clockwise seen
from behind p2 top, p3 upper port, p4 lower port, p5 bottom, p6 lower starboard, p7 upper starboard. Both coefficients
of the centre sector grow with the angle: yaw towards starboard, pitch for upwash.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from wakeledger.core.grid import Array

#: Weight of the two coefficients against their denominator in the compressed plane, in the centre sector. Coefficients
#: of usual tips reach 2 to 4 at the edge of the range.
CENTRE_WEIGHT = 0.5
OUTER_WEIGHT = 0.5
#: By sector: the leading hole, the next one counter-clockwise seen from behind, and the next one clockwise.
_RING = tuple(np.array(ring) for ring in ((1, 1, 2, 3, 4, 5, 6), (2, 2, 3, 4, 5, 6, 1), (6, 6, 1, 2, 3, 4, 5)))
#: cos 60° √3 and the like of the least-squares plane through three opposite pairs.
_ROOT3 = float(np.sqrt(3.0))


@dataclass(frozen=True)
class Terms:
    """Numerators and denominator of a sector's coefficients, Pa.

    Attributes
    ----------
    first, second : ndarray, shape (...)
        Numerators. Centre sector: of the yaw and of the pitch coefficient. Outer sectors: of the cone coefficient
        C_theta and of the roll coefficient C_phi.
    denominator : ndarray, shape (...)
        P1 less the mean of the outer holes; in an outer sector the leading hole less the mean of its neighbours.
    lead : ndarray, shape (...)
        Pressure of the sector's leading hole.
    weight : float or ndarray
        Weight of the numerators in the compressed plane.
    """

    first: Array
    second: Array
    denominator: Array
    lead: Array
    weight: float | Array

    def compressed(self) -> tuple[Array, Array, Array]:
        """The coefficient plane compressed into a disc, and the pressure that scales with the stream.

        Returns
        -------
        x, y : ndarray, shape (...)
            k C / (1 + sqrt(1 + k² |C|²)), written so that it stays smooth where the denominator vanishes.
        scale : ndarray, shape (...)
            sqrt(D² + k² (a² + b²)), Pa: positive at every flow direction, unlike D.
        """
        first, second = self.weight * self.first, self.weight * self.second
        scale = np.sqrt(self.denominator * self.denominator + first * first + second * second)
        shrink = self.denominator + scale
        return first / shrink, second / shrink, scale


def leading_hole(holes: Array) -> NDArray[np.intp]:
    """Sector of each reading, 0 for the centre.

    Parameters
    ----------
    holes : ndarray, shape (5 or 7, ...)
        Hole pressures, Pa.

    Returns
    -------
    ndarray of int, shape (...)
        Five holes: 0. Seven holes: index of the hole with the highest pressure.
    """
    if holes.shape[0] == 5:
        return np.zeros(holes.shape[1:], dtype=np.intp)
    return np.asarray(np.argmax(holes, axis=0))


def sector_terms(holes: Array, lead: NDArray[np.intp]) -> Terms:
    """Numerators and denominators of the coefficients in the sector of each reading.

    Parameters
    ----------
    holes : ndarray, shape (5 or 7, ...)
        Hole pressures p1, p2, ..., Pa, against anything common.
    lead : ndarray of int, shape (...)
        Sector of each reading (`leading_hole`).

    Returns
    -------
    Terms

    Notes
    -----
    Five holes, Treaster & Yocum (1979): D = P1 - (P2+P3+P4+P5)/4, C_yaw = (P2-P3)/D, C_pitch = (P4-P5)/D. Seven
    holes, Gallington (1980), centre: D = P1 - mean(P2..P7), C_pitch = (2 A + B + C)/(3 D), C_yaw = (B - C)/(sqrt(3) D)
    with the opposite pairs A = P5 - P2, B = P4 - P7, C = P6 - P3; outer sector n with neighbours n+ and n-:
    D = Pn - (Pn+ + Pn-)/2, C_theta = (Pn - P1)/D, C_phi = (Pn+ - Pn-)/D.
    """
    if holes.shape[0] == 5:
        denominator = holes[0] - 0.25 * (holes[1] + holes[2] + holes[3] + holes[4])
        return Terms(holes[1] - holes[2], holes[3] - holes[4], denominator, holes[0], CENTRE_WEIGHT)
    centre = lead == 0
    if centre.all():
        return _seven_hole_centre(holes)
    flat = np.ascontiguousarray(holes).reshape(7, -1)
    place = np.arange(flat.shape[1]).reshape(lead.shape)
    peak, after, before = (flat.take(neighbour.take(lead) * flat.shape[1] + place) for neighbour in _RING)
    terms = Terms(peak - holes[0], after - before, peak - 0.5 * (after + before), peak, OUTER_WEIGHT)
    if not centre.any():
        return terms
    inner = _seven_hole_centre(holes)
    return Terms(
        np.where(centre, inner.first, terms.first),
        np.where(centre, inner.second, terms.second),
        np.where(centre, inner.denominator, terms.denominator),
        np.where(centre, inner.lead, terms.lead),
        np.where(centre, CENTRE_WEIGHT, OUTER_WEIGHT),
    )


def _seven_hole_centre(holes: Array) -> Terms:
    vertical, rising, falling = holes[4] - holes[1], holes[3] - holes[6], holes[5] - holes[2]
    denominator = holes[0] - (holes[1] + holes[2] + holes[3] + holes[4] + holes[5] + holes[6]) / 6.0
    pitch = (2.0 * vertical + rising + falling) / 3.0
    return Terms((rising - falling) / _ROOT3, pitch, denominator, holes[0], CENTRE_WEIGHT)


@dataclass(frozen=True)
class Coefficients:
    """The published coefficients of calibration points.

    Attributes
    ----------
    first, second : ndarray, shape (n,)
        C_yaw and C_pitch of the centre sector, C_theta and C_phi of an outer one.
    total : ndarray, shape (n,)
        (P_lead - Pt)/D.
    static : ndarray, shape (n,)
        Five holes: (mean of the outer holes - Ps)/D, Treaster & Yocum. Seven holes: C_q = D/(Pt - Ps), Gallington.
    sector : ndarray of int, shape (n,)
        0 for the centre, else the number of the leading hole less one.
    """

    first: Array
    second: Array
    total: Array
    static: Array
    sector: NDArray[np.intp]


def coefficients(holes: Array, total: Array, static: Array) -> Coefficients:
    """Coefficients of calibration points.

    Parameters
    ----------
    holes : ndarray, shape (5 or 7, n)
        Hole pressures, Pa.
    total, static : ndarray, shape (n,)
        Total and static pressure of the calibration stream, against the same as the holes, Pa.

    Returns
    -------
    Coefficients
    """
    lead = leading_hole(holes)
    terms = sector_terms(holes, lead)
    with np.errstate(divide="ignore", invalid="ignore"):
        if holes.shape[0] == 5:
            level = (holes[0] - terms.denominator - static) / terms.denominator
        else:
            level = terms.denominator / (total - static)
        return Coefficients(
            terms.first / terms.denominator,
            terms.second / terms.denominator,
            (terms.lead - total) / terms.denominator,
            level,
            lead,
        )
