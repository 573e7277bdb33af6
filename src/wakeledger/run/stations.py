"""Planes at several stations of one survey, each reduced by itself, made into one set of rows.

The induced and the profile drag are fitted together: their sum is constant, and trailing vortices that diffuse turn one
into the other (`wakeledger.physics.methods.station_fit`). Where that trend is resolved the rows are those at the
trailing edge, else means weighted with the covariance of the planes; all other rows are such means. An error of the
survey is one error on all planes, the noise of each plane is its own, and what a numerical choice is worth is half
alike on all planes: the choice is the same, the flow it acts on is not.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np

from wakeledger.confidence.components import NUMERICAL, Component
from wakeledger.confidence.point_errors import PointErrors
from wakeledger.confidence.weighted_mean import weighted_mean
from wakeledger.core.errors import SurveyError
from wakeledger.core.grid import Array
from wakeledger.ledger.cancellation import SCATTER, Difference
from wakeledger.ledger.contributions import PLAIN, Contributions
from wakeledger.ledger.increment import ordered_budget
from wakeledger.ledger.ledger import Combined, Ledger
from wakeledger.ledger.rows import Row
from wakeledger.physics.methods.station_fit import StationFit, station_fit
from wakeledger.run import tables
from wakeledger.run.assembly import comparisons, require_rows
from wakeledger.run.chain.outputs import MOMENTS, ROWS
from wakeledger.run.chain.places import sampled_mask
from wakeledger.run.chain.reduction import Variation
from wakeledger.run.gridded import grid_survey
from wakeledger.run.ledgers.increment import contributions_of
from wakeledger.run.load import SurveyInput
from wakeledger.run.worst_checks import worst_checks
from wakeledger.stream.reference import Reference

#: What the budget calls the doubt about the trend along the stations.
TREND = "trend along the stations"
#: Vortices below this share of the strongest one's circulation decay without mattering.
_FAINT = 0.1
#: Share of a numerical term's variance that is common to all planes.
_ALIKE = 0.5
_DRAGS = ("induced_drag", "profile_drag", "total_drag")
#: Rows that add up to the total drag.
_SUMMED = ("profile_drag", "induced_drag", "wave_drag", "residual_drag", "total_drag")


def reduce_stations(survey: SurveyInput, reduce_one: Callable[[SurveyInput], Ledger], *, command: str) -> Ledger:
    """Reduce every plane of a survey, and make one ledger of them.

    Parameters
    ----------
    survey : SurveyInput
        With the survey of each plane in `stations`.
    reduce_one : callable
        Reduces the survey of one plane.
    command : str
        The command line, for the archive.

    Returns
    -------
    Ledger

    Raises
    ------
    InputError
        If two planes stand at one station, or a plane cannot be reduced.
    """
    file = survey.survey
    stations = [one.survey.plane.station for one in survey.stations]
    for k, station in enumerate(stations):
        if station in stations[:k]:
            raise SurveyError(
                f"two planes stand at {station:g} m",
                file=file.path,
                place=f"[[plane]] {k + 1} station",
                remedy="give planes at different stations; repeats of one are combined with `wakeledger repeats`",
            )
    ledgers = [reduce_one(one) for one in _with_common_core(survey.stations)]
    names = [row.name for row in ledgers[0].rows if all(_has(one, row.name) for one in ledgers)]
    require_rows(file, names)
    known = [name for name in names if all(math.isfinite(one.row(name).standard_uncertainty) for one in ledgers)]
    values = np.array([[one.row(name).value for name in names] for one in ledgers])
    own = {one.name for one in file.uncertainty.source if one.effect != "systematic"}
    parts = [_split(contributions_of(one, known), number, own) for number, one in enumerate(ledgers)]
    joint = _joint_covariance(parts, known, names)
    grounded = file.boundary is not None and file.boundary.reflection == "z"
    weights, combined_values, fit = _combine(
        ledgers, stations, names, values, joint, file.reference.resolve(), above_ground=grounded
    )
    of_known = np.array([names.index(name) for name in known], dtype=int)
    # A plane that does not know a quantity leaves it unknown.
    least = min(len(part.scatter) for part in parts)
    parts = [part.of(known, quantities=least) for part in parts]
    whole = _contributions(parts, known, weights[of_known][:, :, of_known], fit, combined_values[of_known])
    rows = _rows(ledgers, names, known, weights, combined_values, whole)
    covariance = np.full((len(names), len(names)), np.nan)
    if known:
        covariance[np.ix_(of_known, of_known)] = whole.covariance[0]
    first = ledgers[0]
    q = file.reference.resolve().dynamic_pressure
    area = math.nan if file.model is None else file.model.reference_area
    span = math.nan if file.model is None or file.model.span is None else file.model.span
    scales = dict.fromkeys(ROWS, q * area) | dict.fromkeys(MOMENTS, q * area * span)
    return replace(
        first,
        rows=rows,
        covariance=covariance,
        estimates=(),
        comparisons=comparisons(file, rows, scales),
        budget=ordered_budget(known, {name: variance[0] for name, variance in whole.by_source.items()})
        if known
        else (),
        checks=worst_checks([one.checks for one in ledgers], stations),
        notes=(*_notes(ledgers, stations, fit, first), *_common_notes(ledgers)),
        survey_text=file.text,
        contributions=_as_contributions(whole) if known else None,
        tunnel=(),
        stations=tuple(ledgers),
        combined=_record(fit, stations),
        provenance=tables.provenance(command),
    )


def _with_common_core(stations: Sequence[SurveyInput]) -> Sequence[SurveyInput]:
    """Computed planes with one wake region for all of them: where any has its wake.

    With regions of their own the sum of the drags scatters along the stations by what each region leaves out of the
    weak, broad loss about a computed wake.
    """
    if not all(one.computed for one in stations):
        return stations
    found = []
    for one in stations:
        gridded = grid_survey(one)
        core = gridded.chain.reduce(vary=Variation(grow_factor=0.0), estimates=False).region.mask
        found.append((gridded.chain.gridding.grid, core))
    return [
        replace(one, core=(grid, np.any([sampled_mask(core, other, grid) for other, core in found], axis=0)))
        for one, (grid, _) in zip(stations, found, strict=True)
    ]


def _has(ledger: Ledger, name: str) -> bool:
    return any(row.name == name for row in ledger.rows)


def _key(one: Component) -> tuple[str, str, str, int]:
    """What tells the same error on another plane of the survey."""
    return one.kind, one.source, one.input, one.number


def _split(part: Contributions, number: int, own: Collection[str]) -> Contributions:
    """The same with every numerical term as one that all planes share and one of this plane's own.

    `own` are sources whose errors change from point to point or row to row: another plane has others.
    """
    found: list[Component] = []
    for one in part.components:
        # A row without a coefficient has no effect on one.
        one = replace(one, linear=np.nan_to_num(one.linear), curved=np.nan_to_num(one.curved))
        if one.kind != NUMERICAL:
            # An error with an identity that is followed is the same one everywhere.
            apart = one.source in own and one.shared_id is None
            found.append(replace(one, input=f"{one.input} of plane {number + 1}") if apart else one)
            continue
        found.append(one.times(math.sqrt(_ALIKE)))
        found.append(replace(one.times(math.sqrt(1 - _ALIKE)), number=number + 1))
    scatter = np.nan_to_num(part.scatter)
    freedom = np.where(np.isfinite(part.scatter_degrees_of_freedom), part.scatter_degrees_of_freedom, math.inf)
    # Another plane has other points, whatever their identity.
    points = tuple(
        replace(one, input=f"{one.input} of plane {number + 1}", effects=np.nan_to_num(one.effects))
        for one in part.points
    )
    return Contributions(part.rows, tuple(found), scatter, freedom, points)


def _joint_covariance(parts: Sequence[Contributions], known: Sequence[str], names: Sequence[str]) -> Array:
    """Covariance of every row of every plane with every other, shape (k, m, k, m); NaN for unknown rows."""
    count, m = len(parts), len(known)
    found = np.zeros((count, m, count, m))
    shared: dict[tuple[str, str, str, int], Array] = {}
    for k, part in enumerate(parts):
        found[k, :, k, :] += part.scatter[0]
        for each in part.points:
            found[k, :, k, :] += each.covariance[0]
        diagonal = np.arange(m)
        for one in part.components:
            found[k, diagonal, k, diagonal] += one.variance[0] - one.linear[0] ** 2
            shared.setdefault(_key(one), np.zeros((count, m)))[k] = one.linear[0]
    for effects in shared.values():
        found += effects[:, :, None, None] * effects[None, None]
    whole = np.full((count, len(names), count, len(names)), np.nan)
    at = [names.index(name) for name in known]
    whole[np.ix_(range(count), at, range(count), at)] = found
    return whole


@dataclass(frozen=True)
class _Fit:
    """The drags of all stations together, and what a linear combination of them leaves unexplained."""

    result: StationFit | None
    scatter: dict[str, float]
    reason: str


def _combine(
    ledgers: Sequence[Ledger],
    stations: Sequence[float],
    names: Sequence[str],
    values: Array,
    joint: Array,
    reference: Reference,
    *,
    above_ground: bool,
) -> tuple[Array, Array, _Fit]:
    """Weights of every row of every plane in each combined row, (m, k, m), and the combined values, (m,)."""
    count, m = values.shape
    weights = np.zeros((m, count, m))
    combined = np.full(m, np.nan)
    scatter: dict[str, float] = {}
    for r, name in enumerate(names):
        covariance = joint[:, r, :, r]
        # Rows that add up have the weights of their sum.
        leader = names.index("total_drag") if name in _SUMMED and "total_drag" in names else r
        share = _weights(joint[:, leader, :, leader])
        weights[r, :, r] = share
        combined[r] = share @ values[:, r]
        if np.isfinite(covariance).all() and covariance.diagonal().min() > 0:
            # Planes that scatter more than they may say so themselves.
            mean = weighted_mean(values[:, r], covariance)
            if not mean.consistent:
                between = float(share @ (values[:, r] - combined[r]) ** 2) * count / (count - 1)
                scatter[name] = math.sqrt(between / count)
    fit = _Fit(None, scatter, "the planes have no common induced and total drag, or their uncertainty is unknown")
    if all(name in names for name in ("induced_drag", "total_drag")):
        i, t = names.index("induced_drag"), names.index("total_drag")
        both = joint[:, [i, t]][:, :, :, [i, t]]
        fit = _fitted(ledgers, stations, values[:, i], values[:, t], both, reference, above_ground=above_ground)
        fit = replace(fit, scatter=scatter)
        if fit.result is not None:
            _follow(fit.result, names, values, weights, combined, joint)
    return weights, combined, fit


def _fitted(
    ledgers: Sequence[Ledger],
    stations: Sequence[float],
    induced: Array,
    total: Array,
    covariance: Array,
    reference: Reference,
    *,
    above_ground: bool,
) -> _Fit:
    count = len(stations)
    if not np.isfinite(covariance).all():
        return _Fit(None, {}, "the uncertainty of the planes' drags is unknown: plain means are given")
    if min(stations) <= 0:
        return _Fit(None, {}, "a plane stands at or ahead of the trailing edge: no trend is followed")
    # (induced, total) of each plane to all induced and then all profile drags.
    turn = np.zeros((2 * count, count, 2))
    for k in range(count):
        turn[k, k, 0] = 1.0
        turn[count + k, k] = (-1.0, 1.0)
    flat = turn.reshape(2 * count, 2 * count)
    both = flat @ covariance.reshape(2 * count, 2 * count) @ flat.T
    circulation, core = _vortices(ledgers[int(np.argmin(stations))], above_ground=above_ground)
    if circulation.size == 0:
        return _Fit(None, {}, "no vortex was found whose decay could be followed: means are given")
    result = station_fit(
        np.asarray(stations), induced, total - induced, both, circulation=circulation, core=core, reference=reference
    )
    return _Fit(result, {}, result.reason)


def _vortices(ledger: Ledger, *, above_ground: bool) -> tuple[Array, Array]:
    """Circulation and core length of the vortices that count on one plane; below ground there are images only."""
    table = ledger.vortices
    if table is None:
        return np.zeros(0), np.zeros(0)
    circulation, core = table["circulation"].values, table["core_length"].values
    counts = (np.abs(circulation) >= _FAINT * np.abs(circulation).max()) & (core > 0)
    if above_ground:
        counts &= table["z"].values > 0
    return circulation[counts], core[counts]


def _follow(
    fit: StationFit, names: Sequence[str], values: Array, weights: Array, combined: Array, joint: Array
) -> None:
    """Put the fitted drags, and their linear dependence on the planes' rows, in place of plain means."""
    count = values.shape[0]
    i, t = names.index("induced_drag"), names.index("total_drag")
    at = [(k, row) for row in (i, t) for k in range(count)]
    covariance = np.array([[joint[a, p, b, q] for b, q in at] for a, p in at])
    # D_i(x) = D_i0 − S(x) and D(x) = D: with the decay S given, D_i0 and D are linear in the planes' rows.
    one = np.ones(count)
    design = np.block([[one[:, None], 0 * one[:, None]], [0 * one[:, None], one[:, None]]])
    inverse = np.linalg.pinv(covariance, hermitian=True)
    share = np.linalg.solve(design.T @ inverse @ design, design.T @ inverse)
    for row, line, value in ((i, share[0], fit.induced_drag), (t, share[1], fit.total_drag)):
        weights[row] = 0.0
        weights[row, :, i], weights[row, :, t] = line[:count], line[count:]
        combined[row] = value
    others = [names.index(name) for name in ("wave_drag", "residual_drag") if name in names]
    # The fit knows two drags: what is neither induced nor of another row is profile drag.
    if "profile_drag" in names:
        p = names.index("profile_drag")
        weights[p] = weights[t] - weights[i] - sum((weights[other] for other in others), np.zeros_like(weights[p]))
        combined[p] = combined[t] - combined[i] - sum(combined[other] for other in others)
    if "induced_drag_free_air" in names:
        # What the walls add does not decay: it is a mean, and the vortices' decay that of the induced drag.
        f = names.index("induced_drag_free_air")
        share = weights[f, :, f].copy()
        weights[f] = weights[i]
        weights[f, :, f] += share
        weights[f, :, i] -= share
        combined[f] = combined[i] + share @ (values[:, f] - values[:, i])
    if {"span_efficiency", "lift"} <= set(names) and combined[i] > 0:
        # e = L²/(πqb²D_i), of the combined lift and drag; an error of q is that of the planes' own values.
        e, lift = names.index("span_efficiency"), names.index("lift")
        d = names.index(_efficiency_drag(names))
        constant = float(np.mean(values[:, e] * values[:, d] / values[:, lift] ** 2))
        combined[e] = constant * combined[lift] ** 2 / combined[d]
        share = weights[e, :, e].copy()
        weights[e] = 2 * combined[e] / combined[lift] * weights[lift] - combined[e] / combined[d] * weights[d]
        weights[e, :, e] += share
        weights[e, :, lift] -= 2 * combined[e] / combined[lift] * share
        weights[e, :, d] += combined[e] / combined[d] * share


