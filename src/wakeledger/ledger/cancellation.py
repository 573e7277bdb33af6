"""The difference of two ledgers' contributions: errors that both have in common cancel as far as they act alike."""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.confidence.components import MODEL_DRAWS, NUMERICAL, Component, half_width
from wakeledger.confidence.point_errors import PointErrors
from wakeledger.confidence.sources import spread
from wakeledger.core.errors import InputError
from wakeledger.core.grid import Array
from wakeledger.ledger.contributions import Contributions

#: What the budget of an increment calls the errors that are not followed one by one.
SCATTER = "random errors and interaction"


@dataclass(frozen=True)
class Cancelled:
    """One source that both ledgers share; arrays of shape (q, m), over the quantities and the rows.

    Attributes
    ----------
    shared_id : str
        The identity.
    source_a, source_b : str
        What the two ledgers call it.
    in_a, in_b, left : ndarray
        Standard uncertainty from it in A, in B, and in the difference.
    """

    shared_id: str
    source_a: str
    source_b: str
    in_a: Array
    in_b: Array
    left: Array


@dataclass(frozen=True)
class Difference:
    """Contributions to B - A.

    Attributes
    ----------
    rows : tuple of str
        The rows.
    components : tuple of Component
        Independent errors of the difference; the source's name says whose it is.
    groups : tuple of hashable
        Which source each belongs to.
    scatters : tuple of (str, ndarray, ndarray)
        For each ledger what it is, its covariance (q, m, m) and its degrees of freedom (q, m).
    cancelled : tuple of Cancelled
        The sources that both share.
    points : tuple of PointErrors
        Independent errors of points or rows.
    unlike : tuple of (str, str, str, str)
        Shared identity, the two ledgers' sources, and why their errors of points or rows are not the same ones.
    """

    rows: tuple[str, ...]
    components: tuple[Component, ...]
    groups: tuple[Hashable, ...]
    scatters: tuple[tuple[str, Array, Array], ...]
    cancelled: tuple[Cancelled, ...]
    points: tuple[PointErrors, ...] = ()
    unlike: tuple[tuple[str, str, str, str], ...] = ()

    @property
    def covariance(self) -> Array:
        """Covariance of the differences, shape (q, m, m)."""
        total = np.sum([covariance for _, covariance, _ in self.scatters], axis=0)
        known = np.full(total.shape[:2], math.inf)
        return Contributions(self.rows, self.components, total, known, self.points).covariance

    @property
    def by_source(self) -> dict[str, Array]:
        """Variance of each difference by source, shape (q, m) each."""
        found: dict[str, Array] = {}
        for one in self.components:
            found[one.source] = found.get(one.source, 0.0) + one.variance
        for each in self.points:
            found[each.source] = found.get(each.source, 0.0) + each.variance
        for name, covariance, _ in self.scatters:
            found[name] = np.einsum("qrr->qr", covariance).copy()
        return found

    @property
    def degrees_of_freedom(self) -> Array:
        """Effective degrees of freedom by Welch and Satterthwaite (GUM G.2b), shape (q, m)."""
        variances: dict[Hashable, Array] = {}
        freedom: dict[Hashable, float] = {}
        for one, group in zip(self.components, self.groups, strict=True):
            variances[group] = variances.get(group, 0.0) + one.variance
            freedom[group] = one.degrees_of_freedom
        for each in self.points:
            variances[each.source] = variances.get(each.source, 0.0) + each.variance
            freedom[each.source] = each.degrees_of_freedom
        total = np.einsum("qrr->qr", self.covariance)
        loss = np.zeros(total.shape)
        for group, variance in variances.items():
            loss = loss + variance**2 / freedom[group]
        for _, covariance, nu in self.scatters:
            loss = loss + np.einsum("qrr->qr", covariance) ** 2 / nu
        result: Array = np.divide(total**2, loss, out=np.full(total.shape, math.inf), where=loss > 0)
        return result

    def half_width(self, *, draws: int = MODEL_DRAWS) -> Array:
        """Half the length of the 95 % interval of each difference, shape (q, m), from so many draws of the errors.

        What the errors of many points do together is normal, with one doubt about their size.
        """
        scatters: list[tuple[Array, Array | float]] = [
            (np.sqrt(np.einsum("qrr->qr", covariance)), nu) for _, covariance, nu in self.scatters
        ]
        for one in self.points:
            nu = one.degrees_of_freedom if one.distribution == "normal" else math.inf
            scatters.append((np.sqrt(one.variance) / spread("normal", nu), nu))
        return half_width(self.components, self.groups, scatters, draws=draws)


