"""A zero error of the total pressure, found in the outer flow, must cost nothing once it is taken out."""

import numpy as np
import pytest

from wakeledger.run.gridded import grid_survey
from wakeledger.run.load import load


@pytest.fixture(scope="module")
def chain(request):
    root = request.config.rootpath
    survey = load(root / "sample_surveys" / "wing_and_tail" / "survey.toml")
    return grid_survey(survey).chain, survey.points.n


def test_a_zero_error_moves_no_row_of_a_survey_that_measured_directions(chain):
    chain, n = chain
    found = chain.reduce().values
    wrong = chain.reduce({"plane.total_pressure": np.full(n, 5.0)}).values
    # 5 Pa are 0.5 % of q: left in, they turn into 0.5 % of the induced drag and 100 counts of profile drag.
    for row in ("profile_drag", "induced_drag", "lift", "total_drag", "induced_drag energy_area"):
        assert wrong[row] == pytest.approx(found[row], rel=1e-7)


def test_a_zero_error_of_one_point_in_a_hundred_is_not_a_zero(chain):
    chain, n = chain
    found = chain.reduce().values["profile_drag"]
    errors = np.where(np.arange(n) % 100 == 0, 50.0, 0.0)
    wrong = chain.reduce({"plane.total_pressure": errors}).values["profile_drag"]
    assert abs(wrong - found) > 1e-5 * found