def _efficiency_drag(names: Sequence[str]) -> str:
    """The induced drag that the span efficiency is of: between walls that of free air."""
    return "induced_drag_free_air" if "induced_drag_free_air" in names else "induced_drag"


def _contributions(
    parts: Sequence[Contributions], known: Sequence[str], weights: Array, fit: _Fit, combined: Array
) -> Difference:
    """Contributions to the combined rows, `weights` of shape (m, k, m)."""
    m, q = len(known), len(parts[0].scatter)
    components: dict[tuple[str, str, str, int], Component] = {}
    points: list[PointErrors] = []
    scatter = np.zeros((q, m, m))
    freedom = np.full((q, m), math.inf)
    for k, part in enumerate(parts):
        share = weights[:, k]
        points += [replace(one, effects=share @ one.effects) for one in part.points]
        scatter = scatter + share @ part.scatter @ share.T
        freedom = np.minimum(freedom, part.scatter_degrees_of_freedom)
        for one in part.components:
            mine = replace(one, linear=one.linear @ share.T, curved=one.curved @ share.T)
            twin = components.get(_key(one))
            if twin is not None:
                mine = replace(twin, linear=twin.linear + mine.linear, curved=twin.curved + mine.curved)
            components[_key(one)] = mine
    found = list(components.values())
    groups = [("shared", one.shared_id) if one.shared_id else (one.kind, one.source) for one in found]
    whole = Difference(
        tuple(known), tuple(found), tuple(groups), ((SCATTER, scatter, freedom),), (), points=tuple(points)
    )
    trend = _trend(whole, known, fit, combined)
    if trend is None:
        return whole
    return replace(whole, components=(*found, trend), groups=(*groups, (NUMERICAL, TREND)))


