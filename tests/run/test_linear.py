"""The linear budget of surveys held against Monte Carlo of the same chain, and what the ledger says about the two."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest

from wakeledger.confidence.components import scatter, shifted_components
from wakeledger.confidence.linear_budget import linear_budget
from wakeledger.confidence.montecarlo import run as run_montecarlo
from wakeledger.confidence.sampling import ErrorSampler
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.ledger.propagation import dataset_propagation, propagation_dataset
from wakeledger.ledger.tabular import ledger_json
from wakeledger.run.chain.outputs import OUTPUTS
from wakeledger.run.survey import load, prepare, reduce
from wakeledger.run.uncertainty.draws import propagate
from wakeledger.run.uncertainty.linear import linear_slopes, paired, separated, survey_budget, tried, with_prediction
from wakeledger.run.uncertainty.propagation import propagation_notes

JUDGED = ("profile_drag", "induced_drag", "residual_drag", "total_drag", "lift", "side_force", "rolling_moment")
AT = [OUTPUTS.index(name) for name in JUDGED]

SOURCES = {
    "white": {"applies_to": ["plane.u", "plane.v", "plane.w"], "effect": "random", "standard_uncertainty": "0.1 m/s"},
    "pressures": {
        "applies_to": ["plane.total_pressure", "plane.static_pressure"],
        "effect": "random",
        "standard_uncertainty": "1.5 Pa",
    },
    "smooth": {
        "applies_to": ["plane.w"],
        "effect": "random",
        "standard_uncertainty": "0.1 m/s",
        "correlation_length": "90 mm",
    },
    "rows": {
        "applies_to": ["plane.total_pressure", "plane.w"],
        "effect": "per_row",
        "standard_uncertainty": "0.0001 %",
    },
    "pitch": {"applies_to": ["angle.pitch"], "effect": "systematic", "standard_uncertainty": "0.2 deg"},
    "static": {"applies_to": ["plane.static_pressure"], "effect": "systematic", "standard_uncertainty": "3 Pa"},
    "stream": {"applies_to": ["reference.speed"], "effect": "systematic", "standard_uncertainty": "0.3 %"},
    "large static": {"applies_to": ["plane.static_pressure"], "effect": "systematic", "standard_uncertainty": "6 Pa"},
    "large stream": {"applies_to": ["reference.speed"], "effect": "systematic", "standard_uncertainty": "5 %"},
    "density": {"applies_to": ["reference.density"], "effect": "systematic", "standard_uncertainty": "4 %"},
    "places": {"applies_to": ["position.y"], "effect": "random", "standard_uncertainty": "0.3 mm"},
}


@pytest.fixture(scope="module")
def survey(kit, tmp_path_factory):
    """Loads a survey of one exact wake, with noise in its data, under chosen sources."""
    data = kit.table(kit.wing(loading=kit.asymmetric), *kit.axes(spacing=0.0375, y=(-0.9, 0.9), z=(-0.6, 0.5)))
    rng = np.random.default_rng(0)
    sizes = {"u": 0.1, "v": 0.1, "w": 0.1, "total_pressure": 1.5, "static_pressure": 1.5}
    data = {name: column + sizes.get(name, 0.0) * rng.standard_normal(column.size) for name, column in data.items()}

    def make(*names, off={}, **changes):  # noqa: B006
        content = kit.description(uncertainty={"seed": 5}, **changes)
        content["uncertainty.source"] = [{"name": name} | SOURCES[name] for name in names]
        given = {name: column + off.get(name, 0.0) for name, column in data.items()}
        return load(kit.write(tmp_path_factory.mktemp("survey"), given, content))

    return make


def budgets(survey):
    prepared = prepare(survey)
    chain, nominal = prepared.chain, prepared.nominal
    slopes = linear_slopes(chain, nominal, prepared.sources, prepared.layouts)
    return prepared, slopes, linear_budget(slopes, prepared.sources, prepared.layouts, names=OUTPUTS)


@pytest.mark.parametrize("name", ["white", "smooth", "rows", "places", "pressures"])
def test_each_kind_of_source(survey, name):
    prepared, slopes, linear = budgets(survey(name))
    chain = prepared.chain
    drawn = run_montecarlo(
        with_prediction(chain.vectors, slopes),
        prepared.sources,
        prepared.layouts,
        names=(*OUTPUTS, *(f"{name} by derivatives" for name in OUTPUTS)),
        draws=200,
        seed=4,
    )
    plain, predicted = separated(drawn)
    u, same, closed = (
        plain.standard_uncertainty[AT],
        predicted.standard_uncertainty[AT],
        linear.standard_uncertainty[AT],
    )
    assert (closed > 0).all()
    # The same draws: what differs is the second order. The residual is small and bends most.
    main = [k for k, row in enumerate(JUDGED) if row != "residual_drag"]
    np.testing.assert_allclose(same[main], u[main], rtol=0.03)
    # 200 draws know a standard deviation within 5 %; three and a half times that.
    np.testing.assert_allclose(same, closed, rtol=0.18)


def test_single_errors_are_exact(survey):
    # One error moves every output by its derivative times its size; two passes of the chain say the same.
    prepared, _, linear = budgets(survey("pitch", "static", "stream"))
    chain = prepared.chain
    sizes = {"angle.pitch": math.radians(0.2), "plane.static_pressure": 3.0, "reference.speed": 0.003 * 40.0}
    for k, (name, size) in enumerate(sizes.items()):
        # A tenth of the size, so that the third order stays out of it.
        step = 0.1 * np.array([size, -size])
        values = chain.vectors({name: step[:, None] if "plane" in name else step})
        moved = 10 * np.abs(values[0] - values[1])[AT] / 2
        found = np.sqrt(np.diag(linear.covariance[k]))[AT]
        np.testing.assert_allclose(found, moved, rtol=2e-4, atol=2e-6)
    assert linear.covariance[2][AT[4], AT[0]] > 0  # more speed, more lift and more drag


def test_a_zero_of_the_total_pressure_costs_nothing(survey):
    source = {"applies_to": ["plane.total_pressure"], "effect": "systematic", "standard_uncertainty": "2 Pa"}
    SOURCES["zero"] = source
    _, _, linear = budgets(survey("zero"))
    # The outer flow tells the zero, so that its error drops out; by cancellation, not because it was left out.
    assert linear.standard_uncertainty[AT[0]] < 1e-9
    assert linear.standard_uncertainty[AT[4]] < 1e-9


def test_second_order_counts_once(survey):
    prepared, slopes, first = budgets(survey("white"))
    chain, nominal = prepared.chain, prepared.nominal
    both = survey_budget(chain, nominal, slopes, prepared.sources, prepared.layouts, noisy={"white"})
    at = OUTPUTS.index("residual_drag")
    drawn = run_montecarlo(chain.vectors, prepared.sources, prepared.layouts, names=OUTPUTS, draws=600, seed=4)
    # The first order of the residual is too small by a fifth; with the second it is that of Monte Carlo.
    assert first.standard_uncertainty[at] < 0.88 * drawn.standard_uncertainty[at]
    assert both.standard_uncertainty[at] == pytest.approx(drawn.standard_uncertainty[at], rel=0.12)
    for row in ("induced_drag", "residual_drag"):
        at = OUTPUTS.index(row)
        # The mean moves by the noise bias in closed form, an independent piece of algebra.
        assert both.shift[at] == pytest.approx(chain.frozen.bias[row], rel=0.12)
        error = 3.5 * drawn.sampling_error().mean[at]
        assert drawn.mean[at] - nominal.values[row] == pytest.approx(
            both.shift[at], abs=error + 0.1 * abs(both.shift[at])
        )
        assert abs(both.shift[at]) > error
        # The variance holds the scatter about that mean and not the bias itself.
        assert both.second_order[at] < 0.5 * abs(both.shift[at])


def test_derivatives_that_are_not_the_chains_are_not_used(survey):
    prepared, slopes, _ = budgets(survey("white", "pressures"))
    good = tried(prepared.chain, slopes, prepared.sources, prepared.layouts)
    assert np.isfinite(good.outputs[AT]).all()
    lift = OUTPUTS.index("lift")
    outputs = slopes.outputs.copy()
    outputs[lift] *= 1.3
    wrong = tried(prepared.chain, replace(slopes, outputs=outputs), prepared.sources, prepared.layouts)
    assert np.isnan(wrong.outputs[lift]).all()
    assert np.isfinite(wrong.outputs[OUTPUTS.index("side_force")]).all()


@pytest.fixture(scope="module")
def ledger(survey):
    return reduce(survey("white", "pressures", "pitch", "static", "stream"), draws=256)


def test_parts_add_up_to_the_row(ledger):
    assert {one.row for one in ledger.propagation} == {row.name for row in ledger.rows}
    for one in ledger.propagation:
        total = math.sqrt(
            one.random_standard_uncertainty**2
            + one.systematic_standard_uncertainty**2
            + one.numerical_standard_uncertainty**2
        )
        assert total == pytest.approx(ledger.row(one.row).standard_uncertainty, rel=1e-9)
        assert one.random_standard_uncertainty > 0
        assert one.linear_standard_uncertainty == pytest.approx(one.monte_carlo_standard_uncertainty, rel=0.2)
        assert one.linear_coverage_factor == pytest.approx(1.96, abs=0.001)
        assert one.verdict in ("validated", "undecided", "not_validated")


def test_the_ledger_keeps_and_shows_it(ledger, tmp_path):
    write_archive(ledger, tmp_path / "ledger.nc")
    assert open_archive(tmp_path / "ledger.nc").propagation == ledger.propagation
    document = json.loads(json.dumps(ledger_json(ledger), allow_nan=False))
    entry = next(one for one in document["propagation"] if one["row"] == "lift")
    assert entry["linear_degrees_of_freedom"] == 1e6
    assert entry["systematic_standard_uncertainty"] > 0
    assert "reason" not in entry


def test_the_larger_non_linearity_is_said(ledger):
    worst = max(ledger.propagation, key=lambda one: one.non_linearity)
    assert worst.row == "residual_drag"
    assert worst.non_linearity > 0.2
    said = [note for note in ledger.notes if "departs most from linear propagation" in note]
    assert len(said) == 1
    assert "residual drag" in said[0]
    assert not propagation_notes([replace(worst, non_linearity=0.01)])


def test_pairs_of_single_errors_are_what_draws_hold_beyond_each_alone(survey):
    prepared = prepare(survey("pitch", "large static", "large stream", "density"))
    chain, nominal, given, layouts = prepared.chain, prepared.nominal, prepared.sources, prepared.layouts
    plain = run_montecarlo(chain.vectors, given, layouts, names=OUTPUTS, draws=400, seed=4)
    sampler = ErrorSampler(given, layouts, seed=4)
    parts = shifted_components(chain.vectors, sampler, sampler.by_source, len(OUTPUTS), batch=16, workers=1)
    pairs = paired(chain.vectors, given, layouts, parts, plain.standard_uncertainty**2)
    left = scatter(plain, sampler.by_source, parts)
    rows = [OUTPUTS.index(name) for name in ("profile_drag", "induced_drag", "lift")]
    # 400 draws know the standard deviation of a product of normals (kurtosis 9) within 7 %; three times that.
    np.testing.assert_allclose(np.diag(pairs.covariance)[rows], np.diag(left)[rows], rtol=0.42)
    drag, lift = rows[1:]
    assert pairs.covariance[drag, lift] == pytest.approx(left[drag, lift], rel=0.42)
    # The lift is a product of powers of speed and density, whose effects multiply.
    stream, density = (one.linear[lift] for one in parts[2:])
    product = stream * density / nominal.values["lift"]
    assert math.sqrt(pairs.covariance[lift, lift]) == pytest.approx(abs(product), rel=0.05)


def test_closed_form_of_a_total_drag_that_bends(survey):
    """It holds −½ρ∬(u* − U)², the square of the static pressure's error."""
    prepared, slopes, first = budgets(survey("pitch", "large static", "stream"))
    chain, nominal, given, layouts = prepared.chain, prepared.nominal, prepared.sources, prepared.layouts
    plain = run_montecarlo(chain.vectors, given, layouts, names=OUTPUTS, draws=400, seed=4)
    sampler = ErrorSampler(given, layouts, seed=4)
    parts = shifted_components(chain.vectors, sampler, sampler.by_source, len(OUTPUTS), batch=16, workers=1)
    pairs = paired(chain.vectors, given, layouts, parts, plain.standard_uncertainty**2)
    both = survey_budget(chain, nominal, slopes, given, layouts, noisy=(), components=parts, pairs=pairs)
    at = OUTPUTS.index("total_drag")
    u, error = plain.standard_uncertainty[at], plain.sampling_error().standard_uncertainty[at]
    assert both.standard_uncertainty[at] == pytest.approx(u, abs=2 * error)
    assert first.standard_uncertainty[at] < u - 2 * error


