"""What the plan asks of sealing, as plain data: the limits, policies and costs, exactly as the plan put them."""

from __future__ import annotations

from fractions import Fraction

from runtime_min.model import Counts, DecisionRequest, InputRequest, Placement, Request
from trainer.plan import CountsPlan, Plan
from trainer.table import Rows


def request_of(plan: Plan, rows: Rows) -> Request:
    """The request of a plan whose inputs were completed from the rows."""
    inputs = tuple(
        InputRequest(
            name=entry.name,
            column=entry.column,
            unit=entry.unit,
            levels=entry.levels,
            low=_text(entry.low),
            high=_text(entry.high),
            outside=entry.outside,
            missing=entry.missing,
            assumed=entry.assumed,
            origin=_text(entry.origin),
            counts=_counts(entry.counts),
        )
        for entry in rows.inputs
    )
    asked = plan.decision
    no_call = _text(asked.no_call) if asked.no_call else None
    return Request(
        model=plan.model,
        arithmetic=plan.device.arithmetic,
        inputs=inputs,
        decision=DecisionRequest(str(asked.cost_false_alarm), str(asked.cost_miss), None, no_call),
        tolerance=_text(plan.device.tolerance),
        compiler=plan.device.compiler,
        real_rows=plan.real_rows,
        part=plan.device.part,
        table=Placement(plan.table.address, plan.table.byte_order) if "table" in plan.write else None,
    )


def _text(number: Fraction | None) -> str | None:
    return None if number is None else str(number)


def _counts(counts: CountsPlan | None) -> Counts | None:
    if counts is None:
        return None
    return Counts(counts.bits, str(counts.gain), str(counts.offset), counts.signed, chosen=False)
