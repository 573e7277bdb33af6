"""Planes at several stations through the survey file: vortices that diffuse with a known total drag, a shock.

A pair of Gaussian vortices is an exact case of the decay: its cores grow as a² = a₀² + 4νx/U, its induced drag is a
closed form, and the losses that ride in the cores are chosen so that profile and induced drag add up to one total.
"""

import json
from dataclasses import replace

import netCDF4
import numpy as np
import pytest
from scipy.optimize import brentq

from wakeledger.core.errors import SurveyError
from wakeledger.core.points import Channel
from wakeledger.ledger.archive import open_archive, write_archive
from wakeledger.ledger.tabular import json_text, ledger_json
from wakeledger.run.chain.reduction import Frozen
from wakeledger.run.gridded import grid_survey
from wakeledger.run.load import load
from wakeledger.run.survey import inspect, reduce
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import GaussianLosses, ShockedWake, SyntheticWake, vortex_pair

CIRCULATION, SPACING, TOTAL = 4.0, 0.8, 14.0
#: Square of the core length at the trailing edge, m²; diffusivities, m²/s. Far behind, no bound vortex is felt.
EDGE, DIFFUSIVITY = 0.0022, 2.8e-5
STATIONS = (500.0, 1500.0)
GRID = {"spacing": 0.03, "y": (-0.96, 0.96), "z": (-0.54, 0.54)}


def edge_drag():
    return vortex_pair(circulation=CIRCULATION, spacing=SPACING, core=np.sqrt(EDGE)).induced_drag(density=1.2)


def diffused(kit, x, *, diffusivity=DIFFUSIVITY, total=TOTAL, core=None):
    """The pair at a station, with losses that make up the total."""
    core = np.sqrt(EDGE + 4 * diffusivity * x / kit.SPEED) if core is None else core
    pair = vortex_pair(circulation=CIRCULATION, spacing=SPACING, core=core)

    def wake(strength):
        half = SPACING / 2
        patches = GaussianLosses(np.array([-half, half]), np.zeros(2), np.full(2, strength / 2), np.full(2, core))
        return SyntheticWake(kit.REFERENCE, (pair,), patches)

    return wake(brentq(lambda strength: wake(strength).truth.total_drag - total, 0.1, 12.0, rtol=1e-8))


def content(kit, stations, **changes):
    base = kit.description(plane=None, **changes)
    base["plane"] = [
        {"file": f"plane_{k}.csv", "station": f"{x:g} m", "primary": "total_pressure", "columns": kit.columns()}
        for k, x in enumerate(stations, 1)
    ]
    return base


def write(kit, folder, wakes, given, *, noise=0.0, factor=1.0, rng=None):
    """One table for each plane, its velocities with noise and a common factor; gives the survey file."""
    for k, wake in enumerate(wakes, 1):
        data = kit.table(wake, *kit.axes(**GRID))
        for name in "uvw":
            data[name] = factor * data[name]
            if rng is not None:
                data[name] = data[name] + noise * rng.normal(size=data[name].shape)
        folder.mkdir(parents=True, exist_ok=True)
        kit.write_csv(folder / f"plane_{k}.csv", data)
    path = folder / "survey.toml"
    path.write_text(kit.toml(given), encoding="utf-8")
    return path


def write_volume(kit, path, state_at, station, *, compressible=False, axes=None):
    """A thin volume about a station, so that the plane counts as computed."""
    y, z = kit.axes(**GRID) if axes is None else axes
    x = station + np.array([-1.0, 1.0]) * 1e-3
    state = state_at(*np.meshgrid(y, z))
    names = ("u", "v", "w", "static_pressure", *(("density",) if compressible else ()))
    with netCDF4.Dataset(path, "w") as file:
        for name, line in (("x", x), ("z", z), ("y", y)):
            file.createDimension(name, line.size)
            file.createVariable(name, "f8", (name,))[:] = line
        for name in names:
            file.createVariable(name, "f8", ("x", "z", "y"))[:] = np.stack([getattr(state, name)] * 2)
    return names


