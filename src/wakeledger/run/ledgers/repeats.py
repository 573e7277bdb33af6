"""Repeats of one configuration combined into one ledger, with the scatter between the runs."""

from __future__ import annotations

import json
import math
from collections.abc import Collection, Sequence
from dataclasses import replace
from os import PathLike
from typing import TYPE_CHECKING

import numpy as np

from wakeledger.confidence.components import NUMERICAL, Component
from wakeledger.confidence.point_errors import PointErrors
from wakeledger.confidence.repeats import RepeatedMean, repeated_mean
from wakeledger.core.errors import DataError, InputError
from wakeledger.core.grid import Array
from wakeledger.core.points import Points
from wakeledger.ledger.archive import open_archive
from wakeledger.ledger.cancellation import SCATTER, Difference, together
from wakeledger.ledger.contributions import PLAIN, QUANTITIES, Contributions
from wakeledger.ledger.increment import ordered_budget
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.plane_mean import plane_mean
from wakeledger.ledger.rounding import significant
from wakeledger.ledger.rows import COUNT, Check, Row
from wakeledger.run import tables
from wakeledger.run.ledgers.increment import contributions_of, declared_surveys, refuse_conflicts
from wakeledger.run.ledgers.unlike import is_computed, unlike

if TYPE_CHECKING:
    import xarray as xr

#: What the budget calls the scatter between the runs.
BETWEEN = "scatter between the runs"
_WORST = ("fail", "warn", "pass", "not_applicable")
_LENGTHS = ("reference_area", "span", "mean_chord", "chord")


def combine(ledgers: Sequence[Ledger | str | PathLike[str]], *, command: str = "") -> Ledger:
    """Weighted mean of repeats of one configuration.

    Parameters
    ----------
    ledgers : sequence of Ledger or path
        Ledgers of single surveys, or their archives; at least two.
    command : str
        The command line, for the archive.

    Returns
    -------
    Ledger
        With a row for every row that all runs have, a mean plane, and ``repeats``. It can be shown and used in
        increments; each run is reduced again from its own archive.

    Raises
    ------
    InputError
        If there are fewer than two runs, the same data come twice, or the runs are not of one configuration.
    DataError
        If an archive cannot be read.

    Notes
    -----
    Each row and each coefficient is weighted by 1/(p_i + τ²): p_i is the variance of run i from errors of its own, τ²
    that between the runs (`wakeledger.confidence.repeats.repeated_mean`). Errors with one ``shared_id`` are one error
    in all runs, and numerical terms are taken as common: neither is averaged down. Where a scatter between the runs is
    seen, the random part has k - 1 degrees of freedom, which widens U95.
    """
    runs = [one if isinstance(one, Ledger) else open_archive(one) for one in ledgers]
    files = ["" if isinstance(one, Ledger) else str(one) for one in ledgers]
    _require_repeats(runs, files)
    surveys = [declared_surveys(run, file) for run, file in zip(runs, files, strict=True)]
    refuse_conflicts((f"run {k}", survey) for k, survey in enumerate(surveys, 1))
    names = [row.name for row in runs[0].rows if all(_has(run, row.name) for run in runs)]
    if not names:
        raise DataError("the runs have no row in common", remedy="combine surveys that measured the same")
    known = [name for name in names if all(math.isfinite(run.row(name).standard_uncertainty) for run in runs)]
    parts = [contributions_of(run, known) for run in runs]
    least = min(len(part.quantities) for part in parts)
    parts = [part.of(known, quantities=least) for part in parts]
    apart = _apart(parts)
    means = {name: _means(runs, name, parts, known, apart) for name in names}
    combined, variances = _combined(parts, known, [means[name] for name in known], apart)
    rows = _rows(runs, names, known, means, combined)
    covariance = np.full((len(names), len(names)), np.nan)
    at = [names.index(name) for name in known]
    covariance[np.ix_(at, at)] = combined.covariance[0]
    plane, plane_note = plane_mean([run.plane for run in runs])
    notes = [
        f"The mean of {len(runs)} runs, each row weighted by itself, so that rows need not add up to the last digit.",
        *_verdicts(names, means),
        *(
            f"The errors of single points or rows with shared_id {identity!r} ({name}) count as each run's own: {why}."
            for (identity, name), why in apart.items()
        ),
        *_not_followed(runs),
        *(
            sentence
            for k in range(1, len(runs))
            for sentence in unlike(runs[0], runs[k], surveys[0], surveys[k], names=("run 1", f"run {k + 1}"))
        ),
        plane_note,
        "Estimates of other methods and comparisons are in the ledger of each run.",
    ]
    first = runs[0]
    titles = dict.fromkeys(run.title for run in runs)
    return Ledger(
        title=f"Mean of {len(runs)} runs: {first.title}" + (" and others" if len(titles) > 1 else ""),
        compressible=first.compressible,
        rows=rows,
        covariance=covariance,
        plane=plane,
        raw=Points(np.empty(0), np.empty(0), {}, np.empty(0, dtype=np.int64), ""),
        survey_text="\n".join(f"# Run {k}\n{run.survey_text}" for k, run in enumerate(runs, 1)),
        budget=ordered_budget(known, {name: variance[0] for name, variance in variances.items()}),
        checks=_worst_checks(runs),
        notes=tuple(notes),
        test={key: text for key, text in first.test.items() if all(run.test.get(key) == text for run in runs)},
        reference={
            key: float(np.mean([run.reference[key] for run in runs]))
            for key in first.reference
            if all(key in run.reference for run in runs)
        },
        model=dict(first.model),
        contributions=combined if known else None,
        repeats=_table(runs, files, names, means),
        inputs={f"run {k}: {name}": digest for k, run in enumerate(runs, 1) for name, digest in run.inputs.items()},
        provenance=tables.provenance(command),
    )


