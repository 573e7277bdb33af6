"""The reference state: every set of inputs gives the same stream, too many or too few are refused."""

import math
import re
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from wakeledger.core.errors import InputError, SurveyError
from wakeledger.stream import airspeed, atmosphere, moist_air
from wakeledger.stream.gas import GAMMA, GAS_CONSTANT
from wakeledger.stream.reference import COMPRESSIBLE_FROM, Reference, resolve_reference


def test_low_speed_tunnel():
    stream = resolve_reference({"speed": 42.0, "density": 1.185, "static_pressure": 100_600.0})
    assert not stream.compressible
    assert stream.dynamic_pressure == pytest.approx(0.5 * 1.185 * 42.0**2, rel=1e-14)
    assert stream.total_pressure == pytest.approx(100_600.0 + stream.dynamic_pressure, rel=1e-14)
    assert stream.mach == pytest.approx(42.0 / math.sqrt(1.4 * 100_600.0 / 1.185), rel=1e-14)
    assert stream.temperature == pytest.approx(100_600.0 / (1.185 * GAS_CONSTANT), rel=1e-14)


def test_density_alone_leaves_the_rest_unknown():
    stream = resolve_reference({"speed": 42.0, "density": 1.2})
    assert stream.static_pressure == 0.0
    assert not stream.compressible
    for name in ("mach", "temperature", "sound_speed", "total_temperature", "total_enthalpy", "viscosity"):
        assert math.isnan(getattr(stream, name))


# One stream of Mach 0.5 at 5000 m: table values of check sets above, reached along every path.
M, H = 0.5, 5000.0
T = atmosphere.standard_temperature(H)
P = atmosphere.standard_pressure(H)
RHO = P / (GAS_CONSTANT * T)
U = M * math.sqrt(GAMMA * GAS_CONSTANT * T)
Q = 0.5 * RHO * U**2
TT = T * (1 + 0.2 * M**2)
CAS = airspeed.calibrated_airspeed_from_mach(M, P)
Z = atmosphere.geometric_altitude(H)
SPEEDS = [{"speed": U}, {"dynamic_pressure": Q}, {"mach": M}, {"calibrated_airspeed": CAS}]
GASES = [
    {"density": RHO, "static_pressure": P},
    {"density": RHO, "pressure_altitude": H},
    {"temperature": T, "static_pressure": P},
    {"total_temperature": TT, "static_pressure": P},
    {"isa_offset": 0.0, "static_pressure": P},
    {"isa_offset": 0.0, "pressure_altitude": H},
    {"isa_offset": 0.0, "altitude": Z},
    {"total_temperature": TT, "pressure_altitude": H},
    {"total_temperature": TT, "altitude": Z},
    {"temperature": T, "density": RHO},
    {"total_temperature": TT, "density": RHO},
]


@pytest.mark.parametrize("speed", SPEEDS, ids=lambda values: next(iter(values)))
@pytest.mark.parametrize("air", GASES, ids="+".join)
def test_every_path_gives_the_same_stream(speed, air):
    if "calibrated_airspeed" in speed and not {"static_pressure", "pressure_altitude", "altitude"} & set(air):
        pytest.skip("the calibrated airspeed needs a pressure")
    stream = resolve_reference(speed | air | {"weight": 5000.0, "load_factor": 1.0})
    assert stream.compressible
    # rounding only, amplified by at most cp T / (U^2/2) = 20 in the paths through total temperature
    assert stream.speed == pytest.approx(U, rel=1e-11)
    assert stream.density == pytest.approx(RHO, rel=1e-11)
    assert stream.static_pressure == pytest.approx(P, rel=1e-11)
    assert stream.temperature == pytest.approx(T, rel=1e-11)
    assert stream.total_temperature == pytest.approx(TT, rel=1e-11)
    # NACA Report 1135 at Mach 0.5: p/pt = 0.843019 (from memory, recomputed)
    assert P / stream.total_pressure == pytest.approx(0.843019, abs=0.51e-6)
    assert stream.total_enthalpy == pytest.approx(stream.heat_capacity * TT, rel=1e-11)


def test_published_flight_case():
    """CAS 250 kt at 30 000 ft: M 0.66811, TAS 393.731 kt (derived from the standard formula)."""
    knot = 1852.0 / 3600.0
    stream = resolve_reference({"calibrated_airspeed": 250 * knot, "pressure_altitude": 9144.0, "isa_offset": 0.0})
    assert stream.mach == pytest.approx(0.66811, abs=1e-5)
    assert stream.speed / knot == pytest.approx(393.731, rel=1e-5)


