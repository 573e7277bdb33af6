"""Which flow a plan asks for: the wake of a loading, or the plane of a ledger."""

from __future__ import annotations

from wakeledger.run.config.plan_file import PlanRequest
from wakeledger.run.planning.flow import ExpectedFlow
from wakeledger.run.planning.of_loading import flow_of_loading
from wakeledger.run.planning.of_plane import flow_of_ledger


def expected_flow(request: PlanRequest) -> ExpectedFlow:
    """The flow that a plan asks for.

    Parameters
    ----------
    request : PlanRequest
        The plan.

    Returns
    -------
    ExpectedFlow

    Raises
    ------
    InputError
        If there can be no such flow, or the ledger cannot be used for it.
    """
    if request.plan.ledger is not None:
        return flow_of_ledger(request.resolve(request.plan.ledger))
    return flow_of_loading(request)
