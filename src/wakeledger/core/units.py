"""Units, at the door only: text with a unit in, bare SI numbers out.

The units library is loaded by the first conversion, never by an import of this module.
"""

from __future__ import annotations

import functools
import math
import re
from typing import TYPE_CHECKING, Any

from wakeledger.core.errors import InputError

if TYPE_CHECKING:
    import pint

#: What each SI unit of the names table measures, and a unit a user would write for it; for messages.
DIMENSIONS: dict[str, tuple[str, str]] = {
    "1": ("a pure number", "0.1 %"),
    "m": ("a length", "12 mm"),
    "m2": ("an area", "0.180 m^2"),
    "m s-1": ("a velocity", "42.0 m/s"),
    "m2 s-2": ("a velocity squared (or a pressure over density)", "3.1 m^2/s^2"),
    "rad": ("an angle", "3 deg"),
    "Pa": ("a pressure", "1013 hPa"),
    "m2 s-1": ("a kinematic viscosity", "1.5e-5 m^2/s"),
    "Pa s": ("a dynamic viscosity", "1.8e-5 Pa s"),
    "kg m-3": ("a density", "1.185 kg/m^3"),
    "K": ("a temperature", "12 degC"),
    "N": ("a force", "11.32 N"),
    "N m": ("a moment", "4.2 N m"),
    "N/m": ("a force per length", "3.1 N/m"),
    "s": ("a time", "40 ms"),
    "kg": ("a mass", "80 kg"),
}

_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)(?![\d.])\s*(.*?)\s*", re.DOTALL)
_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁻⁺", "0123456789-+")
_SUPERSCRIPT_RUN = re.compile("[⁰¹²³⁴⁵⁶⁷⁸⁹⁻⁺]+")
_TEMPERATURE = re.compile(r"(?:°|\bdeg(?:ree)?s?)\s*([CFKR])(?![A-Za-z])")
_PERCENT = {"%": "percent", "‰": "permille"}
_GAUGE = re.compile(r"\b(psia|psig|bara|barg)\b", re.IGNORECASE)
_LONGEST = 80
# Names, a leading 1, products and small powers. The units library would evaluate anything else, 9**9**9**9 included.
_TOKEN = re.compile(r"\*\*\s*\(?[+-]?\d(?:\.\d+)?\)?(?![\d.]|\s*\*\*)|[^\W\d]\w*|1(?!\w|\.)|[\s()/]|\*(?!\*)")


class UnitError(InputError):
    """A unit cannot be read, or measures something else than is needed."""


@functools.cache
def _registry() -> pint.UnitRegistry[float]:
    import pint

    registry: pint.UnitRegistry[float] = pint.UnitRegistry()
    # The trade's words that the library lacks, or takes for something else.
    registry.define("drag_count = 1e-4")
    registry.define("lbm = pound")
    registry.define("psf = pound_force / foot ** 2")
    return registry


def _rewrite(unit: str) -> str:
    """Bring the spellings of UDUNITS and of print to the units library's."""
    text = unit.strip().replace("\u2212", "-").replace("℃", "°C").replace("℉", "°F")
    text = _SUPERSCRIPT_RUN.sub(lambda run: "^" + run.group().translate(_SUPERSCRIPTS), text)
    text = _TEMPERATURE.sub(r"deg\1", text)
    text = text.replace("°", " degree ").replace("·", " ").replace("×", " ")
    for sign, word in _PERCENT.items():
        text = text.replace(sign, word)
    text = re.sub(r"\bcounts?\b", "drag_count", text)
    text = re.sub(r"(?<=[A-Za-z\d])\.(?=[A-Za-z])", " ", text)
    text = text.replace("^", "**")
    # "m s-1" and "kg m3", but not the 2 of "inH2O", which letters follow.
    text = re.sub(r"(?<=[A-Za-z])([+-]?\d+)(?![A-Za-z\d.])", r"**\1", text)
    return text.strip()


def _hint(unit: str, si_unit: str) -> str:
    """What the writer of a wrong unit probably meant; empty where there is no guess."""
    bare = unit.replace(" ", "")
    if si_unit in {"N m", "N/m"} and bare == "Nm":
        return "write 'N m', with a space; "
    if si_unit == "K" and bare in {"C", "F"}:
        return f"write 'deg{bare}'; "
    if bare.startswith("lb/") and si_unit == "Pa":
        return "a pound of force is 'lbf'; "
    if si_unit in {"N", "N m"} and bare in {"lb", "kg", "g"}:
        return f"a force, not a mass: write '{'lbf' if bare == 'lb' else 'kgf'}' or 'N'; "
    if si_unit == "Pa" and bare == "mb":
        return "write 'mbar'; "
    return ""


def _wanted(si_unit: str) -> str:
    what, example = DIMENSIONS.get(si_unit, (f"a quantity in {si_unit}", f"1.0 {si_unit}"))
    return f"{what} is needed here, as in {example!r}"