def _trend(whole: Difference, known: Sequence[str], fit: _Fit, combined: Array) -> Component | None:
    """What speaks against the planes' own uncertainties: a decay that is in doubt, and scatter between the planes."""
    own = np.einsum("qrr->qr", whole.covariance)
    excess = {name: size for name, size in fit.scatter.items() if name in known}
    signs = dict.fromkeys(known, 1.0)
    if fit.result is not None and set(_DRAGS) <= set(known):
        # A decay larger than thought raises the induced drag at the trailing edge and lowers the profile drag.
        signs["profile_drag"] = -1.0
        for name, size in zip(_DRAGS, fit.result.standard_uncertainty, strict=True):
            excess[name] = math.sqrt(max(float(size) ** 2 - float(own[0, known.index(name)]), 0.0))
        of_induced = excess["induced_drag"]
        if "induced_drag_free_air" in known:
            excess["induced_drag_free_air"] = of_induced
        if {"span_efficiency", "lift"} <= set(known):
            e, drag = (float(combined[known.index(one)]) for one in ("span_efficiency", _efficiency_drag(known)))
            moment = excess.get("lift", 0.0) / float(combined[known.index("lift")])
            excess["span_efficiency"] = e * math.hypot(of_induced / drag, 2 * moment)
            signs["span_efficiency"] = -1.0
    if not any(excess.values()):
        return None
    linear = np.zeros(own.shape)
    for name, size in excess.items():
        r = known.index(name)
        linear[0, r] = signs[name] * size
        if own[0, r] > 0:
            linear[1:, r] = linear[0, r] * np.sqrt(own[1:, r] / own[0, r])
    return Component(TREND, NUMERICAL, linear, np.zeros_like(linear))


