"""A ledger of an invented tunnel test, with plausible figures, for tests of everything that shows or keeps one."""

import math

import numpy as np
import xarray as xr

from wakeledger.core.grid import UniformGrid
from wakeledger.core.plane import make_plane
from wakeledger.core.points import Channel, Points
from wakeledger.ledger.crosscheck import check_estimate, compare
from wakeledger.ledger.ledger import Ledger
from wakeledger.ledger.rows import BudgetLine, Check, CrossCheck, Row

SPEED, DENSITY, AREA, SPAN = 42.0, 1.185, 0.18, 1.2
Q = 0.5 * DENSITY * SPEED**2

SURVEY_TEXT = """title = "Clean wing, \\u03b1 = 6°"
# a comment with Umlauten: Flügel
[reference]
speed = "42.0 m/s"
density = "1.185 kg/m^3"
"""


def _plane(grid: UniformGrid) -> xr.Dataset:
    y, z = grid.mesh()
    v = np.zeros(grid.shape)
    w = np.zeros(grid.shape)
    xi = np.zeros(grid.shape)
    psi = np.zeros(grid.shape)
    for gamma, yc, zc, a in (
        (2.2, 0.52, 0.04, 0.03),
        (-2.2, -0.52, 0.04, 0.03),
        (-0.5, 0.2, -0.06, 0.02),
        (0.5, -0.2, -0.06, 0.02),
    ):
        r2 = (y - yc) ** 2 + (z - zc) ** 2 + 1e-12
        swirl = gamma / (2 * math.pi * r2) * -np.expm1(-r2 / a**2)
        v -= swirl * (z - zc)
        w += swirl * (y - yc)
        xi += gamma / (math.pi * a**2) * np.exp(-r2 / a**2)
        psi -= gamma / (4 * math.pi) * np.log(r2 + a**2)
    inside = np.exp(-((y / 0.56) ** 8))
    loss = 0.11 * Q * inside * np.exp(-(((z - 0.06 * (y / 0.52) ** 2) / 0.02) ** 2))
    loss += 0.2 * Q * np.exp(-((np.abs(y) - 0.52) ** 2 + (z - 0.04) ** 2) / 0.03**2)
    u = np.sqrt(np.maximum(SPEED**2 - 2 * loss / DENSITY - v**2 - w**2, 1.0))
    flag = np.zeros(grid.shape, dtype=np.int32)
    rng = np.random.default_rng(7)
    flag.flat[rng.choice(flag.size, 12, replace=False)] = 1
    flag[10:14, 90:94] |= 8
    return make_plane(
        grid,
        {
            "u": u,
            "v": v,
            "w": w,
            "total_pressure": Q - loss,
            "static_pressure": -0.5 * DENSITY * (v**2 + w**2),
            "total_pressure_loss": loss,
            "axial_vorticity": xi,
            "stream_function": psi,
            "wake_mask": (loss > 0.01 * Q).astype(np.int8),
            "flag": flag,
        },
        station=0.9,
    )


def _raw(plane: xr.Dataset) -> Points:
    zz, yy = np.meshgrid(plane["z"].values, plane["y"].values, indexing="ij")
    n = yy.size
    order = np.random.default_rng(3).permutation(n)
    channels = {name: Channel(plane[name].values.ravel()[order].copy()) for name in ("u", "v", "w")}
    channels["total_pressure"] = Channel(-plane["total_pressure_loss"].values.ravel()[order], relative_to="total")
    channels["static_pressure"] = Channel(
        plane["static_pressure"].values.ravel()[order] / Q, normalised_by="dynamic_pressure"
    )
    channels["u"].values[[5, 17]] = np.nan
    return Points(
        y=yy.ravel()[order],
        z=zz.ravel()[order],
        channels=channels,
        line=np.arange(2, n + 2),
        source="traverse.csv",
        axes=np.array([[1.0, 0, 0], [0, -1.0, 0], [0, 0, 1.0]]),
        std={"v": np.full(n, 0.15), "w": np.linspace(0.1, 0.2, n)},
        samples=np.full(n, 400),
        row=np.arange(n) // 61,
    )