def computed(kit, folder, wakes, stations, **changes):
    units = {"static_pressure": "Pa", "density": "kg/m^3"}
    given = content(kit, stations, **changes)
    for k, (wake, x) in enumerate(zip(wakes, stations, strict=True), 1):
        compressible = wake.reference.compressible
        axes = SHOCK_AXES if compressible else None
        names = write_volume(kit, folder / f"plane_{k}.nc", wake.state, x, compressible=compressible, axes=axes)
        columns = {name: {"column": name, "unit": units.get(name, "m/s")} for name in names}
        columns |= {letter: {"column": letter, "unit": "m"} for letter in "xyz"}
        given["plane"][k - 1] |= {"file": f"plane_{k}.nc", "primary": "velocity", "columns": columns}
    path = folder / "survey.toml"
    path.write_text(kit.toml(given), encoding="utf-8")
    return path


# -- computed planes of vortices that diffuse ---------------------------------------------------------------------


@pytest.fixture(scope="module")
def decaying(kit, tmp_path_factory):
    folder = tmp_path_factory.mktemp("decaying")
    wakes = [diffused(kit, x) for x in STATIONS]
    compare = [{"name": "surface", "row": "total_drag", "value": f"{TOTAL} N", "standard_uncertainty": "0.001 N"}]
    return reduce(load(computed(kit, folder, wakes, STATIONS, compare=compare)))


def test_the_drags_are_those_at_the_trailing_edge(decaying):
    assert decaying.combined.method == "extrapolated"
    induced, total, profile = (decaying.row(f"{name}_drag") for name in ("induced", "total", "profile"))
    edge = edge_drag()
    assert abs(induced.value - edge) < induced.expanded_uncertainty
    assert abs(total.value - TOTAL) < total.expanded_uncertainty
    residual = decaying.row("residual_drag").value
    assert profile.value == pytest.approx(total.value - induced.value - residual, rel=1e-12)
    # An answer that is any good: the planes lie 9 and 20 % below the trailing edge.
    assert induced.expanded_uncertainty < 0.03 * edge and total.expanded_uncertainty < 0.01 * TOTAL
    assert all(one.row("induced_drag").value < 0.93 * edge for one in decaying.stations)


def test_decay_is_positive_and_added_back(kit, decaying):
    exact = [edge_drag() - diffused(kit, x).truth.induced_drag for x in STATIONS]
    combined = decaying.combined
    for lost, doubt, truth in zip(combined.decay, combined.decay_uncertainty, exact, strict=True):
        assert truth > 0 and abs(lost - truth) < 2 * doubt + 0.01 * truth
    assert combined.diffusivity == pytest.approx(DIFFUSIVITY, rel=0.1)
    induced = decaying.row("induced_drag").value
    for one, lost in zip(decaying.stations, combined.decay, strict=True):
        assert one.row("induced_drag").value + lost == pytest.approx(induced, rel=2e-3)
    note = next(note for note in decaying.notes if note.startswith("Decay of the trailing vortices"))
    assert "added back to the induced drag" in note and "counts by 500 m" in note


def test_efficiency_follows_the_decay(kit, decaying):
    row = decaying.row("span_efficiency")
    lift = 1.2 * kit.SPEED * CIRCULATION * SPACING
    exact = lift**2 / (np.pi * 960.0 * kit.SPAN**2 * edge_drag())
    assert abs(row.value - exact) < row.expanded_uncertainty < 0.05 * exact
    # The planes' own efficiencies are higher, as vortices with wide cores have less drag.
    assert all(one.row("span_efficiency").value > 1.05 * exact for one in decaying.stations)