def _weights(covariance: Array) -> Array:
    """Weights of the planes in a mean, none of them negative, shape (k,).

    The best linear mean of values that err alike may lie outside them all, where their covariance is not known as well
    as that takes.
    """
    count = covariance.shape[0]
    if not np.isfinite(covariance).all() or not np.linalg.eigvalsh(covariance)[0] > 0:
        return np.full(count, 1 / count)
    from scipy.optimize import nnls

    # Least wᵀVw with Σw = 1, w ≥ 0: the sum as one more, heavy, equation.
    factor = np.linalg.cholesky(covariance / np.trace(covariance)).T
    found, _ = nnls(np.vstack([factor, np.full(count, 1e4)]), np.append(np.zeros(count), 1e4))
    weights: Array = found / found.sum()
    return weights


def _as_contributions(whole: Difference) -> Contributions:
    _, scatter, freedom = whole.scatters[0]
    return Contributions(whole.rows, whole.components, scatter, freedom, whole.points)


def _rows(
    ledgers: Sequence[Ledger],
    names: Sequence[str],
    known: Sequence[str],
    weights: Array,
    combined: Array,
    whole: Difference,
) -> tuple[Row, ...]:
    u = np.sqrt(np.einsum("qrr->qr", whole.covariance)) if known else np.zeros((2, 0))
    half, freedom = (whole.half_width(), whole.degrees_of_freedom) if known else (u, u)
    found = []
    for r, name in enumerate(names):
        like = ledgers[0].row(name)
        scale = like.coefficient / like.value if like.value and math.isfinite(like.coefficient) else math.nan
        value = float(combined[r])
        corrected = [one.row(name).coefficient_corrected for one in ledgers]
        known_corrected = [each for each in corrected if each is not None]
        on_corrected = None
        if len(known_corrected) == len(ledgers) and like.coefficient_corrected is not None and like.value:
            on_corrected = value * like.coefficient_corrected / like.value
        if name not in known:
            reason = "; ".join(
                f"unknown at {one.station:g} m: {one.row(name).reason}"
                for one in ledgers
                if not math.isfinite(one.row(name).standard_uncertainty)
            )
            nan = (math.nan,) * 4
            found.append(Row(name, value, like.unit, *nan, value * scale, math.nan, on_corrected, reason=reason))
            continue
        k = known.index(name)
        size, width = float(u[0, k]), float(half[0, k])
        found.append(
            Row(
                name,
                value,
                like.unit,
                standard_uncertainty=size,
                expanded_uncertainty=width,
                coverage_factor=width / size if size > 0 else math.nan,
                degrees_of_freedom=float(freedom[0, k]),
                coefficient=value * scale,
                coefficient_standard_uncertainty=float(u[1, k]) if math.isfinite(scale) else math.nan,
                coefficient_corrected=on_corrected,
                coefficient_corrected_standard_uncertainty=_of_corrected(u[:, k], on_corrected),
            )
        )
    return tuple(found)


