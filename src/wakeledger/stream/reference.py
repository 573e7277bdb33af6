"""The undisturbed stream far upstream: one frozen record, and how the survey file's inputs determine it."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from wakeledger.core.errors import InputError, SurveyError, nearest
from wakeledger.stream import airspeed, atmosphere, moist_air
from wakeledger.stream.gas import GAMMA, GAS_CONSTANT, pressure_ratio, sutherland_viscosity, temperature_ratio

#: Mach number from which on the compressible relations are used unless the survey says otherwise.
COMPRESSIBLE_FROM = 0.2
#: Densities from here on are a liquid's, kg/m³; it has no Mach number here.
LIQUID_DENSITY = 400.0
#: Temperatures that pressure and density may imply for air, K; anything else is a wrong unit or a gauge pressure.
IMPLIED_TEMPERATURES = (40.0, 3000.0)

SPEED_KEYS = ("speed", "dynamic_pressure", "mach", "calibrated_airspeed")
PRESSURE_KEYS = ("static_pressure", "pressure_altitude", "altitude")
TEMPERATURE_KEYS = ("temperature", "total_temperature", "isa_offset")
#: Keys of ``[reference]`` that say nothing about the stream.
OTHER_KEYS = ("weight", "load_factor")
KEYS = (*SPEED_KEYS, "density", *PRESSURE_KEYS, *TEMPERATURE_KEYS, "relative_humidity", *OTHER_KEYS)
_POSITIVE = (*SPEED_KEYS, "density", "temperature", "total_temperature")
_PLACE = "[reference]"


@dataclass(frozen=True)
class Reference:
    """State of the undisturbed stream, SI.

    Attributes
    ----------
    speed : float
        Speed U of the stream, m/s, positive.
    density : float
        Density, kg/m³, positive.
    static_pressure : float
        Static pressure, Pa, absolute; 0 where it is unknown and only differences from it are used.
    temperature : float
        Static temperature, K; NaN where it is unknown. Where it is not given but pressure and density imply one that a
        gas can have, it is that one.
    compressible : bool
        Whether the compressible relations are to be used.
    gamma : float
        Ratio of the specific heats.
    gas_constant : float
        Gas constant, J kg⁻¹ K⁻¹, with p = rho R T.

    Raises
    ------
    InputError
        If a value is not physical, or if compressible relations are asked for and the pressure or temperature is
        missing or they contradict the density.
    """

    speed: float
    density: float
    static_pressure: float = 0.0
    temperature: float = math.nan
    compressible: bool = False
    gamma: float = GAMMA
    gas_constant: float = GAS_CONSTANT

    def __post_init__(self) -> None:
        for name, unit in (("speed", "m/s"), ("density", "kg/m^3"), ("gas_constant", "J/(kg K)")):
            value = getattr(self, name)
            if not (value > 0.0 and math.isfinite(value)):
                raise InputError(f"the reference {name} is {value:g} {unit}", remedy="it must be positive and finite")
        if not (self.static_pressure >= 0.0 and math.isfinite(self.static_pressure)):
            raise InputError(
                f"the reference static_pressure is {self.static_pressure:g} Pa",
                remedy="give it absolute, or 0 where only differences from it are used",
            )
        if not (self.gamma > 1.0 and math.isfinite(self.gamma)):
            raise InputError(f"the reference gamma is {self.gamma:g}", remedy="it must be above 1")
        if self.temperature <= 0.0 or math.isinf(self.temperature):
            raise InputError(f"the reference temperature is {self.temperature:g} K", remedy="it must be above 0 K")
        if math.isnan(self.temperature) and self.static_pressure > 0.0 and self.density < LIQUID_DENSITY:
            implied = self.static_pressure / (self.density * self.gas_constant)
            if IMPLIED_TEMPERATURES[0] <= implied <= IMPLIED_TEMPERATURES[1]:
                object.__setattr__(self, "temperature", implied)
        if self.compressible:
            self._check_compressible()

    def _check_compressible(self) -> None:
        if not self.static_pressure > 0.0 or math.isnan(self.mach):
            raise InputError(
                "the compressible relations need the stream's static pressure and temperature",
                remedy="give both, or static_pressure with density, or set compressible = false",
            )
        ratio = self.static_pressure / (self.density * self.gas_constant * self.temperature)
        if abs(ratio - 1.0) > 1e-3:
            raise InputError(
                f"the reference's static pressure, density and temperature disagree: p/(rho R T) is {ratio:.4g}",
                remedy="leave the temperature out, or give the gas_constant that fits",
            )

    @property
    def dynamic_pressure(self) -> float:
        """Dynamic pressure 0.5 rho U^2, Pa (at every Mach number)."""
        return 0.5 * self.density * self.speed * self.speed

    @property
    def sound_speed(self) -> float:
        """Speed of sound, m/s; NaN where the temperature is unknown or the fluid is a liquid."""
        if self.density >= LIQUID_DENSITY:
            return math.nan
        return math.sqrt(self.gamma * self.gas_constant * self.temperature)

    @property
    def mach(self) -> float:
        """Mach number; NaN where it is unknown."""
        return self.speed / self.sound_speed

    @property
    def total_pressure(self) -> float:
        """Total pressure, Pa: p + 0.5 rho U^2, or isentropic where the stream is compressible."""
        if self.compressible:
            return self.static_pressure / pressure_ratio(self.mach, gamma=self.gamma)
        return self.static_pressure + self.dynamic_pressure

    @property
    def heat_capacity(self) -> float:
        """Specific heat at constant pressure, J kg⁻¹ K⁻¹."""
        return self.gamma * self.gas_constant / (self.gamma - 1.0)

    @property
    def total_temperature(self) -> float:
        """Total temperature T + U^2/(2 cp), K; NaN where the temperature is unknown."""
        return self.temperature + 0.5 * self.speed * self.speed / self.heat_capacity

    @property
    def total_enthalpy(self) -> float:
        """Total enthalpy cp T + 0.5 U^2, J/kg; NaN where the temperature is unknown."""
        return self.heat_capacity * self.temperature + 0.5 * self.speed * self.speed

    @property
    def viscosity(self) -> float:
        """Dynamic viscosity of air by Sutherland's law, Pa s; NaN where the temperature is unknown."""
        return math.nan if self.density >= LIQUID_DENSITY else sutherland_viscosity(self.temperature)