def test_the_closure_names_what_it_knows(decaying):
    (closure,) = decaying.closures
    assert closure.row == "total_drag" and closure.verdict == "agrees"
    assert closure.near == TOTAL and closure.difference == pytest.approx(decaying.row("total_drag").value - TOTAL)
    names = [cause.name for cause in closure.causes]
    assert {"mask", "resolution", "decay", "numerical"} <= set(names) and "walls" not in names
    decay = next(cause for cause in closure.causes if cause.name == "decay")
    assert decay.difference == 0.0 and "by 500 m" in decay.note and "the sum stays" in decay.note
    outside = next(cause for cause in closure.causes if cause.name == "numerical")
    assert outside.difference == -decaying.row("numerical_drag").value


def test_the_archive_gives_the_same_rows(decaying, tmp_path):
    path = tmp_path / "ledger.nc"
    write_archive(decaying, path)
    kept = open_archive(path)
    again = reduce(load(path))
    # Rows, planes, closures and how they were combined, to the last digit on one machine.
    documents = [ledger_json(one) for one in (decaying, kept, again)]
    assert json_text(documents[0]) == json_text(documents[1]) == json_text(documents[2])
    assert kept.combined == decaying.combined == again.combined
    assert kept.closures == decaying.closures == again.closures
    assert [one.station for one in kept.stations] == list(STATIONS)


def test_json_lists_planes_and_how_they_were_combined(decaying):
    document = json.loads(json_text(ledger_json(decaying)))
    assert [plane["station"] for plane in document["planes"]] == list(STATIONS)
    for plane, one in zip(document["planes"], decaying.stations, strict=True):
        rows = {row["name"]: row["value"] for row in plane["rows"]}
        assert rows["induced_drag"] == one.row("induced_drag").value
        assert {line["method"] for line in plane["estimates"]} >= {"entropy_area", "energy_area"}
    assert document["combined"]["method"] == "extrapolated" and len(document["combined"]["decay"]) == 2
    assert document["closures"][0]["row"] == "total_drag" and document["closures"][0]["verdict"] == "agrees"


def test_numerical_terms_are_half_alike(decaying):
    """Of each plane's term one part is common to all, the other, of equal variance, is its own."""
    term = "spacing of the points"

    def effects(ledger):
        at = ledger.contributions.rows.index("lift")
        return np.array([one.linear[0, at] for one in ledger.contributions.components if one.source == term])

    planes = np.concatenate([effects(one) for one in decaying.stations])
    common, *own = effects(decaying)
    assert planes.size == len(own) == 2 and np.abs(planes).min() > 0
    weights = np.array(own) / planes / np.sqrt(0.5)
    assert weights.sum() == pytest.approx(1.0, rel=1e-9) and weights.min() >= 0
    assert common == pytest.approx(np.sqrt(0.5) * float(weights @ planes), rel=1e-9)


# -- measured planes ----------------------------------------------------------------------------------------------

THREE = (500.0, 1000.0, 1500.0)
NOISE, SPEED_ERROR = 0.2, 0.4
DRAWS = 100


def sources(kit):
    return [
        kit.source("velocity noise", ["plane.u", "plane.v", "plane.w"], f"{NOISE} m/s", effect="random"),
        kit.source("tunnel speed", "reference.speed", f"{SPEED_ERROR} m/s"),
    ]


def measured(kit, folder, wakes, stations, listed, **options):
    changes = {"uncertainty": {"draws": DRAWS, "seed": 3}, "uncertainty.source": listed}
    return write(kit, folder, wakes, content(kit, stations, **changes), **options)


@pytest.fixture(scope="module")
def still(kit, tmp_path_factory):
    """Three planes of vortices that do not decay, with noise."""
    wakes = [diffused(kit, x, core=0.06) for x in THREE]
    folder = tmp_path_factory.mktemp("still")
    path = measured(kit, folder, wakes, THREE, sources(kit), noise=NOISE, rng=np.random.default_rng(8))
    return path, reduce(load(path))


def line(ledger, row, source):
    return next(one.standard_uncertainty for one in ledger.budget if (one.row, one.source) == (row, source))


