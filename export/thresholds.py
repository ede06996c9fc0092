"""The sealed thresholds against the costs, in another form than sealing's.

With a probability p of the event, a false alarm costs (1 - p) c_fa on average and a miss p c_m: at the threshold the
two are equal (Elkan 2001), so p = c_fa / (c_fa + c_m) there, and half the width of no call lies on either side of it.
"""

from __future__ import annotations

import math
from fractions import Fraction

from export.exact import unit
from runtime_min.model import INTEGERS, SealedModel

# What a threshold may be off by: its rounding to the arithmetic, and the logarithm's in binary64 here.
SHARES = {"binary64": 2.0**-50, "binary32": 2.0**-23}


def wrong_thresholds(sealed: SealedModel) -> str:
    """One sentence where a sealed threshold is not what was asked for; empty where both are."""
    asked = sealed.about.request.decision
    if asked.threshold is not None:
        middle = float(Fraction(asked.threshold))
    elif asked.cost_false_alarm is not None and asked.cost_miss is not None:
        alarm, miss = Fraction(asked.cost_false_alarm), Fraction(asked.cost_miss)
        middle = math.log(alarm / (alarm + miss)) - math.log(miss / (alarm + miss))
    else:
        return "the request has neither costs nor a threshold"
    half = float(Fraction(asked.no_call or 0))
    step = float(unit(sealed))
    for device, wanted in ((sealed.decision.low, middle - half), (sealed.decision.high, middle + half)):
        at = float(device) * step
        allowed = step if sealed.arithmetic in INTEGERS else SHARES[sealed.arithmetic] * (abs(middle) + half + 1.0)
        if not abs(at - wanted) <= allowed:
            return f"a threshold is {at:.10g}, the costs and no_call give {wanted:.10g}"
    return ""