def _of_corrected(sizes: Array, corrected: float | None) -> float | None:
    """Standard uncertainty of a combined corrected coefficient, where the planes know theirs."""
    if corrected is None or len(sizes) <= PLAIN or not sizes[PLAIN] > 0:
        return None
    return float(sizes[PLAIN])


def _record(fit: _Fit, stations: Sequence[float]) -> Combined:
    result = fit.result
    if result is None:
        nan = (math.nan,) * len(stations)
        return Combined("weighted_mean", fit.reason, math.nan, math.nan, math.nan, 0, nan, nan)
    return Combined(
        result.method,
        result.reason,
        result.diffusivity,
        result.diffusivity_uncertainty,
        result.chi_square,
        result.degrees_of_freedom,
        tuple(float(one) for one in result.decay),
        tuple(float(one) for one in result.decay_uncertainty),
    )


def _notes(ledgers: Sequence[Ledger], stations: Sequence[float], fit: _Fit, first: Ledger) -> list[str]:
    listed = ", ".join(f"{station:g} m" for station in stations)
    how = "weighted_mean" if fit.result is None else fit.result.method
    said = "the drags are those at the trailing edge" if how == "extrapolated" else "the rows are means of the planes"
    found = [f"Planes at {listed}: {said} ({fit.reason})."]
    result = fit.result
    if result is not None and np.any(result.decay > 0):
        row = first.row("induced_drag")
        scale = 1e4 * row.coefficient / row.value if row.value and math.isfinite(row.coefficient) else math.nan
        pieces = [
            f"{decay * scale:.2f} ± {2 * doubt * scale:.2f} counts by {station:g} m"
            if math.isfinite(scale)
            else f"{decay:.3g} ± {2 * doubt:.2g} N by {station:g} m"
            for station, decay, doubt in zip(stations, result.decay, result.decay_uncertainty, strict=True)
        ]
        added = "added back to the induced drag" if how == "extrapolated" else "not resolved, and in the uncertainty"
        found.append(f"Decay of the trailing vortices: {', '.join(pieces)} ({added}).")
    found.append("Estimates of other methods, and what was done to each plane, are in the ledger of each station.")
    return found


def _common_notes(ledgers: Sequence[Ledger]) -> list[str]:
    """Sentences that hold for every plane."""
    return [note for note in ledgers[0].notes if all(note in other.notes for other in ledgers[1:])]