def resolve_reference(values: Mapping[str, float], *, compressible: bool | None = None) -> Reference:
    """The stream that a minimal set of inputs determines.

    Parameters
    ----------
    values : mapping of str to float
        SI values under the keys of the survey file's ``[reference]``: one of speed, dynamic_pressure (0.5 rho U^2),
        mach and calibrated_airspeed (position error already corrected); one of static_pressure, pressure_altitude and
        altitude (geometric), where needed; density, or one of temperature, total_temperature and isa_offset, with
        relative_humidity (0 to 1) where known. weight and load_factor are passed over.
    compressible : bool, optional
        Whether to use the compressible relations; None means from Mach `COMPRESSIBLE_FROM` on, where the Mach number is
        known. A caller that perturbs inputs passes what the unperturbed inputs gave, so that no draw changes sides.

    Returns
    -------
    Reference

    Raises
    ------
    SurveyError
        If the inputs determine the stream twice or not at all, or are not physical. It names the keys, and no file.

    Notes
    -----
    Density follows from the CIPM-2007 formula where the humidity is given, else from p = rho R T of dry air; the
    record's gas constant always satisfies p = rho R T. isa_offset is the excess over the standard temperature at
    the same pressure altitude.

    Examples
    --------
    >>> stream = resolve_reference({"mach": 0.5, "pressure_altitude": 5000.0, "isa_offset": 0.0})
    >>> round(stream.speed, 2), round(stream.density, 4), stream.compressible
    (160.26, 0.7361, True)
    """
    _check_values(values)
    speed_key = _check_determined(values)
    try:
        return _solve(values, speed_key, compressible)
    except SurveyError:
        raise
    except InputError as error:
        raise SurveyError(error.found, place=_PLACE, remedy=error.remedy) from error