@pytest.fixture(scope="module")
def bent(survey):
    """Static pressure measured so much too low that the total drag hardly slopes with it, and bends all the more."""
    return survey("pitch", "large static", "stream", off={"static_pressure": -6.0})


def test_the_curvature_of_a_row_counts_once(bent):
    ledger = reduce(bent, draws=200)
    (one,) = [one for one in ledger.propagation if one.row == "total_drag"]
    row = ledger.row("total_drag")
    assert 0.5 < one.curvature_factor < 0.9
    measured = math.hypot(one.random_standard_uncertainty, one.systematic_standard_uncertainty)
    numerical = one.numerical_standard_uncertainty
    assert math.hypot(measured, numerical) == pytest.approx(row.standard_uncertainty, rel=1e-9)
    assert one.linear_standard_uncertainty == pytest.approx(one.monte_carlo_standard_uncertainty, rel=0.1)
    lines = [line for line in ledger.budget if line.row == "total_drag"]
    assert sum(line.standard_uncertainty**2 for line in lines) == pytest.approx(row.standard_uncertainty**2, rel=1e-9)
    assert sum(line.share for line in lines) == pytest.approx(1.0, rel=1e-9)
    (said,) = [note for note in ledger.notes if "more than once" in note]
    assert f"total drag {1 - one.curvature_factor:.1%}" in said
    (lift,) = [one for one in ledger.propagation if one.row == "lift"]
    assert lift.curvature_factor == 1.0
    assert "lift" not in said


