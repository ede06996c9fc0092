"""The sealed thresholds against the costs, in another form than sealing's.

With a probability p of the event, a false alarm costs (1 - p) c_fa on average and a miss p c_m: at the threshold the
two are equal (Elkan 2001), so p = c_fa / (c_fa + c_m) there, and half the width of no call lies on either side of it.
"""

from __future__ import annotations

from decimal import ROUND_HALF_EVEN, Context, Decimal
from fractions import Fraction

from export.exact import unit
from export.interval import half_unit
from runtime_min.model import INTEGERS, SealedModel

LOGARITHMS = Fraction(1, 10**45)
"""More than what two logarithms at 60 digits can be off by; far less than the finest unit of a threshold, 2^-62."""


def wrong_thresholds(sealed: SealedModel) -> str:
    """One sentence where a sealed threshold is not what was asked for, rounded once; empty where both are."""
    asked = sealed.about.request.decision
    if asked.threshold is not None:
        middle = Fraction(asked.threshold)
    elif asked.cost_false_alarm is not None and asked.cost_miss is not None:
        alarm, miss = Fraction(asked.cost_false_alarm), Fraction(asked.cost_miss)
        middle = _logit(alarm / (alarm + miss))
    else:
        return "the request has neither costs nor a threshold"
    half, step = Fraction(asked.no_call or 0), unit(sealed)
    for device, wanted in ((sealed.decision.low, middle - half), (sealed.decision.high, middle + half)):
        at = Fraction(device) * step
        largest = max(abs(at), abs(wanted))
        allowed = step / 2 if sealed.arithmetic in INTEGERS else half_unit(sealed.arithmetic, largest)
        if not abs(at - wanted) <= allowed + LOGARITHMS:
            return f"a threshold is {float(at):.17g}, the costs and no_call give {float(wanted):.17g}"
    return ""


def _logit(p: Fraction) -> Fraction:
    """ln(p) - ln(1 - p) to 60 digits, each logarithm that of a rounded decimal."""
    context = Context(prec=60, rounding=ROUND_HALF_EVEN)

    def log(value: Fraction) -> Fraction:
        return Fraction(context.ln(context.divide(Decimal(value.numerator), Decimal(value.denominator))))

    return log(p) - log(1 - p)