def _fail(found: str, remedy: str) -> SurveyError:
    return SurveyError(found, place=_PLACE, remedy=remedy)


def _listed(keys: tuple[str, ...], word: str = "and") -> str:
    return keys[0] if len(keys) == 1 else f"{', '.join(keys[:-1])} {word} {keys[-1]}"


def _check_values(values: Mapping[str, float]) -> None:
    for key, value in values.items():
        if key not in KEYS:
            close = nearest(key, KEYS)
            hint = f"did you mean {close}? " if close else ""
            raise _fail(f"{key} is no key of the reference", f"{hint}allowed: {', '.join(KEYS)}")
        if not math.isfinite(value):
            raise _fail(f"{key} is {value:g}", "give a finite value")
        if key in _POSITIVE and value <= 0.0:
            raise _fail(f"{key} is {value:g} (SI)", "it must be positive")
    if values.get("static_pressure", 0.0) < 0.0:
        raise _fail(
            f"static_pressure is {values['static_pressure']:g} Pa",
            "give it absolute; leave it out where the density is given and every pressure is relative_to the stream's",
        )
    if not 0.0 <= values.get("relative_humidity", 0.0) <= 1.0:
        raise _fail(
            f"relative_humidity is {values['relative_humidity']:g}", "it must lie between 0 and 1 (0 % and 100 %)"
        )


def _check_determined(values: Mapping[str, float]) -> str:
    """Refuse a set of keys that says too much or too little; return the one that gives the speed."""
    speeds = tuple(key for key in SPEED_KEYS if key in values)
    pressures = tuple(key for key in PRESSURE_KEYS if key in values)
    temperatures = tuple(key for key in TEMPERATURE_KEYS if key in values)
    for given, group, what in (
        (speeds, SPEED_KEYS, "speed"),
        (pressures, PRESSURE_KEYS, "static pressure"),
        (temperatures, TEMPERATURE_KEYS, "temperature"),
    ):
        if len(given) > 1:
            raise _fail(f"{_listed(given)} each give the stream's {what}", f"keep one of {_listed(group, 'or')}")
    if not speeds:
        raise _fail("nothing gives the stream's speed", f"give one of {_listed(SPEED_KEYS, 'or')}")
    dense, pressed = "density" in values, bool(pressures)
    if dense and pressed and temperatures:
        raise _fail(
            f"density, {pressures[0]} and {temperatures[0]} together say the same thing twice",
            f"leave out density or {temperatures[0]}",
        )
    if dense and "relative_humidity" in values:
        raise _fail("relative_humidity says nothing beside a given density", "leave out one of the two")
    if not dense and not (pressed and temperatures):
        given = (*pressures, *temperatures)
        found = f"{_listed(given)} alone cannot give the density" if given else "nothing gives the stream's density"
        raise _fail(
            found,
            f"give density, or one of {_listed(PRESSURE_KEYS, 'or')} with one of {_listed(TEMPERATURE_KEYS, 'or')}",
        )
    if temperatures == ("isa_offset",) and not pressed:
        raise _fail("isa_offset needs an altitude to be counted from", f"give one of {_listed(PRESSURE_KEYS, 'or')}")
    if values.get("static_pressure") == 0.0 and (not dense or speeds[0] in ("mach", "calibrated_airspeed")):
        raise _fail("static_pressure is 0 Pa", "give it absolute")
    if speeds == ("calibrated_airspeed",) and not pressed:
        raise _fail("calibrated_airspeed needs the static pressure", f"give one of {_listed(PRESSURE_KEYS, 'or')}")
    if speeds == ("mach",) and not (pressed or temperatures):
        raise _fail(
            "mach and density alone cannot give the speed",
            "give static_pressure, or temperature, or speed in place of mach",
        )
    return speeds[0]