def opaque(rows: Sequence[str], uncertainty: Array, degrees_of_freedom: Array) -> Contributions:
    """Contributions of a ledger of which only the totals are known: nothing in it can cancel.

    Parameters
    ----------
    rows : sequence of str
        The rows.
    uncertainty, degrees_of_freedom : ndarray, shape (q, m)
        Of the quantities.

    Returns
    -------
    Contributions
    """
    scatter = np.zeros((len(uncertainty), len(rows), len(rows)))
    diagonal = np.arange(len(rows))
    scatter[:, diagonal, diagonal] = uncertainty**2
    return Contributions(tuple(rows), (), scatter, degrees_of_freedom)


def subtract(a: Contributions, b: Contributions) -> Difference:
    """Contributions to B - A.

    Parameters
    ----------
    a, b : Contributions
        Of the same rows and quantities.

    Returns
    -------
    Difference

    Raises
    ------
    InputError
        If both have an error in common, but not with the same distribution or degrees of freedom.

    Notes
    -----
    Errors with the same shared identity, input and number are one error ε: it contributes (a_B - a_A) ε +
    (b_B - b_A)(ε² - 1), with the signed effects a and b of first and second order in each ledger. All others are
    independent and contribute their own effect. Errors of points or rows with the same identity and input are the same
    where the points are: as many, at the same places, in the same rows. They then differ error by error.
    """
    own_a, own_b = _by_key(a), _by_key(b)
    components: list[Component] = []
    groups: list[Hashable] = []
    for key, one in own_b.items():
        other = own_a.get(key)
        if other is None:
            continue
        if (one.distribution, one.degrees_of_freedom) != (other.distribution, other.degrees_of_freedom):
            raise InputError(
                f"shared_id {key[0]!r} has a {other.distribution} distribution with {other.degrees_of_freedom:g} "
                f"degrees of freedom in A, and a {one.distribution} one with {one.degrees_of_freedom:g} in B",
                remedy="one error has one distribution; correct a survey file, or give two identities",
            )
        name = one.source if one.source == other.source else f"{other.source} / {one.source}"
        components.append(
            replace(one, source=f"{name} (left)", linear=one.linear - other.linear, curved=one.curved - other.curved)
        )
        groups.append(_shared_group(one))
    common = set(own_a) & set(own_b)
    for side, given, own in (("A", a, own_a), ("B", b, own_b)):
        alone = [one for one in given.components if one.key is None or one.kind == NUMERICAL]
        for one in (*(own[key] for key in own if key not in common), *alone):
            components.append(replace(one, source=f"{one.source} ({side})"))
            groups.append(_shared_group(one) if one.shared_id else (side, one.kind, one.source))
    scatters = tuple(
        (f"{SCATTER} ({side})", given.scatter, given.scatter_degrees_of_freedom) for side, given in (("A", a), ("B", b))
    )
    points, cancelled, unlike = _subtracted_points(a.points, b.points)
    return Difference(
        a.rows,
        tuple(components),
        tuple(groups),
        scatters,
        (*_cancelled(own_a, own_b), *cancelled),
        points,
        unlike,
    )


