"""What is known of a test section beforehand: solid blockage, buoyancy and support tare, each with its uncertainty.

`BoundaryTable` inherits `TunnelCorrections`, so that its keys stand in ``[boundary]``:

    solid_blockage = { value = "0.3 %", standard_uncertainty = "0.1 %" }
    buoyancy = { value = "0.12 N", standard_uncertainty = "0.03 N" }
    support_tare = { value = "0.40 N", standard_uncertainty = "0.05 N" }        # or { survey = "struts.toml" }

Values are text with a unit; an uncertainty in per cent is of the value, except that of a share, which is in per cent of
the speed as the share is. A value without an uncertainty is refused: it is never taken as exact.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING, Any, ClassVar

from pydantic import Field, PrivateAttr, model_validator
from pydantic_core import PydanticCustomError

from wakeledger.core.units import DIMENSIONS
from wakeledger.run.config.quantities import PositiveNumber, Table, Text, below, fail, parse_quantity

if TYPE_CHECKING:
    from wakeledger.run.config.plane import Plane
    from wakeledger.run.config.tables import BoundaryTable


#: A larger share of the speed is no correction any more, or lacks its per cent sign.
_LARGEST_SHARE = 0.1


@dataclass(frozen=True)
class TunnelInput:
    """One given value as the chain takes it.

    Attributes
    ----------
    value, standard_uncertainty : float
        SI, k = 1.
    label : str
        Name of its source in the budget.
    """

    value: float
    standard_uncertainty: float
    label: str

    def times(self, factor: float) -> TunnelInput:
        """A multiple of it."""
        return TunnelInput(factor * self.value, factor * self.standard_uncertainty, self.label)


class GivenValue(Table):
    """A value that somebody else found, with its uncertainty.

    Attributes
    ----------
    value, standard_uncertainty : float
        SI, k = 1.
    """

    si_unit: ClassVar[str] = "N"
    least: ClassVar[float | None] = None

    written_value: Any = Field(default=None, alias="value")
    written_standard: Any = Field(default=None, alias="standard_uncertainty")
    written_expanded: Any = Field(default=None, alias="expanded_uncertainty")
    coverage_factor: PositiveNumber | None = None
    _value: float = PrivateAttr(default=math.nan)
    _uncertainty: float = PrivateAttr(default=math.nan)

    @property
    def value(self) -> float:
        """The value, SI."""
        return self._value

    @property
    def standard_uncertainty(self) -> float:
        """Its standard uncertainty, SI, k = 1."""
        return self._uncertainty

    @model_validator(mode="after")
    def _value_with_uncertainty(self) -> GivenValue:
        if self.written_value is None:
            raise fail("key 'value' is missing", f"add value = {self._example()!r}")
        self._value = self._read("value", self.written_value, least=self.least)
        standard, expanded = self.written_standard, self.written_expanded
        if standard is None and expanded is None:
            raise fail(
                "key 'standard_uncertainty' is missing",
                "add it (k = 1), or expanded_uncertainty with coverage_factor: a value given is never taken as exact",
            )
        if standard is not None and expanded is not None:
            raise fail(
                "standard_uncertainty and expanded_uncertainty are both given", "keep one", "expanded_uncertainty"
            )
        if (expanded is None) != (self.coverage_factor is None):
            missing = "coverage_factor" if self.coverage_factor is None else "expanded_uncertainty"
            raise fail(f"key {missing!r} is missing", "expanded_uncertainty and coverage_factor go together")
        if standard is not None:
            self._uncertainty = self._amount("standard_uncertainty", standard)
        else:
            self._uncertainty = self._amount("expanded_uncertainty", expanded) / (self.coverage_factor or 1.0)
        return self

    def _amount(self, key: str, written: Any) -> float:
        """An uncertainty; per cent are of the value unless the value itself is a share."""
        if self.si_unit != "1" and isinstance(written, str) and written.strip().endswith("%"):
            return abs(self._value) * parse_below(written, "1", key, least=0.0)
        return self._read(key, written, difference=True, least=0.0)

    def _read(self, key: str, written: Any, *, difference: bool = False, least: float | None = None) -> float:
        if self.si_unit == "1" and not isinstance(written, str):
            # 0.3 could be meant as 0.3 %: the unit decides.
            raise fail("a bare number stands here", f"write it as text, as in {self._example()!r}", key)
        return parse_below(written, self.si_unit, key, difference=difference, least=least)

    @classmethod
    def _example(cls) -> str:
        return DIMENSIONS[cls.si_unit][1]


class GivenShare(GivenValue):
    """A given share of the stream's speed."""

    si_unit: ClassVar[str] = "1"

    @model_validator(mode="after")
    def _is_small(self) -> GivenShare:
        if not abs(self.value) < _LARGEST_SHARE:
            raise fail(
                f"{self.written_value!r} is {self.value:.0%} of the speed",
                f"a share below {_LARGEST_SHARE:.0%} is needed, as in '0.3 %': corrections are for small models",
                "value",
            )
        return self


class GivenForce(GivenValue):
    """A given force along the stream, positive downstream."""


class SupportTare(GivenForce):
    """Drag of the model's support: a force, or a survey of the support alone.

    Attributes
    ----------
    survey : str or None
        Survey file of the support without the model; its profile drag is the tare.
    """

    survey: Text | None = None

    @model_validator(mode="before")
    @classmethod
    def _value_or_survey(cls, data: Any) -> Any:
        if isinstance(data, dict) and "survey" in data:
            for key in ("value", "standard_uncertainty", "expanded_uncertainty", "coverage_factor"):
                if key in data:
                    raise fail(f"survey and {key} are both given", "keep the survey, or the value with its own", key)
        return data

    @model_validator(mode="after")
    def _value_with_uncertainty(self) -> SupportTare:
        if self.survey is None:
            GivenValue._value_with_uncertainty(self)  # type: ignore[operator]
        return self


