"""One row through the generated Python module, against straight-line Python written by hand with the same checks.

    python tests/benchmarks/one_row.py

Eight inputs, three of them with a datum. The functions written by hand round, check the count, the ranges and for
missing values as the module does, with every number as a literal, and must give the same bits before they are timed.
In int16 they have counts, and log-odds in units of 2^-26.
Both are timed in turn, many short rounds; the ratio is the median of the rounds' ratios, the times are medians too.
"""

from __future__ import annotations

import math
import random
import statistics
import struct
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from models import Quantity, make_request, make_trained  # noqa: E402

from export.targets import TARGETS  # noqa: E402
from export.vectors import make_vectors, random_row, self_test_of  # noqa: E402
from runtime_min.model import DecisionRequest, Score, SealedModel  # noqa: E402
from runtime_min.sealing import seal_request  # noqa: E402

ROUNDS = 401
CALLS = 400
AIM = 1.1

# Short binary fractions, so that every arithmetic carries them as they stand. Data of a range: 72, 80 and 300; in int16
# every datum is the count in the middle of a range, and no product needs a shift.
QUANTITIES = (
    Quantity("suction", "kPa", "-96", "256"),
    Quantity("flow", "m3/h", "0", "160"),
    Quantity("current", "A", "16", "128"),
    Quantity("vibration", "mm/s", "0", "48"),
    Quantity("water", "K", "270", "330"),
    Quantity("speed", "1/s", "0", "64"),
    Quantity("head", "m", "40", "120"),
    Quantity("power", "kW", "0", "30"),
)
WEIGHTS = (-0.015625, 0.0234375, 0.03125, 0.21875, 0.0546875, -0.0703125, 0.01953125, -0.09375)
INTERCEPT = -20.375


def hand64_log_odds(inputs: Sequence[float]) -> float:
    if len(inputs) != 8:
        raise ValueError(f"expected 8 inputs, found {len(inputs)}")
    suction, flow, current, vibration, water, speed, head, power = inputs
    suction = float(suction)
    if not -96.0 <= suction <= 256.0:
        return math.nan
    flow = float(flow)
    if not 0.0 <= flow <= 160.0:
        return math.nan
    current = float(current)
    if not 16.0 <= current <= 128.0:
        return math.nan
    vibration = float(vibration)
    if not 0.0 <= vibration <= 48.0:
        return math.nan
    water = float(water)
    if not 270.0 <= water <= 330.0:
        return math.nan
    speed = float(speed)
    if not 0.0 <= speed <= 64.0:
        return math.nan
    head = float(head)
    if not 40.0 <= head <= 120.0:
        return math.nan
    power = float(power)
    if not 0.0 <= power <= 30.0:
        return math.nan
    z = -0.15625 + -0.015625 * suction
    z = z + 0.0234375 * flow
    z = z + 0.03125 * (current - 72.0)
    z = z + 0.21875 * vibration
    z = z + 0.0546875 * (water - 300.0)
    z = z + -0.0703125 * speed
    z = z + 0.01953125 * (head - 80.0)
    return z + -0.09375 * power


def hand64_probability(inputs: Sequence[float]) -> float:
    z = hand64_log_odds(inputs)
    if z != z:
        return math.nan
    t = -abs(z)
    if t < -708.0:
        e = 0.0
    else:
        k = round(t * 1.4426950408889634)
        r = (t - k * 0.6931471805598903) - k * 5.497923018708371e-14
        p = 2.7630234664628354e-07 + r * 2.5000033048099814e-08
        p = 2.755758637807243e-06 + r * p
        p = 2.480149313419418e-05 + r * p
        p = 0.0001984126950667297 + r * p
        p = 0.0013888888943599422 + r * p
        p = 0.008333333333494371 + r * p
        p = 0.04166666666653026 + r * p
        p = 0.16666666666666413 + r * p
        p = 0.5000000000000011 + r * p
        p = 1.0 + r * p
        p = 1.0 + r * p
        e = math.ldexp(p, k)
    return (1.0 if z >= 0.0 else e) / (1.0 + e)


pack = struct.Struct("<f").pack
unpack = struct.Struct("<f").unpack


def rounded(x: float) -> float:
    try:
        return float(unpack(pack(x))[0])
    except OverflowError:
        return math.inf if x > 0.0 else -math.inf


