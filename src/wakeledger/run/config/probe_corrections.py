"""What the corrections of a probe need of the survey file, and which of them do not go together."""

from __future__ import annotations

from collections.abc import Sequence

from wakeledger.run.config.plane import Plane
from wakeledger.run.config.quantities import fail
from wakeledger.run.config.tables import ProbeTable


def check_probe_corrections(plane: Plane, probes: Sequence[ProbeTable], *, empty_tunnel: bool) -> None:
    """Refuse corrections that lack what they need, or that would be made twice.

    Parameters
    ----------
    plane : Plane
        With ``primary = "hole_pressures"``.
    probes : sequence of ProbeTable
        All of ``[[probe]]``, or the one ``[probe]``.
    empty_tunnel : bool
        Whether the flow of the tunnel without the model is taken out, too.

    Raises
    ------
    PydanticCustomError
        It says which table and key.
    """
    rolls = "roll" in plane.columns
    for index, probe in enumerate(probes):
        place: list[str | int] = ["probe", index] if len(probes) > 1 else ["probe"]
        if rolls and "roll" in probe.model_fields_set:
            raise fail(
                "roll is given, and [plane.columns] names a column of it",
                "leave it out: the column tells how the probe was rolled at each point",
                *place,
                "roll",
            )
        _check_walls(probe, place)
        if probe.misalignment is not None:
            _check_misalignment(probe, place, rolls=rolls, empty_tunnel=empty_tunnel)
    if rolls and not any(probe.calibration for probe in probes):
        raise fail(
            "roll is given, and no probe is calibrated",
            "leave it out: a pitot tells no direction",
            "plane",
            "columns",
            "roll",
        )


def _check_walls(probe: ProbeTable, place: Sequence[str | int]) -> None:
    if probe.walls is None:
        return
    if not probe.walls.y and not probe.walls.z:
        raise fail("no wall is given", 'write walls = { y = ["-0.45 m", "0.45 m"], z = ["0 m"] }', *place, "walls")
    if probe.role == "static":
        raise fail("walls are given for a static tube", "leave them out: only speeds are corrected", *place, "walls")
    if probe.tip_diameter is None:
        raise fail(
            "walls are given, and tip_diameter is missing",
            'add tip_diameter = "3.2 mm": how far a wall reaches is counted in it',
            *place,
            "walls",
        )


def _check_misalignment(probe: ProbeTable, place: Sequence[str | int], *, rolls: bool, empty_tunnel: bool) -> None:
    key = (*place, "misalignment")
    if not probe.calibration:
        raise fail(
            "misalignment is given without a calibration", "leave it out: a pitot or static tube has none to see", *key
        )
    if probe.misalignment == "roll_pair" and not rolls:
        raise fail(
            "a roll pair needs the roll of each point",
            'add roll = { column = "...", unit = "deg" } to [plane.columns], and measure some places at two rolls',
            *key,
        )
    if probe.misalignment == "outer_flow" and rolls:
        raise fail(
            "the probe was rolled, which tells its misalignment from the stream's own inclination",
            'write misalignment = "roll_pair"',
            *key,
        )
    if probe.misalignment == "outer_flow" and empty_tunnel:
        raise fail(
            "the angle of the outer flow is what an empty-tunnel survey takes out, too",
            "leave it out, or leave [empty_tunnel] out",
            *key,
        )