def test_without_a_trend_the_rows_are_means(kit, still):
    _, found = still
    assert found.combined.method == "weighted_mean" and "no trend is resolved" in found.combined.reason
    truth = diffused(kit, 500.0, core=0.06).truth
    for name, exact in truth.rows().items():
        row = found.row(name)
        assert abs(row.value - exact) <= row.expanded_uncertainty, name
    assert found.row("induced_drag").expanded_uncertainty < 0.1 * truth.induced_drag
    lifts = [one.row("lift").value for one in found.stations]
    assert min(lifts) < found.row("lift").value < max(lifts)
    # A decay that is possible but not seen is in the induced drag's uncertainty, and in the sum's not.
    assert any(one.source == "trend along the stations" and one.row == "induced_drag" for one in found.budget)


def test_noise_is_averaged_down_and_a_common_error_is_not(still):
    _, found = still
    noise = np.array([line(one, "lift", "velocity noise") for one in found.stations])
    speed = np.array([line(one, "lift", "tunnel speed") for one in found.stations])
    # With 100 draws a standard deviation is known to 7 %; noise of three planes falls by 3**0.5.
    scatter = next(
        one.standard_uncertainty
        for one in found.budget
        if one.row == "lift" and one.source == "random errors and interaction"
    )
    assert scatter == pytest.approx(float(np.sqrt(np.mean(noise**2) / 3)), rel=0.25)
    # Budgets are scaled to the total of their draws, by a per cent or two.
    assert line(found, "lift", "tunnel speed") == pytest.approx(speed.mean(), rel=0.03)
    # A stream faster by 1 % has 2 % more dynamic pressure, and so has the zero that the outer flow sets.
    assert speed.mean() == pytest.approx(0.02 * found.row("lift").value, rel=0.03)
    assert found.row("lift").standard_uncertainty > 0.98 * speed.mean()


def test_the_common_error_is_what_another_speed_would_give(still, tmp_path):
    path, found = still
    text = path.read_text(encoding="utf-8").replace('speed = "40.0 m/s"', f'speed = "{40 + SPEED_ERROR} m/s"')
    for name in ("plane_1.csv", "plane_2.csv", "plane_3.csv"):
        (tmp_path / name).write_bytes((path.parent / name).read_bytes())
    (tmp_path / "survey.toml").write_text(text, encoding="utf-8")
    other = reduce(load(tmp_path / "survey.toml"))
    change = other.row("lift").value - found.row("lift").value
    # Weights of the planes are worked out anew, which moves the mean within its noise.
    noise = found.row("lift").standard_uncertainty
    assert change == pytest.approx(line(found, "lift", "tunnel speed"), abs=0.2 * noise)
    assert change > 0.5 * noise


def test_three_noisy_planes_of_a_decay(kit, tmp_path):
    wakes = [diffused(kit, x) for x in THREE]
    listed = [sources(kit)[0] | {"standard_uncertainty": "0.05 m/s"}]
    found = reduce(load(measured(kit, tmp_path, wakes, THREE, listed, noise=0.05, rng=np.random.default_rng(4))))
    assert found.combined.method == "extrapolated"
    induced, total = found.row("induced_drag"), found.row("total_drag")
    assert abs(induced.value - edge_drag()) < induced.expanded_uncertainty < 0.1 * edge_drag()
    assert abs(total.value - TOTAL) < total.expanded_uncertainty < 0.05 * TOTAL
    assert np.all(np.diff(found.combined.decay) > 0) and found.combined.decay[0] > 0


