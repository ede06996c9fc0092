"""What the plan asks of sealing, as plain data: the limits, policies and costs, exactly as the plan put them."""

from __future__ import annotations

from runtime_min.model import DecisionRequest, InputRequest, Request
from trainer.plan import Plan
from trainer.table import Rows


def request_of(plan: Plan, rows: Rows) -> Request:
    """The request of a plan whose inputs were completed from the rows."""
    inputs = tuple(
        InputRequest(
            name=entry.name,
            column=entry.column,
            unit=entry.unit,
            levels=entry.levels,
            low=None if entry.low is None else str(entry.low),
            high=None if entry.high is None else str(entry.high),
            outside=entry.outside,
            missing=entry.missing,
            assumed=entry.assumed,
        )
        for entry in rows.inputs
    )
    decision = DecisionRequest(str(plan.decision.cost_false_alarm), str(plan.decision.cost_miss), None)
    tolerance = None if plan.device.tolerance is None else str(plan.device.tolerance)
    return Request(plan.model, plan.device.arithmetic, inputs, decision, tolerance)
