"""How a value of the survey file is written: quantities with units, points, shapes, and the base of every table."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Annotated, Any

import numpy as np
from pydantic import BaseModel, ConfigDict, PlainValidator, model_validator
from pydantic_core import PydanticCustomError

from wakeledger.core.errors import nearest
from wakeledger.core.grid import Array
from wakeledger.core.units import DIMENSIONS, UnitError, to_si

Validator = Callable[[Any], Any]


def fail(found: str, remedy: str, *keys: str | int) -> PydanticCustomError:
    """The error a check of the survey file raises.

    Parameters
    ----------
    found : str
        What was found.
    remedy : str
        What is allowed and what to do.
    *keys : str or int
        Where it is, below the table or value being checked.

    Returns
    -------
    PydanticCustomError
        To be raised inside a validator; `wakeledger.run.config.errors` turns it into one line.
    """
    return PydanticCustomError("survey", "{found}", {"found": found, "remedy": remedy, "keys": keys})


def below(error: PydanticCustomError, *keys: str | int) -> PydanticCustomError:
    """The same error, placed below further keys."""
    context = error.context or {}
    return fail(context["found"], context["remedy"], *keys, *context["keys"])


def kind_of(value: object) -> str:
    """What a TOML value is, in the words of the format.

    Examples
    --------
    >>> kind_of(3.0), kind_of({})
    ('the bare number 3.0', 'a table')
    """
    if isinstance(value, bool):
        return f"the truth value {str(value).lower()}"
    if isinstance(value, int | float):
        return f"the bare number {value}"
    if isinstance(value, str):
        return f"the text {value!r}"
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list | tuple):
        return "a list"
    return f"the date {value}"


class Table(BaseModel):
    """A table of the survey file: frozen, strict, no key it does not know."""

    model_config = ConfigDict(
        strict=True, extra="forbid", frozen=True, arbitrary_types_allowed=True, allow_inf_nan=False
    )

    @classmethod
    def keys(cls) -> dict[str, Any]:
        """Keys of the table as written, with their field."""
        return {field.alias or name: field for name, field in cls.model_fields.items()}

    @classmethod
    def written(cls, key: str) -> str:
        """How messages name a key of this table."""
        return f"key {key!r}"

    @model_validator(mode="before")
    @classmethod
    def _known_and_complete(cls, data: Any) -> Any:
        if not isinstance(data, dict):
            raise fail(f"{kind_of(data)} stands where a table is needed", f"its keys: {', '.join(cls.keys())}")
        keys = cls.keys()
        for key in data:
            if key not in keys:
                close = nearest(key, keys)
                meant = f"did you mean {close!r}? " if close else ""
                raise fail(f"unknown key {key!r}", f"{meant}known keys: {', '.join(keys)}", key)
        for key, field in keys.items():
            if field.is_required() and key not in data:
                raise fail(f"{cls.written(key)} is missing", f"add {field.description or key}")
        return data


def tables(value: Any) -> Any:
    """A list of tables, as a tuple; a single table is a mistake."""
    if isinstance(value, dict):
        raise fail(
            "a single table stands where a list of tables is needed", "write its heading in double brackets, [[...]]"
        )
    if not isinstance(value, list):
        raise fail(
            f"{kind_of(value)} stands where a list of tables is needed", "write a heading in double brackets, [[...]]"
        )
    return tuple(value)


def one_or_more_tables(value: Any) -> Any:
    """A single table, or a list of tables, as a tuple."""
    if isinstance(value, dict):
        return (value,)
    if not isinstance(value, list) or not value:
        raise fail(f"{kind_of(value)} stands where a table is needed", "write a heading in brackets, [...] or [[...]]")
    return tuple(value)


def parse_quantity(
    value: Any, si_unit: str, *, difference: bool = False, above: float | None = None, least: float | None = None
) -> float:
    """One quantity of the survey file in SI.

    Parameters
    ----------
    value : object
        What stands in the file; text with a unit, or a plain number where `si_unit` is ``"1"``.
    si_unit : str
        The SI unit it is brought to.
    difference : bool, optional
        True for differences and uncertainties.
    above, least : float, optional
        Limits in SI, excluded and included.

    Returns
    -------
    float

    Raises
    ------
    PydanticCustomError
        If it is no such quantity.
    """
    what, example = DIMENSIONS[si_unit]
    if isinstance(value, str):
        try:
            result = to_si(value, si_unit, difference=difference)
        except UnitError as error:
            raise fail(error.found, error.remedy or "") from error
    elif si_unit == "1" and isinstance(value, int | float) and not isinstance(value, bool):
        result = float(value)
        if not np.isfinite(result):
            raise fail(f"{value} is not a finite number", "write a finite number")
    else:
        raise fail(
            f"{kind_of(value)} stands where {what} is needed", f"write it as text with its unit, as in {example!r}"
        )
    if above is not None and not result > above:
        raise fail(f"{value!r} is not allowed", f"{what} greater than {above:g} is needed here")
    if least is not None and not result >= least:
        raise fail(f"{value!r} is not allowed", f"{what} of at least {least:g} is needed here")
    return result


def quantity(
    si_unit: str, *, difference: bool = False, above: float | None = None, least: float | None = None
) -> PlainValidator:
    """Annotation of a quantity; see `parse_quantity`."""
    return PlainValidator(lambda value: parse_quantity(value, si_unit, difference=difference, above=above, least=least))


Number = Annotated[float, quantity("1")]
PositiveNumber = Annotated[float, quantity("1", above=0.0)]
NumberFromZero = Annotated[float, quantity("1", least=0.0)]
Length = Annotated[float, quantity("m")]
PositiveLength = Annotated[float, quantity("m", above=0.0)]
LengthFromZero = Annotated[float, quantity("m", least=0.0)]
Area = Annotated[float, quantity("m2", above=0.0)]
Angle = Annotated[float, quantity("rad")]
Speed = Annotated[float, quantity("m s-1", above=0.0)]
Pressure = Annotated[float, quantity("Pa")]
PositivePressure = Annotated[float, quantity("Pa", above=0.0)]
Density = Annotated[float, quantity("kg m-3", above=0.0)]
Temperature = Annotated[float, quantity("K", above=0.0)]
TemperatureDifference = Annotated[float, quantity("K", difference=True)]
Force = Annotated[float, quantity("N", above=0.0)]
Duration = Annotated[float, quantity("s", least=0.0)]


def _sequence(value: Any, what: str) -> Sequence[Any]:
    if not isinstance(value, list | tuple):
        raise fail(f"{kind_of(value)} stands where a list is needed", f"write {what}")
    return value


def _item(value: Any, parse: Validator, index: int) -> Any:
    """Parse one item of a list, so that an error names which."""
    try:
        return parse(value)
    except PydanticCustomError as error:
        raise below(error, index) from error


def listed(parse: Validator, what: str, *, least: int = 1, most: int | None = None) -> Validator:
    """A validator of a list whose items `parse` reads.

    Parameters
    ----------
    parse : callable
        Reads one item.
    what : str
        How such a list is written, for messages.
    least, most : int, optional
        How many items it may have.

    Returns
    -------
    callable
        From the list to a tuple.
    """

    def validator(value: Any) -> tuple[Any, ...]:
        items = _sequence(value, what)
        if len(items) < least or (most is not None and len(items) > most):
            raise fail(f"a list of {len(items)} stands here", f"write {what}")
        return tuple(_item(item, parse, index) for index, item in enumerate(items))

    return validator


def _length(value: Any) -> float:
    return parse_quantity(value, "m")


parse_point = listed(_length, 'a point as ["y", "z"], for example ["0 m", "12 mm"]', least=2, most=2)


def _ascending(value: Any) -> tuple[float, float]:
    low, high = listed(_length, 'two walls as ["-1.2 m", "1.2 m"]', least=2, most=2)(value)
    if not high > low:
        raise fail(f"{value!r} does not ascend", "write the lower position first")
    return low, high


def frozen(rows: Any) -> Array:
    """A read-only float array."""
    array = np.array(rows, dtype=float)
    array.setflags(write=False)
    return array


def parse_points(value: Any, *, least: int = 2) -> Array:
    """A list of points as a read-only array of shape (n, 2), y and z in m."""
    what = 'a list of points as [["-0.6 m", "0 m"], ["0.6 m", "0 m"]]'
    return frozen(listed(parse_point, f"{what}, at least {least}", least=least)(value))


def parse_shape(value: Any, *, least: int = 2) -> Array:
    """A box (two opposite corners) or a polygon.

    Parameters
    ----------
    value : list
        Two points, or three and more.
    least : int, optional
        3 where only a polygon will do.

    Returns
    -------
    ndarray, shape (2, 2) or (n, 2)
        The lower port and upper starboard corner of a box, or the vertices of a polygon; (y, z) in m, read-only.

    Raises
    ------
    PydanticCustomError
        If it is neither, or encloses no area.
    """
    points = parse_points(value, least=least)
    low, high = points.min(axis=0), points.max(axis=0)
    y, z = points.T
    extent = float(np.prod(high - low))
    area = extent if len(points) == 2 else 0.5 * abs(float(np.sum(y * np.roll(z, -1) - z * np.roll(y, -1))))
    if area <= 1e-12 * extent or extent == 0.0:
        raise fail("the shape encloses no area", "give two opposite corners of a box, or at least three vertices")
    return frozen([low, high]) if len(points) == 2 else points


def _shapes(value: Any) -> tuple[Array, ...]:
    what = 'a list of shapes, each two corners of a box or a polygon: [[["-0.3 m", "-0.1 m"], ["0.3 m", "0.1 m"]]]'
    items = _sequence(value, what)
    if items and isinstance(items[0], list | tuple) and items[0] and isinstance(items[0][0], str):
        return (parse_shape(value),)
    return tuple(listed(parse_shape, what)(items))


Point = Annotated[tuple[float, float], PlainValidator(parse_point)]
Walls = Annotated[tuple[float, float], PlainValidator(_ascending)]
Polyline = Annotated[Array, PlainValidator(parse_points)]
Shape = Annotated[Array, PlainValidator(parse_shape)]
Polygon = Annotated[Array, PlainValidator(lambda value: parse_shape(value, least=3))]
Shapes = Annotated[tuple[Array, ...], PlainValidator(_shapes)]


def parse_text(value: Any) -> str:
    """Text that is not empty."""
    if not isinstance(value, str):
        raise fail(f"{kind_of(value)} stands where text is needed", "write it in quotation marks")
    if not value.strip():
        raise fail("the text is empty", "write some text between the quotation marks")
    return value


def _label(value: Any) -> str:
    if isinstance(value, bool | float | dict | list):
        raise fail(f"{kind_of(value)} stands where a label is needed", "write it as text in quotation marks")
    return str(value)


Text = Annotated[str, PlainValidator(parse_text)]
Label = Annotated[str, PlainValidator(_label)]