def hand32_log_odds(inputs: Sequence[float]) -> float:
    if len(inputs) != 8:
        raise ValueError(f"expected 8 inputs, found {len(inputs)}")
    suction, flow, current, vibration, water, speed, head, power = inputs
    try:
        suction = unpack(pack(float(suction)))[0]
        flow = unpack(pack(float(flow)))[0]
        current = unpack(pack(float(current)))[0]
        vibration = unpack(pack(float(vibration)))[0]
        water = unpack(pack(float(water)))[0]
        speed = unpack(pack(float(speed)))[0]
        head = unpack(pack(float(head)))[0]
        power = unpack(pack(float(power)))[0]
    except OverflowError:
        suction, flow, current, vibration, water, speed, head, power = (rounded(float(x)) for x in inputs)
    if not -96.0 <= suction <= 256.0:
        return math.nan
    if not 0.0 <= flow <= 160.0:
        return math.nan
    if not 16.0 <= current <= 128.0:
        return math.nan
    if not 0.0 <= vibration <= 48.0:
        return math.nan
    if not 270.0 <= water <= 330.0:
        return math.nan
    if not 0.0 <= speed <= 64.0:
        return math.nan
    if not 40.0 <= head <= 120.0:
        return math.nan
    if not 0.0 <= power <= 30.0:
        return math.nan
    z = unpack(pack(-0.15625 + unpack(pack(-0.015625 * suction))[0]))[0]
    z = unpack(pack(z + unpack(pack(0.0234375 * flow))[0]))[0]
    z = unpack(pack(z + unpack(pack(0.03125 * unpack(pack(current - 72.0))[0]))[0]))[0]
    z = unpack(pack(z + unpack(pack(0.21875 * vibration))[0]))[0]
    z = unpack(pack(z + unpack(pack(0.0546875 * unpack(pack(water - 300.0))[0]))[0]))[0]
    z = unpack(pack(z + unpack(pack(-0.0703125 * speed))[0]))[0]
    z = unpack(pack(z + unpack(pack(0.01953125 * unpack(pack(head - 80.0))[0]))[0]))[0]
    return unpack(pack(z + unpack(pack(-0.09375 * power))[0]))[0]  # type: ignore[no-any-return]


def hand32_probability(inputs: Sequence[float]) -> float:
    z = hand32_log_odds(inputs)
    if z != z:
        return math.nan
    t = -abs(z)
    if t < -87.0:
        e = 0.0
    else:
        k = round(unpack(pack(t * 1.4426950216293335))[0])
        r = unpack(pack(t - unpack(pack(k * 0.693359375))[0]))[0]
        r = unpack(pack(r - unpack(pack(k * -0.00021219444170128554))[0]))[0]
        p = unpack(pack(0.008368714712560177 + unpack(pack(0.001381455920636654 * r))[0]))[0]
        p = unpack(pack(0.04166838899254799 + unpack(pack(p * r))[0]))[0]
        p = unpack(pack(0.1666652113199234 + unpack(pack(p * r))[0]))[0]
        p = unpack(pack(0.4999999403953552 + unpack(pack(p * r))[0]))[0]
        p = unpack(pack(1.0 + unpack(pack(p * r))[0]))[0]
        p = unpack(pack(1.0 + unpack(pack(p * r))[0]))[0]
        e = math.ldexp(p, k)
    return unpack(pack((1.0 if z >= 0.0 else e) / unpack(pack(1.0 + e))[0]))[0]  # type: ignore[no-any-return]


def hand16_log_odds(inputs: Sequence[float]) -> int:
    if len(inputs) != 8:
        raise ValueError(f"expected 8 inputs, found {len(inputs)}")
    suction, flow, current, vibration, water, speed, head, power = inputs
    if not -6144 <= suction <= 16384:
        return -2147483648
    whole_suction = int(suction)
    if whole_suction != suction:
        return -2147483648
    if not 0 <= flow <= 20480:
        return -2147483648
    whole_flow = int(flow)
    if whole_flow != flow:
        return -2147483648
    if not -28672 <= current <= 28672:
        return -2147483648
    whole_current = int(current)
    if whole_current != current:
        return -2147483648
    if not 0 <= vibration <= 24576:
        return -2147483648
    whole_vibration = int(vibration)
    if whole_vibration != vibration:
        return -2147483648
    if not -30720 <= water <= 30720:
        return -2147483648
    whole_water = int(water)
    if whole_water != water:
        return -2147483648
    if not 0 <= speed <= 16384:
        return -2147483648
    whole_speed = int(speed)
    if whole_speed != speed:
        return -2147483648
    if not -20480 <= head <= 20480:
        return -2147483648
    whole_head = int(head)
    if whole_head != head:
        return -2147483648
    if not 0 <= power <= 30720:
        return -2147483648
    whole_power = int(power)
    if whole_power != power:
        return -2147483648
    z = 138412032
    z += -16384 * (whole_suction - 5120)
    z += 12288 * (whole_flow - 10240)
    z += 4096 * whole_current
    z += 28672 * (whole_vibration - 12288)
    z += 3584 * whole_water
    z += -18432 * (whole_speed - 8192)
    z += 2560 * whole_head
    z += -6144 * (whole_power - 15360)
    return z