def _has(ledger: Ledger, name: str) -> bool:
    return any(row.name == name for row in ledger.rows)


def _require_repeats(runs: Sequence[Ledger], files: Sequence[str]) -> None:
    if len(runs) < 2:
        raise InputError(f"{len(runs)} run was given", remedy="give the ledgers of at least two")
    seen: dict[str, int] = {}
    for k, (run, file) in enumerate(zip(runs, files, strict=True), 1):
        if run.repeats is not None:
            raise InputError(
                f"run {k} is a mean of runs itself", file=file or None, remedy="give the ledger of every single run"
            )
        if is_computed(run):
            raise InputError(
                f"run {k} is computed, not measured: computations do not scatter by chance",
                file=file or None,
                remedy="`wakeledger grids` takes grids of one configuration, `wakeledger increment` a difference",
            )
        digest = "|".join(sorted(run.inputs.values()))
        if digest and digest in seen:
            raise InputError(
                f"run {k} is made from the same files as run {seen[digest]}",
                file=file or None,
                remedy="a repeat is another measurement: give each run once",
            )
        seen[digest] = k
        if run.compressible != runs[0].compressible:
            raise InputError(
                f"run {k} and run 1 were not reduced by the same relations (compressible or not)",
                file=file or None,
                remedy="write [reference] compressible alike in both, and reduce again",
            )
        for name in _LENGTHS:
            one, other = (ledger.model.get(name, math.nan) for ledger in (runs[0], run))
            if not (abs(one - other) <= 1e-6 * abs(one) or (math.isnan(one) and math.isnan(other))):
                raise InputError(
                    f"run {k} has {name} {other:g}, run 1 has {one:g}",
                    file=file or None,
                    remedy="repeats are of one model; give surveys of one configuration",
                )


#: Means of a row's quantities, None for one that it has not.
Means = tuple[RepeatedMean | None, ...]


def _not_followed(runs: Sequence[Ledger]) -> list[str]:
    """What is not followed where the runs have several planes."""
    if not any(run.stations for run in runs):
        return []
    return [
        "The runs have several planes: the rows combine those that each run made of its planes, and the mean plane is"
        " that of the first station of each. The rows of the single stations are in the ledger of each run."
    ]


def _apart(parts: Sequence[Contributions]) -> dict[tuple[str, str], str]:
    """Errors of points, by identity and input, that are not the same ones in all runs, and why."""
    own = [together(part.points) for part in parts]
    found: dict[tuple[str, str], str] = {}
    for key in dict.fromkeys(key for run in own for key in run):
        having = [run[key] for run in own if key in run]
        if len(having) < len(own):
            found[key] = "not every run has them"
            continue
        why = next((why for one in having[1:] if (why := having[0].unlike(one)) is not None), None)
        if why is not None:
            found[key] = why
    return found