def test_errors_of_rows_are_each_planes_own(kit, tmp_path):
    """Few errors for a plane are carried one by one; those of another plane are others all the same."""
    stations = STATIONS
    wake = diffused(kit, 500.0, core=0.06)
    path = measured(
        kit,
        tmp_path,
        [wake, wake],
        stations,
        [
            kit.source("loss of a row", "plane.total_pressure", "3 Pa", effect="per_row"),
        ],
    )
    y, z = kit.axes(**GRID)
    for k in (1, 2):
        data = kit.table(wake, y, z)
        data["row"] = np.repeat(1.0 + np.arange(z.size) * 4 // z.size, y.size)
        kit.write_csv(tmp_path / f"plane_{k}.csv", data)
    row = '{ "column" = "row", "unit" = "1" }'
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace("columns = { ", f'columns = {{ "row" = {row}, '), encoding="utf-8")
    found = reduce(load(path))
    one = line(found.stations[0], "profile_drag", "loss of a row")
    assert line(found.stations[1], "profile_drag", "loss of a row") == pytest.approx(one, rel=1e-9)
    components = [each for each in found.contributions.components if each.source == "loss of a row"]
    assert len(components) == 8
    assert line(found, "profile_drag", "loss of a row") == pytest.approx(one / np.sqrt(2), rel=0.02)


def test_unknown_uncertainty_stays_unknown(kit, tmp_path):
    given = content(kit, STATIONS)
    given["compare"] = [{"name": "balance", "row": "total_drag", "value": "14 N", "standard_uncertainty": "0.1 N"}]
    path = write(kit, tmp_path, [diffused(kit, x) for x in STATIONS], given)
    found = reduce(load(path))
    for row in found.rows:
        assert np.isnan(row.standard_uncertainty)
        assert "unknown at 500 m: the survey file gives no uncertainty source" in row.reason
    values = [one.row("induced_drag").value for one in found.stations]
    assert found.row("induced_drag").value == pytest.approx(np.mean(values), rel=1e-12)
    assert found.combined.method == "weighted_mean" and "unknown" in found.combined.reason
    assert not found.closures and found.comparisons[0].verdict == "unknown"
    document = json.loads(json_text(ledger_json(found)))
    assert document["rows"][0]["standard_uncertainty"] is None and "unknown at 500 m" in document["rows"][0]["reason"]


def test_two_planes_at_one_station_are_refused(kit, tmp_path):
    path = write(kit, tmp_path, [diffused(kit, 500.0)] * 2, content(kit, (500.0, 500.0)))
    with pytest.raises(SurveyError, match="two planes stand at 500 m") as caught:
        reduce(load(path))
    assert caught.value.place == "[[plane]] 2 station" and "repeats" in caught.value.remedy


# -- a shock ------------------------------------------------------------------------------------------------------

SHOCK_AXES = (np.linspace(-1.2, 1.2, 49), np.linspace(-0.45, 0.75, 121))
TRANSONIC = Reference(speed=250.0, density=0.5, static_pressure=35e3, compressible=True)


@pytest.fixture(scope="module")
def shocked(kit, tmp_path_factory):
    wakes = ShockedWake(TRANSONIC), ShockedWake(TRANSONIC, foot_mach=1.31, defect=0.31)
    reference = {"speed": "250 m/s", "density": "0.5 kg/m^3", "static_pressure": "35 kPa", "compressible": True}
    path = computed(kit, tmp_path_factory.mktemp("shocked"), wakes, STATIONS, reference=reference)
    return wakes, reduce(load(path))


def test_a_shock_has_a_row_of_its_own(shocked):
    wakes, found = shocked
    for wake, ledger in zip(wakes, found.stations, strict=True):
        wave, profile = ledger.row("wave_drag"), ledger.row("profile_drag")
        assert abs(wave.value - wake.wave_drag) < wave.expanded_uncertainty < 0.3 * wake.wave_drag
        assert wave.value > 0.8 * wake.wave_drag
        # Both together are the irreversible drag, which no split changes.
        assert profile.value + wave.value == pytest.approx(wake.wave_drag + wake.viscous_drag, rel=0.01)
        assert abs(profile.value - wake.viscous_drag) < profile.expanded_uncertainty
        # What one gains the other loses.
        names = [row.name for row in ledger.rows]
        assert ledger.covariance[names.index("wave_drag"), names.index("profile_drag")] < 0