def together(points: Iterable[PointErrors]) -> dict[tuple[str, str], PointErrors]:
    """Errors of points by what tells them; those that come twice in one ledger are one error.

    Parameters
    ----------
    points : iterable of PointErrors
        Of one ledger.

    Returns
    -------
    dict
    """
    found: dict[tuple[str, str], PointErrors] = {}
    for one in points:
        twin = found.get(one.key)
        found[one.key] = one if twin is None else replace(twin, effects=twin.effects + one.effects)
    return found


def _subtracted_points(
    a: Sequence[PointErrors], b: Sequence[PointErrors]
) -> tuple[tuple[PointErrors, ...], tuple[Cancelled, ...], tuple[tuple[str, str, str, str], ...]]:
    """Errors of points of B - A, those that cancel source by source, and those that are not the same and why."""
    own_a, own_b = together(a), together(b)
    left: list[PointErrors] = []
    unlike: list[tuple[str, str, str, str]] = []
    sums: dict[tuple[str, str, str], Array] = {}
    for key, one in own_b.items():
        other = own_a.get(key)
        if other is None:
            continue
        why = other.unlike(one)
        named = (key[0], other.source, one.source)
        if why is not None:
            unlike.append((*named, why))
            continue
        name = one.source if one.source == other.source else f"{other.source} / {one.source}"
        rest = replace(one, source=f"{name} (left)", effects=one.effects - other.effects)
        left.append(rest)
        sums[named] = sums.get(named, 0.0) + np.stack([other.variance, one.variance, rest.variance])
    apart = {key for key in own_a if key not in own_b or own_a[key].unlike(own_b[key]) is not None}
    for side, own, rest_of in (("A", own_a, apart), ("B", own_b, apart | (set(own_b) - set(own_a)))):
        left += [replace(one, source=f"{one.source} ({side})") for key, one in own.items() if key in rest_of]
    cancelled = tuple(Cancelled(*named, *np.sqrt(total)) for named, total in sums.items())
    return tuple(left), cancelled, tuple(dict.fromkeys(unlike))


def _by_key(given: Contributions) -> dict[tuple[str, str, int], Component]:
    """Shared errors by what tells them; those that come twice in one ledger are one error."""
    found: dict[tuple[str, str, int], Component] = {}
    for one in given.components:
        if one.key is None or one.kind == NUMERICAL:
            continue
        twin = found.get(one.key)
        found[one.key] = (
            one if twin is None else replace(twin, linear=twin.linear + one.linear, curved=twin.curved + one.curved)
        )
    return found


def _shared_group(one: Component) -> Hashable:
    """Errors of one instrument whose sizes were assessed together."""
    return "shared", one.shared_id, one.distribution, one.degrees_of_freedom


def _cancelled(
    a: dict[tuple[str, str, int], Component], b: dict[tuple[str, str, int], Component]
) -> tuple[Cancelled, ...]:
    """What the shared sources came to, source by source; errors that only one ledger has are among what is left."""
    found = []
    pairs = dict.fromkeys((key[0], a[key].source, b[key].source) for key in b if key in a)
    for identity, source_a, source_b in pairs:
        common = [
            key for key in b if key in a and (key[0], a[key].source, b[key].source) == (identity, source_a, source_b)
        ]
        alone = [key for key in a if key not in b and (key[0], a[key].source) == (identity, source_a)]
        alone += [key for key in b if key not in a and (key[0], b[key].source) == (identity, source_b)]
        one = b[common[0]]
        nothing = replace(one, linear=0 * one.linear, curved=0 * one.curved)
        sums = np.zeros((3, *one.linear.shape))
        for key in (*common, *alone):
            x, y = a.get(key, nothing), b.get(key, nothing)
            sums[0] += x.variance
            sums[1] += y.variance
            sums[2] += replace(y, linear=y.linear - x.linear, curved=y.curved - x.curved).variance
        found.append(Cancelled(identity, source_a, source_b, *np.sqrt(sums)))
    return tuple(found)