NODES = (
    16384, 18427, 20406, 22266, 23967, 25483, 26803, 27929, 28873, 29653, 30291, 30806, 31220, 31550, 31811, 32018,
    32181, 32309, 32410, 32488, 32550, 32598, 32635, 32664, 32687, 32705, 32719, 32730, 32738, 32745, 32750, 32754,
    32763,
)  # fmt: skip


def hand16_probability(inputs: Sequence[float]) -> int:
    z = hand16_log_odds(inputs)
    if z == -2147483648:
        return 65535
    a = abs(z) >> 8
    i = a >> 16
    if i >= 32:
        q = 32763
    else:
        below = NODES[i]
        q = below + ((NODES[i + 1] - below) * (a & 65535) + 32768 >> 16)
    return q if z >= 0 else 32768 - q


HANDS: dict[tuple[str, str], Callable[[Sequence[float]], float]] = {
    ("binary64", "log_odds"): hand64_log_odds,
    ("binary64", "probability"): hand64_probability,
    ("binary32", "log_odds"): hand32_log_odds,
    ("binary32", "probability"): hand32_probability,
    ("int16", "log_odds"): hand16_log_odds,
    ("int16", "probability"): hand16_probability,
}


def sealed_model(arithmetic: str) -> SealedModel:
    """The model whose numbers stand above: weights per unit as they are, nothing standardised."""
    trained = make_trained(QUANTITIES, 1)
    terms = tuple(replace(term, centre=0.0, scale=1.0) for term in trained.terms)
    trained = replace(trained, terms=terms, scores=(Score(INTERCEPT, WEIGHTS),), witness=())
    decision = DecisionRequest(None, None, "0")
    return seal_request(trained, make_request(QUANTITIES, arithmetic=arithmetic, decision=decision))


def generated(sealed: SealedModel) -> dict[str, Any]:
    """The names of the generated module."""
    names: dict[str, Any] = {}
    text = TARGETS["python"].emit(sealed, self_test_of(sealed, make_vectors(sealed)))
    exec(compile(text, TARGETS["python"].file(sealed), "exec"), names)
    return names


def nanoseconds(function: Callable[[Sequence[float]], float], rows: Sequence[Sequence[float]]) -> float:
    """Time of one call, over one round of calls."""
    start = time.perf_counter_ns()
    for row in rows:
        function(row)
    return (time.perf_counter_ns() - start) / len(rows)


def main() -> int:
    """Print the table; exit status 1 where a function written by hand gives other bits, or the aim is missed."""
    missed = False
    print(f"CPython {sys.version.split()[0]}, 8 inputs, one row a call, median of {ROUNDS} rounds")
    print("| arithmetic | function | by hand, ns | module, ns | ratio |\n|---|---|---|---|---|")
    for (arithmetic, what), by_hand in HANDS.items():
        sealed = sealed_model(arithmetic)
        function = generated(sealed)[what]
        rng = random.Random(8)
        rows = [random_row(sealed, rng) for _ in range(CALLS)]
        odd = [vector.inputs for vector in make_vectors(sealed)]
        for row in [*rows, *odd]:
            if struct.pack("<d", by_hand(row)) != struct.pack("<d", function(row)):
                print(f"{arithmetic} {what}: by hand {by_hand(row)!r}, module {function(row)!r} for {row}")
                return 1
        times = []
        for turn in range(ROUNDS):
            pair = [(by_hand, 0), (function, 1)]
            measured = [0.0, 0.0]
            for one, place in pair if turn % 2 else reversed(pair):
                measured[place] = nanoseconds(one, rows)
            times.append(measured)
        ratio = statistics.median(module / hand for hand, module in times)
        hand, module = (statistics.median(column) for column in zip(*times, strict=True))
        print(f"| {arithmetic} | {what} | {hand:.0f} | {module:.0f} | {ratio:.2f} |")
        missed = missed or not ratio <= AIM
    print(f"aim: at most {AIM}" + ("; missed" if missed else ""))
    return int(missed)


if __name__ == "__main__":
    sys.exit(main())