def _means(
    runs: Sequence[Ledger],
    name: str,
    parts: Sequence[Contributions],
    known: Sequence[str],
    apart: Collection[tuple[str, str]],
) -> Means:
    """Means of a row's values and, where there are any, of its coefficients and corrected coefficients."""
    rows = [run.row(name) for run in runs]
    figures = [
        [row.value for row in rows],
        [row.coefficient for row in rows],
        [math.nan if row.coefficient_corrected is None else row.coefficient_corrected for row in rows],
    ]
    values = np.array(figures, dtype=float)
    variances = np.full(values.shape, np.nan)
    if name in known:
        own = _own_variance(parts, apart)[:, :, known.index(name)]
        variances[: len(own)] = own
    found = [repeated_mean(y, p) if np.isfinite(y).all() else None for y, p in zip(values, variances, strict=True)]
    if found[0] is None:
        unknown = np.full(len(rows), np.nan)
        found[0] = replace(repeated_mean(np.zeros(len(rows)), unknown), mean=math.nan, between=math.nan)
    return tuple(found)


def _own_variance(parts: Sequence[Contributions], apart: Collection[tuple[str, str]]) -> Array:
    """Variance of each run from errors of its own, shape (q, k, m).

    What a shared error does to a run beside its mean effect on all is the run's own.
    """
    found = np.stack([np.einsum("qrr->qr", part.scatter) for part in parts], axis=1)
    by_key: dict[tuple[str, str, int], Array] = {}
    by_points: dict[tuple[str, str], list[Array]] = {}
    for k, part in enumerate(parts):
        for one in part.components:
            if one.kind == NUMERICAL:
                continue
            if one.key is None:
                found[:, k] += one.variance
            else:
                effects = by_key.setdefault(one.key, np.zeros(found.shape))
                effects[:, k] += one.linear
        for key, each in together(part.points).items():
            if key in apart:
                found[:, k] += each.variance
            else:
                by_points.setdefault(key, []).append(each.effects)
    for effects in by_key.values():
        found += (effects - effects.mean(axis=1, keepdims=True)) ** 2
    for of_runs in by_points.values():
        mean = np.mean(of_runs, axis=0)
        for k, effects in enumerate(of_runs):
            found[:, k] += np.square(effects - mean).sum(axis=-1)
    return found


def _combined(
    parts: Sequence[Contributions],
    rows: Sequence[str],
    means: Sequence[Means],
    apart: Collection[tuple[str, str]],
) -> tuple[Contributions, dict[str, Array]]:
    """Contributions to the weighted means, and their variances by source for the budget."""
    shape = (len(parts[0].quantities), len(rows))
    weights = np.full((shape[0], len(parts), len(rows)), np.nan)
    between, freedom = np.full(shape, np.nan), np.full(shape, math.inf)
    for k, of_row in enumerate(means):
        for quantity, mean in enumerate(of_row[: shape[0]]):
            if mean is not None:
                weights[quantity, :, k] = mean.weights
                between[quantity, k] = mean.between**2 * float((mean.weights**2).sum())
                freedom[quantity, k] = mean.degrees_of_freedom if mean.between > 0 else math.inf
    components: list[Component] = []
    shared: dict[tuple[str, str, int], Component] = {}
    numerical: dict[str, list[tuple[Component, Array]]] = {}
    variances: dict[str, Array] = {}

    def count(name: str, variance: Array) -> None:
        variances[name] = variances.get(name, np.zeros(shape)) + variance

    scatter = np.zeros((*shape, len(rows)))
    points: dict[tuple[str, str], PointErrors] = {}
    for number, part in enumerate(parts):
        share = weights[:, number]
        scatter = scatter + part.scatter * share[:, :, None] * share[:, None, :]
        for key, each in together(part.points).items():
            own = each.times(share)
            if key in apart:
                # Other points in every run: nothing can follow their mean.
                scatter = scatter + own.covariance
            else:
                earlier = points.get(key)
                points[key] = own if earlier is None else replace(earlier, effects=earlier.effects + own.effects)
        for one in part.components:
            mine = one.times(share)
            if one.kind == NUMERICAL:
                numerical.setdefault(one.source, []).append((one, share))
            elif one.key is not None:
                twin = shared.get(one.key)
                if twin is not None:
                    mine = replace(twin, linear=twin.linear + mine.linear, curved=twin.curved + mine.curved)
                shared[one.key] = mine
            else:
                components.append(replace(mine, source=f"{one.source} (run {number + 1})"))
                count(one.source, mine.variance)
    for one in shared.values():
        count(one.source, one.variance)
    for name, terms in numerical.items():
        # Their signs may differ from run to run; their size is not averaged down.
        size = np.sqrt(np.sum([share * one.linear**2 for one, share in terms], axis=0))
        sign = np.where(np.sum([share * one.linear for one, share in terms], axis=0) < 0, -1.0, 1.0)
        both = replace(terms[0][0], linear=sign * size)
        components.append(both)
        count(name, both.variance)
    for each in points.values():
        count(each.source, each.variance)
    count(SCATTER, np.einsum("qrr->qr", scatter))
    count(BETWEEN, between)
    diagonal = np.arange(len(rows))
    scatter[:, diagonal, diagonal] += between
    kept = Contributions(tuple(rows), (*shared.values(), *components), scatter, freedom, tuple(points.values()))
    return kept, variances


