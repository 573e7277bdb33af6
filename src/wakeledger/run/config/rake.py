"""What the tubes of a rake must tell of themselves so that they can be put together."""

from __future__ import annotations

from collections.abc import Sequence

from wakeledger.run.config.plane import HOLES, Plane
from wakeledger.run.config.quantities import fail
from wakeledger.run.config.tables import ProbeTable

_PITOT = "a tube without a calibration reads one pressure, p1, and tells no direction"


def is_rake(probes: Sequence[ProbeTable]) -> bool:
    """Whether probes need to be put together: several, numbered, moved aside, or without a calibration."""
    return len(probes) > 1 or any(
        probe.tube is not None or probe.offset is not None or probe.role == "static" or not probe.calibration
        for probe in probes
    )


def is_directed(probes: Sequence[ProbeTable]) -> bool:
    """Whether the tubes in the flow tell its direction."""
    return any(probe.calibration and probe.role == "flow" for probe in probes)


def check_rake(plane: Plane, probes: Sequence[ProbeTable]) -> None:
    """Refuse tubes that do not fit together, or the columns.

    Parameters
    ----------
    plane : Plane
        With ``primary = "hole_pressures"``.
    probes : sequence of ProbeTable
        All of ``[[probe]]``, or the one ``[probe]``.

    Raises
    ------
    PydanticCustomError
        It says which table is wrong.
    """
    numbered = "tube" in plane.columns
    place: list[str | int]
    seen: dict[int, int] = {}
    for index, probe in enumerate(probes):
        place = ["probe", index] if len(probes) > 1 else ["probe"]
        if probe.tube is None and (len(probes) > 1 or numbered):
            why = "the rake has several tubes" if len(probes) > 1 else "[plane.columns] names a column of tube numbers"
            raise fail(f"key 'tube' is missing, and {why}", "add tube = 1, 2, ... as the column says", *place)
        if probe.tube is not None:
            if probe.tube in seen:
                raise fail(
                    f"tube {probe.tube} is described twice, in entries {seen[probe.tube] + 1} and {index + 1}",
                    "give every tube its own number",
                    *place,
                    "tube",
                )
            seen[probe.tube] = index
        _check_tube(probe, place)
    if seen and not numbered:
        raise fail(
            "column 'tube' is missing, and the probes are numbered",
            'add tube = { column = "...", unit = "1" }: it tells which tube took each point',
            "plane",
            "columns",
        )
    flow = [probe for probe in probes if probe.role == "flow"]
    static = [probe for probe in probes if probe.role == "static"]
    if not flow:
        raise fail("all tubes are static tubes", "describe the probes in the flow, too", "probe")
    calibrated = [bool(probe.calibration) for probe in flow]
    if any(calibrated) and not all(calibrated):
        pitot = flow[calibrated.index(False)]
        raise fail(
            f"tube {pitot.tube} has no calibration, and others have one",
            "calibrate it, or survey with the pitots in a survey file of their own: they tell no direction",
            "probe",
            list(probes).index(pitot),
        )
    if static and all(calibrated):
        raise fail(
            f"tube {static[0].tube} is a static tube, and the calibrated probes tell the static pressure themselves",
            "leave its table and its lines out",
            "probe",
        )
    if not any(calibrated):
        if static and "static_pressure" in plane.columns:
            raise fail(
                "static_pressure and a static tube are both given",
                "keep the column, if each pitot has a static pressure of its own, or the static tubes",
                "plane",
                "columns",
                "static_pressure",
            )
        extra = [name for name in HOLES[1:] if name in plane.columns]
        if extra:
            raise fail(
                f"{extra[0]} is given, and no probe is calibrated",
                f"{_PITOT}: leave it out, or add calibration",
                "plane",
                "columns",
                extra[0],
            )


def _check_tube(probe: ProbeTable, place: Sequence[str | int]) -> None:
    if probe.role == "static" and probe.calibration:
        raise fail("a static tube has a calibration", "leave it out: its reading is taken as it is", *place)
    if not probe.calibration:
        for name in ("roll", "pitch", "yaw"):
            if getattr(probe, name):
                raise fail(f"{name} is given without a calibration", f"{_PITOT}: leave it out", *place, name)


def check_static(plane: Plane, probes: Sequence[ProbeTable]) -> None:
    """Refuse a line traverse whose static pressure is to be measured and is not.

    Parameters
    ----------
    plane, probes
        As for `check_rake`.

    Raises
    ------
    PydanticCustomError
        If pitots have no static pressure.
    """
    measured = "static_pressure" in plane.columns or any(probe.role == "static" for probe in probes)
    if not measured and not is_directed(probes):
        raise fail(
            "the static pressure is to be measured, and pitots do not tell it",
            'add static tubes, or a column static_pressure, or write edge_static = "stream"',
            "section",
            "edge_static",
        )