def _row(name: str, coefficient: float, u_coefficient: float, *, length: float = 1.0, unit: str = "N") -> Row:
    scale = Q * AREA * length
    return Row(
        name=name,
        value=coefficient * scale,
        unit=unit,
        standard_uncertainty=u_coefficient * scale,
        expanded_uncertainty=2.0 * u_coefficient * scale,
        coverage_factor=2.0,
        degrees_of_freedom=math.inf if name == "lift" else 240.0,
        coefficient=coefficient,
        coefficient_standard_uncertainty=u_coefficient,
    )


def example_ledger(*, spacing: float = 0.01) -> Ledger:
    """The invented ledger on a grid of the given spacing, m."""
    half_width, half_height = 0.75, 0.3
    shape = round(2 * half_width / spacing) + 1, round(2 * half_height / spacing) + 1
    grid = UniformGrid(-half_width, -half_height, spacing, spacing, *shape)
    plane = _plane(grid)
    rows = (
        _row("profile_drag", 0.01482, 0.00011),
        _row("induced_drag", 0.01031, 0.00013),
        _row("residual_drag", -0.00004, 0.00003),
        _row("total_drag", 0.02509, 0.00018),
        _row("lift", 0.5012, 0.0021),
        Row(
            "side_force", math.nan, "N", math.nan, math.nan, math.nan, math.nan,
            reason="the wake is cut at the window's lower edge, so no side force can be given",
        ),
        Row("span_efficiency", 0.969, "1", 0.011, 0.022, 2.0, 240.0, reason=None),
    )  # fmt: skip
    by_name = {row.name: row for row in rows}
    u = np.array([row.standard_uncertainty for row in rows])
    covariance = np.diag(u**2)
    covariance[0, 3] = covariance[3, 0] = 0.6 * u[0] * u[3]

    def estimate(row: str, method: str, relative: float, expected: float, u_relative: float) -> CrossCheck:
        from wakeledger.core.estimate import Estimate

        primary = by_name[row].value
        return check_estimate(
            Estimate(
                row, method, primary * (1 + relative), abs(primary) * u_relative, expected_difference=expected * primary
            ),
            by_name[row],
            difference_uncertainty=abs(primary) * u_relative,
        )

    momentum = CrossCheck(
        "total_drag", "momentum_area", by_name["total_drag"].value, "N", by_name["total_drag"].standard_uncertainty,
        0.0, 0.0, math.nan, "not_independent", "it is the same algebra as the sum of rows",
    )  # fmt: skip
    line = np.linspace(-0.53, 0.53, 107)
    gamma = 2.2 * np.sqrt(1 - (line / 0.531) ** 2)
    arc = ("s", np.linspace(0.0, 1.07, 107), {"units": "m", "long_name": "arc length from the port end"})
    wake_line = xr.Dataset(
        {
            "y": ("s", line, {"units": "m", "long_name": "distance to starboard"}),
            "z": ("s", 0.06 * (line / 0.52) ** 2, {"units": "m", "long_name": "height, positive up"}),
            "circulation": ("s", gamma, {"units": "m2 s-1", "long_name": "bound circulation"}),
        },
        coords={"s": arc},
    )
    vortices = xr.Dataset(
        {
            "y": ("vortex", np.array([-0.52, 0.52]), {"units": "m", "long_name": "distance to starboard"}),
            "z": ("vortex", np.array([0.04, 0.04]), {"units": "m", "long_name": "height, positive up"}),
            "circulation": ("vortex", np.array([-2.2, 2.2]), {"units": "m2 s-1", "long_name": "circulation"}),
            "core_radius": ("vortex", np.array([0.03, 0.03]), {"units": "m", "long_name": "core radius"}),
        }
    )
    span_y = np.linspace(-0.6, 0.6, 49)
    bound = 2.2 * np.sqrt(np.maximum(0, 1 - (span_y / 0.6) ** 2))
    strips = np.exp(-((span_y / 0.56) ** 8))
    span = xr.Dataset(
        {
            "circulation": ("y", bound, {"units": "m2 s-1", "long_name": "bound circulation"}),
            "profile_drag": ("y", 2.5 * strips, {"units": "N/m", "long_name": "profile drag per unit span"}),
            "induced_drag": ("y", 1.7 * strips, {"units": "N/m", "long_name": "induced drag per unit span"}),
        },
        coords={"y": ("y", span_y, {"units": "m", "long_name": "distance to starboard"})},
    )  # fmt: skip
    budget = []
    shares = {
        "crossflow noise": 0.42,
        "pitch angle": 0.27,
        "wake mask": 0.16,
        "dynamic pressure": 0.10,
        "resolution": 0.04,
        "gaps": 0.01,
    }
    for row in rows:
        if math.isfinite(row.standard_uncertainty):
            budget += [
                BudgetLine(row.name, source, row.standard_uncertainty * math.sqrt(share), share)
                for source, share in shares.items()
            ]
    checks = (
        Check("net_circulation", "pass", 0.002, 0.02, "The net circulation is 0.2 % of one tip vortex's."),
        Check("mass_balance", "pass", 0.0004, 0.002, "The divergence integrates to nothing within its uncertainty."),
        Check(
            "edge_vorticity",
            "warn",
            0.031,
            0.02,
            "3.1 % of the absolute vorticity lies within two cells of the window's lower edge, so part of the wake may "
            "be missing; lower the edge by 40 mm.",
        ),
        Check("edge_total_pressure_loss", "pass", 0.001, 0.01, "The loss at the window's edge is within the noise."),
        Check(
            "core_resolution",
            "fail",
            0.74,
            0.5,
            "The spacing is 0.74 of the smallest core radius, so induced drag reads low; refine to 7 mm at the tips.",
        ),
        Check("noise_bias", "pass", 0.004, 0.02, "The noise adds 0.4 % to induced drag; it has been subtracted."),
        Check("outer_flow", "pass", 0.0008, 0.005, "Total pressure outside the wake is the stream's."),
        Check("missing_points", "not_applicable", math.nan, 0.02, "The survey has no missing points."),
    )
    return Ledger(
        title="Clean wing, α = 6° <3",
        test={"run": "117", "configuration": "clean", "alpha": "6 deg"},
        compressible=False,
        rows=rows,
        estimates=(
            estimate("profile_drag", "entropy_area", 0.001, 0.0, 0.004),
            estimate("induced_drag", "energy_area", 0.031, 0.028, 0.009),
            estimate("induced_drag", "wake_line", -0.011, -0.006, 0.018),
            estimate("induced_drag", "vortex_sum", 0.072, 0.0, 0.02),
            momentum,
            estimate("lift", "wake_line", 0.002, 0.0, 0.005),
        ),
        comparisons=(
            compare(by_name["total_drag"], name="balance", value=4.68, standard_uncertainty=0.03),
            compare(by_name["lift"], name="balance", value=94.1, standard_uncertainty=math.nan),
        ),
        budget=tuple(budget),
        checks=checks,
        notes=(
            "u follows from total pressure, static pressure and the flow direction.",
            "12 missing points were filled from their neighbours.",
        ),
        covariance=covariance,
        reference={"speed": SPEED, "density": DENSITY, "dynamic_pressure": Q, "mach": math.nan, "temperature": 293.15},
        model={"reference_area": AREA, "span": SPAN, "mean_chord": 0.16},
        plane=plane,
        raw=_raw(plane),
        survey_text=SURVEY_TEXT,
        wake_line=wake_line,
        vortices=vortices,
        span=span,
        inputs={"survey.toml": "0" * 64, "traverse.csv": "a1" * 32},
        provenance={
            "version wakeledger": "0.1.0",
            "version numpy": "2.0.0",
            "command": "wakeledger reduce survey.toml",
            "time": "2025-03-01T12:00:00Z",
        },
    )