def _rows(
    runs: Sequence[Ledger],
    names: Sequence[str],
    known: Sequence[str],
    means: dict[str, Means],
    combined: Contributions,
) -> tuple[Row, ...]:
    groups = [("shared", one.shared_id) if one.shared_id else (one.kind, one.source) for one in combined.components]
    whole = Difference(
        combined.rows,
        combined.components,
        tuple(groups),
        ((SCATTER, combined.scatter, combined.scatter_degrees_of_freedom),),
        (),
        points=combined.points,
    )
    u = np.sqrt(np.einsum("qrr->qr", whole.covariance))
    half, freedom = whole.half_width(), whole.degrees_of_freedom
    found = []
    for name in names:
        value, coefficient, corrected = means[name]
        of_coefficient = math.nan if coefficient is None else coefficient.mean
        of_corrected = None if corrected is None else corrected.mean
        unit = runs[0].row(name).unit
        if name not in known:
            reasons = [
                f"unknown in run {k}: {run.row(name).reason}"
                for k, run in enumerate(runs, 1)
                if not math.isfinite(run.row(name).standard_uncertainty)
            ]
            nan = (math.nan,) * 4
            mean = math.nan if value is None else value.mean
            found.append(Row(name, mean, unit, *nan, of_coefficient, math.nan, of_corrected, reason="; ".join(reasons)))
            continue
        k = known.index(name)
        size = float(u[0, k])
        # The row has one factor for value and coefficients: the largest one covers all.
        factors = [half[q, k] / u[q, k] for q in range(len(u)) if u[q, k] > 0]
        last = float(u[PLAIN, k]) if len(u) > PLAIN else math.nan
        factor = float(np.nanmax(factors)) if factors else math.nan
        found.append(
            Row(
                name,
                _judged((value,)).mean,
                unit,
                standard_uncertainty=size,
                expanded_uncertainty=factor * size if size > 0 else 0.0,
                coverage_factor=factor,
                degrees_of_freedom=float(np.nanmin(freedom[:, k])),
                coefficient=of_coefficient,
                coefficient_standard_uncertainty=float(u[1, k]) if coefficient is not None else math.nan,
                coefficient_corrected=of_corrected,
                coefficient_corrected_standard_uncertainty=last if math.isfinite(last) else None,
            )
        )
    return tuple(found)


