import runpy
from pathlib import Path

import pytest

from wakeledger.ledger.inspection import AngleRange, ChannelSummary, EdgeState, Inspection, Recommendation, Repeats
from wakeledger.ledger.plane_map import PlaneMap
from wakeledger.ledger.rows import Check

EXAMPLE = Path(__file__).resolve().parents[1] / "ledger" / "example.py"


@pytest.fixture(scope="session")
def example_ledger():
    """The builder of the invented ledger."""
    return runpy.run_path(str(EXAMPLE))["example_ledger"]


@pytest.fixture(scope="session")
def ledger(example_ledger):
    return example_ledger()


@pytest.fixture(scope="session")
def inspection():
    """An invented inspection."""
    outer = "." * 151
    return Inspection(
        title="Clean wing, α = 6°",
        source="traverse.csv",
        points=9211,
        arrangement="tensor grid, uniform",
        shape=(151, 61),
        spacing=(0.01, 0.01),
        window=(-0.75, 0.75, -0.3, 0.3),
        coverage=0.9987,
        station=0.9,
        flags={"missing": 12, "averaged": 0},
        channels=(
            ChannelSummary("u", "m s-1", 37.2, 42.3, 0.11, 2, declared_noise=0.15, repeatability=0.14),
            ChannelSummary("total_pressure", "Pa", -240.0, 3.1),
        ),
        edges=(
            EdgeState(
                "lower",
                0.031,
                0.02,
                loss_share=0.04,
                vorticity_share=0.001,
                quiet=False,
                missing_reach=0.04,
                message="The wake still touches the lower edge: 4 % of the loss is in the last row.",
            ),
            EdgeState("port"),
        ),
        checks=(Check("missing_points", "pass", 0.0013, 0.02, "0.13 % of the cells are missing."),),
        recommendations=(Recommendation("widen", "Lower the window's edge by 40 mm.", side="lower", distance=0.04),),
        test={"run": "117"},
        reference={"speed": 42.0},
        angles=(
            AngleRange("pitch", -0.1, 0.05, (-0.6, 0.012), (0.61, 0.0)),
            AngleRange("yaw", -0.02, 0.2, (0.0, 0.1), (0.0, -0.1)),
        ),
        repeats=Repeats(4, 9, 1),
        missing_places=((0.1, 0.0), (0.7, 0.3)),
        missing_in_wake=1,
        map=PlaneMap((*(outer,) * 30, "." * 60 + "#o#" + "." * 88, *(outer,) * 30), (-0.75, 0.75), (-0.3, 0.3)),
    )