#: Inputs that errors of given values act on, as sources name them, with their labels in the budget.
GIVEN: Mapping[str, str] = MappingProxyType(
    {"solid_blockage": "solid blockage", "buoyancy": "buoyancy", "support_tare": "support tare"}
)


class TunnelCorrections(Table):
    """What is known of the test section beforehand; part of ``[boundary]``.

    Attributes
    ----------
    solid_blockage : GivenShare or None
        What the model's volume between the walls adds to the stream's speed at the model, as a share ε of it: dynamic
        pressures grow by (1 + ε + u_b/U)². For a section, Allen and Vincenti's Λσ.
    buoyancy : GivenForce or None
        Drag that the empty test section's falling static pressure puts on the model, positive downstream. It leaves no
        wake, so that no row holds it; it is taken off a balance's drag before the two are compared.
    support_tare : SupportTare or None
        Drag of the support inside the surveyed wake, positive downstream; taken off the profile and the total drag.

    Notes
    -----
    Forces of a half model are those of the half that stands in the stream, as a balance would read them.
    """

    solid_blockage: GivenShare | None = None
    buoyancy: GivenForce | None = None
    support_tare: SupportTare | None = None

    def given_values(self) -> dict[str, TunnelInput]:
        """The given values by the name of their input (``boundary.solid_blockage`` and so on); surveys left out."""
        found = {}
        for name, label in GIVEN.items():
            entry: GivenValue | None = getattr(self, name)
            if entry is not None and math.isfinite(entry.value):
                found[f"boundary.{name}"] = TunnelInput(entry.value, entry.standard_uncertainty, label)
        return found

    def chain_inputs(self) -> dict[str, TunnelInput]:
        """Those of the given values that act on the rows, forces of a half model doubled as the ledger does."""
        factor = 2.0 if getattr(self, "reflection", None) == "y" else 1.0
        found = self.given_values()
        found.pop("boundary.buoyancy", None)
        return {name: each if name == "boundary.solid_blockage" else each.times(factor) for name, each in found.items()}

    @model_validator(mode="after")
    def _walls_block(self) -> TunnelCorrections:
        kind = getattr(self, "kind", None)
        if kind is None or kind == "closed_walls":
            return self
        if self.solid_blockage is not None and kind == "free_air":
            raise fail(
                'solid_blockage is given in kind = "free_air"', "leave it out, or say which walls", "solid_blockage"
            )
        if self.buoyancy is not None and kind == "free_air":
            raise fail('buoyancy is given in kind = "free_air"', "leave it out, or say which walls", "buoyancy")
        return self


def parse_below(written: Any, si_unit: str, key: str, *, difference: bool = False, least: float | None = None) -> float:
    """One quantity below a key, whose error names the key."""
    try:
        return parse_quantity(written, si_unit, difference=difference, least=least)
    except PydanticCustomError as error:
        raise below(error, key) from error


def section_height(boundary: BoundaryTable | None, along: str) -> float | None:
    """Distance of the walls beside a section's line traverse, m; None where there are none.

    Parameters
    ----------
    boundary : BoundaryTable or None
        ``[boundary]`` of a survey with a ``[section]``.
    along : {"y", "z"}
        Along which axis the traverse runs, and across which the walls stand.

    Returns
    -------
    float or None
    """
    if boundary is None or boundary.kind == "free_air":
        return None
    walls: tuple[float, float] = getattr(boundary, along)
    return walls[1] - walls[0]


def check_walls(boundary: BoundaryTable, line: Plane | None) -> None:
    """Refuse walls that do not fit what was surveyed.

    Parameters
    ----------
    boundary : BoundaryTable
        ``[boundary]``.
    line : Plane or None
        The line traverse of a survey with a ``[section]``; None for a plane.

    Raises
    ------
    PydanticCustomError
        If a rectangle round a plane has only two walls, or what surrounds a section's traverse is not two parallel
        closed walls across it.
    """
    place = "boundary"
    if line is None:
        if boundary.kind != "free_air" and boundary.diameter is None and boundary.vertices is None:
            for key in ("y", "z"):
                if getattr(boundary, key) is None:
                    raise fail(f"key {key!r} is missing", f"a rectangle of {boundary.kind} needs y and z", place)
        return
    along = "y" if line.axes.file_axis("y") in line.columns else "z"
    for key in ("reflection", "inboard_cut", "model_centre", "buoyancy", "support_tare"):
        if getattr(boundary, key, None) is not None:
            raise fail(
                f"{key} is given beside a [section]", "a line traverse does not use it: leave it out", place, key
            )
    if boundary.kind == "free_air":
        return
    if boundary.kind != "closed_walls":
        raise fail(
            f'kind = "{boundary.kind}" is given beside a [section]',
            'the two-dimensional wall corrections are those of closed walls: write "closed_walls" or "free_air"',
            place,
            "kind",
        )
    if boundary.diameter is not None or boundary.vertices is not None:
        raise fail(
            f'section = "{boundary.section}" is given beside a [section]',
            f"its walls are two parallel ones: give {along} alone, as {along} = ['-0.5 m', '0.5 m']",
            place,
            "section",
        )
    if getattr(boundary, along) is None:
        raise fail(
            f"key {along!r} is missing", f"the traverse runs along {along}: give the walls at both ends of it", place
        )