def test_rows_and_coefficients_are_scaled_and_nothing_else(bent):
    found = propagate(prepare(bent), (), draws=64, seed=5, progress=None)
    total, coefficient = OUTPUTS.index("total_drag"), OUTPUTS.index("total_drag coefficient")
    assert found.factor[total] < 0.9
    # Its coefficient bends alike and slopes a little more with the speed.
    assert found.factor[total] < found.factor[coefficient] < 0.9
    np.testing.assert_array_equal(found.held.values, found.plain.values)
    known = found.plain.known & ~np.isnan(found.plain.standard_uncertainty)
    expected = found.factor * found.plain.standard_uncertainty
    np.testing.assert_allclose(found.samples.standard_uncertainty[known], expected[known], rtol=1e-12)
    np.testing.assert_allclose(found.samples.coverage_factor()[total], found.plain.coverage_factor()[total], rtol=1e-12)
    estimates = [k for k, name in enumerate(OUTPUTS) if name.endswith(("_area", "wake_line", "vortex_sum"))]
    assert (found.factor[estimates] == 1.0).all()


def test_an_archive_without_the_factor_opens(ledger):
    dataset = propagation_dataset(ledger.propagation).drop_vars("curvature_factor")
    assert all(one.curvature_factor == 1.0 for one in dataset_propagation(dataset))