def test_warm_day():
    cold = resolve_reference({"mach": 0.3, "pressure_altitude": 3000.0, "isa_offset": 0.0})
    warm = resolve_reference({"mach": 0.3, "pressure_altitude": 3000.0, "isa_offset": 15.0})
    assert warm.static_pressure == cold.static_pressure
    assert warm.temperature == pytest.approx(cold.temperature + 15.0, rel=1e-14)
    assert warm.density / cold.density == pytest.approx(cold.temperature / warm.temperature, rel=1e-12)


def test_humid_tunnel():
    """20 deg C, 101 325 Pa, 50 %: 1.199314 kg/m3 (derived from CIPM-2007 as published)."""
    stream = resolve_reference(
        {"dynamic_pressure": 900.0, "temperature": 293.15, "static_pressure": 101_325.0, "relative_humidity": 0.5}
    )
    assert stream.density == pytest.approx(1.199314, abs=0.51e-6)
    assert stream.speed == pytest.approx(math.sqrt(1800.0 / 1.199314), rel=1e-6)
    assert stream.density == moist_air.density(101_325.0, 293.15, 0.5)
    assert stream.density * stream.gas_constant * stream.temperature == pytest.approx(101_325.0, rel=1e-14)


def test_compressible_choice():
    air = {"temperature": 293.15, "static_pressure": 1e5}
    assert not resolve_reference(air | {"mach": COMPRESSIBLE_FROM - 1e-6}).compressible
    assert resolve_reference(air | {"mach": COMPRESSIBLE_FROM + 1e-6}).compressible
    assert not resolve_reference(air | {"mach": 0.6}, compressible=False).compressible
    assert resolve_reference(air | {"mach": 0.1}, compressible=True).compressible
    incompressible = resolve_reference(air | {"mach": 0.6}, compressible=False)
    assert incompressible.total_pressure == pytest.approx(1e5 + incompressible.dynamic_pressure, rel=1e-14)
    with pytest.raises(SurveyError, match="static pressure and temperature"):
        resolve_reference({"speed": 100.0, "density": 1.2}, compressible=True)


def test_water_has_no_mach_number():
    stream = resolve_reference({"speed": 5.0, "density": 998.0, "static_pressure": 120_000.0})
    assert math.isnan(stream.mach)
    assert not stream.compressible
    assert stream.total_pressure == pytest.approx(120_000.0 + 0.5 * 998.0 * 25.0)


@pytest.mark.parametrize(
    ("values", "named"),
    [
        # nothing, or too little
        ({}, ["speed", "dynamic_pressure", "mach", "calibrated_airspeed"]),
        ({"density": 1.2}, ["speed", "mach"]),
        ({"speed": 42.0}, ["density", "static_pressure", "temperature"]),
        ({"speed": 42.0, "temperature": 290.0}, ["temperature", "density", "static_pressure"]),
        ({"speed": 42.0, "static_pressure": 1e5}, ["static_pressure", "temperature"]),
        ({"speed": 42.0, "pressure_altitude": 3e3}, ["pressure_altitude", "isa_offset", "total_temperature"]),
        ({"mach": 0.1, "density": 1.2}, ["mach", "density", "static_pressure"]),
        ({"calibrated_airspeed": 60.0, "density": 1.2, "temperature": 290.0}, ["calibrated_airspeed", "altitude"]),
        ({"speed": 60.0, "density": 1.2, "isa_offset": 0.0}, ["isa_offset", "altitude"]),
        # too much
        ({"speed": 42.0, "mach": 0.1, "density": 1.2}, ["speed", "mach"]),
        ({"speed": 42.0, "dynamic_pressure": 1e3, "density": 1.2}, ["speed", "dynamic_pressure"]),
        ({"speed": 42.0, "density": 1.2, "static_pressure": 1e5, "temperature": 290.0}, ["density", "temperature"]),
        ({"speed": 42.0, "density": 1.2, "relative_humidity": 0.4}, ["relative_humidity", "density"]),
        ({"speed": 42.0, "static_pressure": 1e5, "altitude": 10.0, "isa_offset": 0.0}, ["static_pressure", "altitude"]),
        (
            {"speed": 42.0, "static_pressure": 1e5, "temperature": 290.0, "total_temperature": 291.0},
            ["temperature", "total_temperature"],
        ),
        # not physical
        ({"speed": -42.0, "density": 1.2}, ["speed", "positive"]),
        ({"speed": 42.0, "density": 0.0}, ["density", "positive"]),
        ({"speed": 42.0, "density": math.nan}, ["density", "finite"]),
        ({"speed": math.inf, "density": 1.2}, ["speed", "finite"]),
        ({"speed": 42.0, "density": 1.2, "static_pressure": -200.0}, ["static_pressure", "absolute"]),
        ({"speed": 42.0, "density": 1.2, "static_pressure": 300.0}, ["static_pressure", "absolute"]),
        ({"speed": 42.0, "temperature": 290.0, "static_pressure": 0.0}, ["static_pressure", "absolute"]),
        ({"mach": 0.4, "density": 1.2, "static_pressure": 0.0}, ["static_pressure", "absolute"]),
        ({"speed": 42.0, "temperature": -3.0, "static_pressure": 1e5}, ["temperature", "positive"]),
        (
            {"speed": 42.0, "temperature": 290.0, "static_pressure": 1e5, "relative_humidity": 45.0},
            ["relative_humidity", "between 0 and 1"],
        ),
        ({"speed": 900.0, "total_temperature": 290.0, "static_pressure": 1e5}, ["total_temperature", "speed"]),
        ({"mach": 0.4, "pressure_altitude": 2e5, "isa_offset": 0.0}, ["altitude", "covers"]),
        ({"mach": 0.4, "pressure_altitude": 2e3, "isa_offset": -300.0}, ["isa_offset"]),
        # mistyped
        ({"sped": 42.0, "density": 1.2}, ["sped", "did you mean speed"]),
    ],
)
def test_refusals_name_the_keys(values, named):
    with pytest.raises(SurveyError) as caught:
        resolve_reference(values)
    for word in named:
        assert re.search(rf"\b{word}", caught.value.line), caught.value.line
    assert caught.value.place == "[reference]"
    assert caught.value.file is None
    assert caught.value.located(file="a.toml").line.startswith("a.toml, [reference]: ")
    assert caught.value.remedy