def _verdicts(names: Sequence[str], means: dict[str, Means]) -> list[str]:
    """What the scatter says about the declared uncertainties."""
    found = []
    for verdict, text in (
        ("larger", "larger than declared"),
        ("smaller", "smaller than declared: the errors declared as each run's own may be too large, or be shared"),
    ):
        rows = [name for name in names if _judged(means[name]).verdict == verdict]
        if rows:
            listed = ", ".join(
                f"{name.replace('_', ' ')} (Birge ratio {_judged(means[name]).birge_ratio:.2g})" for name in rows
            )
            found.append(f"The scatter between the runs is {text}: {listed}.")
    if not found and any(_judged(means[name]).verdict == "consistent" for name in names):
        found.append("The scatter between the runs is consistent with the declared uncertainties.")
    main = next((name for name in ("total_drag", "section_drag", "profile_drag") if name in names), None)
    if main is not None:
        one, in_counts = _judged(means[main]), means[main][1] is not None
        scale, unit = (COUNT, "counts") if in_counts else (1.0, "in the row's unit")
        name, count = main.replace("_", " "), one.degrees_of_freedom + 1
        if one.between > 0:
            found.append(
                f"Between the runs the {name} varies by {significant(one.between / scale, 2)} {unit} (k = 1) beyond"
                " what was declared."
            )
        if math.isfinite(one.between_upper):
            found.append(
                f"A variation of the {name} of up to {significant(one.between_upper / scale, 2)} {unit} (k = 1) between"
                f" the runs could not be told from the scatter of {count} runs."
            )
    return found


def _judged(means: Means) -> RepeatedMean:
    """The mean of the coefficients where there are any: they do not vary with the dynamic pressure."""
    found = next((one for one in (*means[1:PLAIN], means[0]) if one is not None), None)
    if found is None:
        raise ValueError("a row of repeats has no mean")
    return found


def _worst_checks(runs: Sequence[Ledger]) -> tuple[Check, ...]:
    """Of each check the worst outcome of the runs."""
    found: dict[str, tuple[int, Check]] = {}
    for number, run in enumerate(runs, 1):
        for check in run.checks:
            earlier = found.get(check.name)
            if earlier is None or _WORST.index(check.verdict) < _WORST.index(earlier[1].verdict):
                found[check.name] = (number, check)
    return tuple(replace(check, message=f"Run {number}: {check.message}") for number, check in found.values())


def _table(
    runs: Sequence[Ledger],
    files: Sequence[str],
    names: Sequence[str],
    means: dict[str, Means],
) -> xr.Dataset:
    """The runs and their scatter, dimensions quantity, run and row."""
    import xarray as xr

    # The corrected coefficient has a mean, but is judged with the coefficient.
    dataset = xr.Dataset(
        coords={
            "quantity": ("quantity", np.array(QUANTITIES[:PLAIN]), {"long_name": "value in its unit, or coefficient"}),
            "row": ("row", np.array(names, dtype=str), {"long_name": "name of the row"}),
        }
    )
    dataset["title"] = ("run", np.array([run.title for run in runs], dtype=str), {"long_name": "title of the run"})
    dataset["file"] = ("run", np.array(files, dtype=str), {"long_name": "archive of the run"})
    rows = [[run.row(name) for name in names] for run in runs]
    pairs = [means[name][:PLAIN] for name in names]
    figures = np.array(
        [[[row.value for row in run] for run in rows], [[row.coefficient for row in run] for run in rows]], dtype=float
    )
    dataset["figure"] = (("quantity", "run", "row"), figures, {"long_name": "figure of the run"})
    weights = np.full(figures.shape, np.nan)
    for k, pair in enumerate(pairs):
        for quantity, one in enumerate(pair):
            if one is not None:
                weights[quantity, :, k] = one.weights
    dataset["weight"] = (("quantity", "run", "row"), weights, {"long_name": "weight of the run"})
    for name, meaning in (
        ("between", "standard deviation between the runs beyond what was declared"),
        ("between_upper", "largest one that the scatter does not speak against (97.5 %)"),
        ("chi_square", "sum of squares over the declared variances of the runs' own errors"),
        ("birge_ratio", "root of chi-square over its degrees of freedom"),
        ("chance", "probability of a chi-square as large from the declared uncertainties alone"),
    ):
        found = [[getattr(pair[quantity], name, math.nan) for pair in pairs] for quantity in (0, 1)]
        dataset[name] = (("quantity", "row"), np.array(found, dtype=float), {"long_name": meaning})
    verdicts = np.array([_judged(pair).verdict for pair in pairs], dtype=str)
    dataset["verdict"] = ("row", verdicts, {"long_name": "the scatter beside the declared one"})
    dataset.attrs = {
        "degrees_of_freedom": len(runs) - 1,
        "survey_texts": json.dumps([run.survey_text for run in runs], ensure_ascii=False),
    }
    return dataset