def test_turbulent_viscosity_tells_the_wake_from_the_shock(kit, tmp_path):
    wake = ShockedWake(TRANSONIC)
    reference = {"speed": "250 m/s", "density": "0.5 kg/m^3", "static_pressure": "35 kPa", "compressible": True}
    loaded = load(computed(kit, tmp_path, (wake, wake), STATIONS, reference=reference)).stations[0]
    chain = grid_survey(loaded).chain
    points = chain.points

    def wave(eddy):
        channels = dict(points.channels) | ({} if eddy is None else {"turbulent_viscosity": Channel(eddy)})
        seen = replace(chain, points=replace(points, channels=channels), frozen=Frozen(shock_level=50.0))
        return seen.reduce(estimates=False).values["wave_drag"]

    spread = np.exp(-((points.z / (2 * np.ptp(points.z))) ** 2))
    narrow = np.exp(-((points.z / (0.15 * np.ptp(points.z))) ** 2) * 40)
    assert wave(None) == pytest.approx(wake.wave_drag, rel=0.15)
    # Where all of the plane is turbulent nothing is a shock's; where the wake alone is, the rest still is.
    assert wave(spread + 1e-3 * points.y) < 0.3 * wake.wave_drag
    assert wave(narrow) > 0.6 * wake.wave_drag


def test_combined_rows_add_up(shocked):
    wakes, found = shocked
    assert found.combined.method == "weighted_mean" and "no vortex" in found.combined.reason
    rows = [found.row(name) for name in ("profile_drag", "wave_drag", "induced_drag", "residual_drag")]
    assert found.row("total_drag").value == pytest.approx(sum(row.value for row in rows), rel=1e-9)
    low, high = sorted(wake.wave_drag for wake in wakes)
    wave = found.row("wave_drag")
    assert low - wave.expanded_uncertainty < wave.value < high + wave.expanded_uncertainty
    assert low < 0.98 * high and wave.expanded_uncertainty < 0.3 * low


# -- looked at ----------------------------------------------------------------------------------------------------


def test_every_plane_is_looked_at(kit, tmp_path):
    path = write(kit, tmp_path, [diffused(kit, x) for x in STATIONS], content(kit, STATIONS))
    alike = inspect(load(path))
    assert any("Planes at 500 m, 1500 m were looked at" in note for note in alike.notes)
    assert not alike.failed and [each.action for each in alike.recommendations].count("move_on") <= 1
    # The second plane ends in the middle of a vortex.
    data = kit.table(diffused(kit, STATIONS[1]), *kit.axes(**GRID | {"y": (-0.96, 0.39)}))
    kit.write_csv(tmp_path / "plane_2.csv", data)
    cut = inspect(load(path))
    assert cut.failed
    failed = [check for check in cut.checks if check.verdict == "fail"]
    assert all(check.message.startswith("At 1500 m: ") for check in failed)
    assert any(each.action == "widen" and each.message.startswith("At 1500 m: ") for each in cut.recommendations)
    assert cut.station == 500.0 and cut.points < alike.points


def test_a_list_of_points_may_be_said_to_be_computed(kit, tmp_path):
    data = kit.table(kit.wing(), *kit.axes(spacing=0.05))
    said = [
        kit.ledger(tmp_path / str(computed), data, kit.description(plane={"computed": computed}))
        for computed in (True, False)
    ]
    rows = [{row.name: row for row in ledger.rows} for ledger in said]
    assert "numerical_drag" in rows[0]
    assert "numerical_drag" not in rows[1]
    # Without noise numerical terms are all the uncertainty a computed plane has; a measured one's is unknown.
    assert 0 < rows[0]["total_drag"].standard_uncertainty < 0.02 * rows[0]["total_drag"].value
    assert np.isnan(rows[1]["total_drag"].standard_uncertainty)