def _pressure(values: Mapping[str, float]) -> float:
    """Static pressure, Pa; 0 where nothing gives it."""
    if "pressure_altitude" in values:
        return atmosphere.standard_pressure(values["pressure_altitude"])
    if "altitude" in values:
        offset = values.get("isa_offset", 0.0)
        return atmosphere.standard_pressure(
            atmosphere.pressure_altitude_from_altitude(values["altitude"], isa_offset=offset)
        )
    return values.get("static_pressure", 0.0)


def _solve(values: Mapping[str, float], speed_key: str, compressible: bool | None) -> Reference:
    p = _pressure(values)
    rho = values.get("density", math.nan)
    mach, speed, q = math.nan, values.get("speed", math.nan), values.get("dynamic_pressure", math.nan)
    if speed_key == "mach":
        mach = values["mach"]
    elif speed_key == "calibrated_airspeed":
        mach = float(airspeed.mach_from_calibrated_airspeed(values["calibrated_airspeed"], p))
    elif speed_key == "dynamic_pressure" and rho > 0.0:
        speed = math.sqrt(2.0 * q / rho)
    elif speed_key == "dynamic_pressure":
        mach = math.sqrt(2.0 * q / (GAMMA * p))
    temperature = _temperature(values, p, mach, speed)
    gas_constant = GAS_CONSTANT
    if rho > 0.0 and p > 0.0:
        temperature = _implied_temperature(p, rho)
    elif not rho > 0.0:
        if "relative_humidity" in values:
            rho = moist_air.density(p, temperature, values["relative_humidity"])
            gas_constant = p / (rho * temperature)
        else:
            rho = p / (GAS_CONSTANT * temperature)
    sound = math.sqrt(GAMMA * gas_constant * temperature)
    if math.isnan(speed):
        speed = mach * sound
    if math.isnan(speed):
        raise _fail(f"{speed_key} gives no speed in a liquid", "give speed or dynamic_pressure")
    if compressible is None:
        compressible = rho < LIQUID_DENSITY and speed / sound >= COMPRESSIBLE_FROM
    if compressible and p == 0.0:
        p = rho * gas_constant * temperature
        p = 0.0 if math.isnan(p) else p
    return Reference(
        speed=speed,
        density=rho,
        static_pressure=p,
        temperature=temperature,
        compressible=compressible,
        gas_constant=gas_constant,
    )


def _temperature(values: Mapping[str, float], p: float, mach: float, speed: float) -> float:
    """Static temperature, K, from whichever key gives it; NaN where none does."""
    if "temperature" in values:
        return values["temperature"]
    if "isa_offset" in values:
        altitude = atmosphere.pressure_altitude_from_pressure(p)
        temperature = atmosphere.standard_temperature(altitude, isa_offset=values["isa_offset"])
        if temperature <= 0.0:
            raise _fail(f"isa_offset gives a temperature of {temperature:g} K", "it is a difference of a few kelvin")
        return temperature
    if "total_temperature" not in values:
        return math.nan
    total = values["total_temperature"]
    if not math.isnan(mach):
        return total * temperature_ratio(mach)
    temperature = total - 0.5 * speed * speed * (GAMMA - 1.0) / (GAMMA * GAS_CONSTANT)
    if temperature <= 0.0:
        raise _fail(
            f"a total_temperature of {total:g} K cannot belong to a speed of {speed:g} m/s",
            "check the two; the static temperature would be below 0 K",
        )
    return temperature


def _implied_temperature(p: float, rho: float) -> float:
    if rho >= LIQUID_DENSITY:
        return math.nan
    temperature = p / (rho * GAS_CONSTANT)
    if not IMPLIED_TEMPERATURES[0] <= temperature <= IMPLIED_TEMPERATURES[1]:
        raise _fail(
            f"static_pressure {p:g} Pa with density {rho:g} kg/m^3 would mean a temperature of {temperature:.3g} K",
            "give the static pressure absolute and check both units",
        )
    return temperature