def test_perturbing_one_input_moves_what_follows_from_it():
    base = {"dynamic_pressure": 800.0, "temperature": 293.0, "static_pressure": 99_000.0, "relative_humidity": 0.4}
    nominal = resolve_reference(base)
    step = 1e-4
    moved = resolve_reference(base | {"static_pressure": 99_000.0 * (1 + step)})
    # rho ~ p and U ~ 1/sqrt(rho) at fixed q; the vapour's share of the density (0.3 %) does not scale with p
    assert moved.density / nominal.density - 1 == pytest.approx(step, rel=0.01)
    assert moved.speed / nominal.speed - 1 == pytest.approx(-step / 2, rel=0.01)
    assert moved.dynamic_pressure == pytest.approx(nominal.dynamic_pressure, rel=1e-13)
    warmer = resolve_reference(base | {"temperature": 293.0 * (1 + step)})
    # hotter air also holds more vapour at the same relative humidity: d ln rho/d ln T = -1.06
    assert warmer.density / nominal.density - 1 == pytest.approx(-1.06 * step, rel=0.02)


@given(
    mach=st.floats(0.05, 2.5),
    altitude=st.floats(-500.0, 18_000.0),
    offset=st.floats(-30.0, 30.0),
)
def test_round_trip_through_measured_quantities(mach, altitude, offset):
    stream = resolve_reference({"mach": mach, "pressure_altitude": altitude, "isa_offset": offset}, compressible=True)
    again = resolve_reference(
        {
            "calibrated_airspeed": float(airspeed.calibrated_airspeed_from_mach(mach, stream.static_pressure)),
            "static_pressure": stream.static_pressure,
            "total_temperature": stream.total_temperature,
        },
        compressible=True,
    )
    # at Mach 0.05 the impact pressure is 2e-3 of the pressure: 500 times rounding, twice
    assert again.speed == pytest.approx(stream.speed, rel=1e-9)
    assert again.total_pressure == pytest.approx(stream.total_pressure, rel=1e-9)


def test_record_for_library_users():
    stream = Reference(speed=42.0, density=1.185, static_pressure=0.0, temperature=math.nan, compressible=False)
    assert math.isnan(stream.mach)
    assert stream.total_pressure == stream.dynamic_pressure
    assert replace(stream, speed=21.0).dynamic_pressure == pytest.approx(stream.dynamic_pressure / 4)
    assert stream.gas_constant == GAS_CONSTANT


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"speed": 0.0, "density": 1.2}, "speed"),
        ({"speed": math.nan, "density": 1.2}, "speed"),
        ({"speed": 42.0, "density": -1.2}, "density"),
        ({"speed": 42.0, "density": 1.2, "static_pressure": -1.0}, "static_pressure"),
        ({"speed": 42.0, "density": 1.2, "temperature": 0.0}, "temperature"),
        ({"speed": 42.0, "density": 1.2, "gamma": 1.0}, "gamma"),
        ({"speed": 42.0, "density": 1.2, "gas_constant": 0.0}, "gas_constant"),
        ({"speed": 42.0, "density": 1.2, "compressible": True}, "static pressure and temperature"),
        (
            {"speed": 99.0, "density": 1.2, "static_pressure": 1e5, "temperature": 320.0, "compressible": True},
            "disagree",
        ),
    ],
)
def test_record_is_checked_on_construction(values, message):
    with pytest.raises(InputError, match=message):
        Reference(**values)