def _parse(unit: str, si_unit: str) -> tuple[Any, Any]:
    registry = _registry()
    text = _rewrite(unit)
    gauge = _GAUGE.search(text)
    if gauge:
        plain = gauge.group()[:-1]
        raise UnitError(
            f"unit {unit!r} says gauge or absolute, which is no part of a unit",
            remedy=f'write {plain!r}: a pressure is absolute unless relative_to = "static" or "total" says against '
            "what it was measured; add the ambient pressure to a gauge reading that is neither",
        )
    if len(text) > _LONGEST:
        raise UnitError(f"unit {unit[:20]!r}... is too long to be one", remedy=_wanted(si_unit))
    if _TOKEN.sub("", text):
        raise UnitError(f"unit {unit!r} is not known", remedy=_hint(unit, si_unit) + _wanted(si_unit))
    try:
        parsed = registry.parse_units("dimensionless" if text in {"", "1"} else text)
        root = registry.get_root_units(parsed)[1]
    except Exception as error:  # the parser raises tokenizer, assertion and syntax errors besides its own
        raise UnitError(f"unit {unit!r} is not known", remedy=_hint(unit, si_unit) + _wanted(si_unit)) from error
    return parsed, root


@functools.lru_cache(maxsize=512)
def conversion(unit: str, si_unit: str, *, difference: bool = False) -> tuple[float, float]:
    """Scale and offset that bring a number in a unit to SI: value_SI = scale * value + offset.

    Parameters
    ----------
    unit : str
        A unit as users and files write it: ``"mm"``, ``"m/s"``, ``"m s-1"``, ``"slug/ft^3"``, ``"degF"``, ``"%"``.
    si_unit : str
        UDUNITS string of the SI unit that is needed (`wakeledger.core.names`); it says which dimension is allowed.
        Angles are a dimension of their own here, ``"rad"``.
    difference : bool, optional
        True for a difference or an uncertainty, where a temperature's zero point plays no part.

    Returns
    -------
    scale, offset : float
        The offset is zero but for temperatures.

    Raises
    ------
    UnitError
        If the unit is unknown, of another dimension, or says gauge or absolute.

    Examples
    --------
    >>> conversion("km/h", "m s-1")
    (0.2777777777777778, 0.0)
    >>> conversion("degC", "K")
    (1.0, 273.15)
    """
    registry = _registry()
    parsed, root = _parse(unit, si_unit)
    target = registry.parse_units("dimensionless" if si_unit == "1" else _rewrite(si_unit))
    if root != registry.get_root_units(target)[1]:
        raise UnitError(f"unit {unit!r} measures {_measures(root)}", remedy=_hint(unit, si_unit) + _wanted(si_unit))
    zero, one, two = (float(registry.Quantity(value, parsed).to(target).magnitude) for value in (0.0, 1.0, 2.0))
    if registry.Quantity(1.0, parsed)._is_multiplicative:
        return one, 0.0
    if not math.isclose(two - one, one - zero, rel_tol=1e-9):
        raise UnitError(f"unit {unit!r} is logarithmic", remedy=_wanted(si_unit))
    scale = float(registry.Quantity(1.0, f"delta_{parsed}").to(target).magnitude)
    return scale, 0.0 if difference else zero


def _measures(root: Any) -> str:
    registry = _registry()
    for si_unit, (what, _) in DIMENSIONS.items():
        known = registry.parse_units("dimensionless" if si_unit == "1" else _rewrite(si_unit))
        if registry.get_root_units(known)[1] == root:
            return what
    return f"something else ({root:~})"


def split(text: str) -> tuple[float, str]:
    """Number and unit of a quantity as written.

    Parameters
    ----------
    text : str
        ``"42.0 m/s"``, ``"5%"``, ``"0.1"``.

    Returns
    -------
    value : float
        The number.
    unit : str
        What follows it, empty where nothing does.

    Raises
    ------
    UnitError
        If the text does not begin with a finite number.

    Examples
    --------
    >>> split("42.0 m/s")
    (42.0, 'm/s')
    """
    match = _NUMBER.fullmatch(text.replace("\u2212", "-"))
    if match is None:
        raise UnitError(
            f"{text!r} does not begin with a number", remedy="write a number and its unit, as in '42.0 m/s'"
        )
    value, unit = float(match.group(1)), match.group(2)
    if re.match(r"[,\d'_]", unit):
        raise UnitError(
            f"the number in {text!r} cannot be read", remedy="use a decimal point and no thousands separators"
        )
    if not math.isfinite(value):
        raise UnitError(f"{text!r} is not a finite number", remedy="write a number and its unit, as in '42.0 m/s'")
    return value, unit


def to_si(text: str, si_unit: str, *, difference: bool = False) -> float:
    """A quantity written with its unit, in SI.

    Parameters
    ----------
    text : str
        Number and unit: ``"42.0 m/s"``, ``"3 deg"``, ``"0.1 %"``, ``"12 degC"``, ``"1013 hPa"``.
    si_unit : str
        UDUNITS string of the SI unit that is needed, ``"1"`` for a pure number.
    difference : bool, optional
        True for a difference or an uncertainty (``"2 degC"`` is then 2 K).

    Returns
    -------
    float
        The value in `si_unit`; angles in rad.

    Raises
    ------
    UnitError
        If the text is no quantity, has no unit where one is needed, or its unit is of another dimension.

    Examples
    --------
    >>> to_si("12 degC", "K")
    285.15
    """
    value, unit = split(text)
    if not unit and si_unit != "1":
        raise UnitError(f"{text.strip()!r} has no unit", remedy=_wanted(si_unit))
    scale, offset = conversion(unit or "1", si_unit, difference=difference)
    result = scale * value + offset
    if not math.isfinite(result):
        raise UnitError(f"{text!r} is not a finite number", remedy=_wanted(si_unit))
    return result
