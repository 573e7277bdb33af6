"""Wave drag counts inside the wake region only: what the survey file leaves out of it is in no row twice."""

import netCDF4
import numpy as np

from wakeledger.run.load import load
from wakeledger.run.survey import reduce
from wakeledger.stream.reference import Reference
from wakeledger.synthetic import ShockedWake

STATION = 0.5
STREAM = Reference(speed=250.0, density=0.5, static_pressure=35e3, compressible=True)
UNITS = {"u": "m/s", "v": "m/s", "w": "m/s", "static_pressure": "Pa", "density": "kg/m^3"}


def reduced(kit, folder, **changes):
    """A thin volume about the station, so that the plane counts as computed."""
    lines = {"x": STATION + np.array([-1e-3, 1e-3]), "z": np.linspace(-0.45, 0.75, 97), "y": np.linspace(-1.2, 1.2, 41)}
    state = ShockedWake(STREAM).state(*np.meshgrid(lines["y"], lines["z"]))
    folder.mkdir(parents=True)
    with netCDF4.Dataset(folder / "plane.nc", "w") as file:
        for name, line in lines.items():
            file.createDimension(name, line.size)
            file.createVariable(name, "f8", (name,))[:] = line
        for name in UNITS:
            file.createVariable(name, "f8", ("x", "z", "y"))[:] = np.stack([getattr(state, name)] * 2)
    columns = {name: {"column": name, "unit": unit} for name, unit in UNITS.items()}
    columns |= {letter: {"column": letter, "unit": "m"} for letter in "xyz"}
    reference = {"speed": "250 m/s", "density": "0.5 kg/m^3", "static_pressure": "35 kPa", "compressible": True}
    given = kit.description(plane=None, reference=reference, **changes)
    given["plane"] = {"file": "plane.nc", "station": f"{STATION} m", "primary": "velocity", "columns": columns}
    path = folder / "survey.toml"
    path.write_text(kit.toml(given), encoding="utf-8")
    return reduce(load(path))


def test_loss_left_out_of_the_region_is_not_wave_drag(kit, tmp_path):
    # The upper part of the shock, well above the viscous wake, is left out.
    whole = reduced(kit, tmp_path / "whole")
    part = reduced(kit, tmp_path / "part", wake={"exclude": [[["-1.3 m", "0.2 m"], ["1.3 m", "0.8 m"]]]})
    wave, less = (one.row("wave_drag").value for one in (whole, part))
    # It moves to the row of what lies outside: 13 % of the shock's loss, as (1 - z/h)^3, lie above 0.4 h.
    moved = part.row("numerical_drag").value - whole.row("numerical_drag").value
    assert abs(moved - 0.6**4 * wave) < 0.03 * wave
    # The level of the outer flow rises with it, which moves the border to the profile drag by as little as that.
    assert moved < wave - less < 1.6 * moved
    change = part.row("profile_drag").value - whole.row("profile_drag").value
    assert -0.1 * moved < change < 0.4 * moved
