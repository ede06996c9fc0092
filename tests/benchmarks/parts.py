"""Bytes and instructions or cycles of the C header on emulated parts, against C written by hand.

    python tests/benchmarks/parts.py [ARITHMETIC ...]

Eight inputs, none clamped, none with a stand-in for missing values. The floors (`floors/*.c`) do the same job with the
same bits, the same barrier and the same range checks, in as little C as it takes, with the same numbers, compiler and
flags; the figures are what each function costs beyond one that returns 0, the mean over the same rows. check_inputs has
no aim: the integers' one table of limits and weights is all there beside it, where alone it needs the limits only.
"""

from __future__ import annotations

import random
import sys
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT), str(ROOT / "tests")]

from models import Quantity, make_request, make_trained  # noqa: E402

from export.parts import PARTS, Part  # noqa: E402
from export.parts.measure import FUNCTIONS, Cost, call_of, cost_of, result_type  # noqa: E402
from export.targets import TARGETS  # noqa: E402
from export.targets.c import lexical  # noqa: E402
from export.vectors import make_vectors, random_row, self_test_of  # noqa: E402
from runtime_min.model import DecisionRequest, SealedModel  # noqa: E402
from runtime_min.sealing import seal_request  # noqa: E402

AIM = 1.15
ROWS = 16
FLOORS = Path(__file__).parent / "floors"
ARITHMETICS = ("binary32", "int16", "int32")

# Ranges in which floating point needs no datum.
QUANTITIES = (
    Quantity("suction", "kPa", "-95", "250"),
    Quantity("flow", "m3/h", "0", "160"),
    Quantity("current", "A", "0", "62.5"),
    Quantity("vibration", "mm/s", "0", "45"),
    Quantity("water", "°C", "0", "55"),
    Quantity("speed", "1/s", "0", "64"),
    Quantity("head", "m", "-10", "120"),
    Quantity("power", "kW", "0", "30"),
)


def sealed_model(arithmetic: str) -> SealedModel:
    """The invented model."""
    trained = replace(make_trained(QUANTITIES, 5, weight_sd=0.8), witness=())
    request = make_request(QUANTITIES, arithmetic=arithmetic, decision=DecisionRequest("1", "25", None), tolerance=None)
    return seal_request(trained, request)


def numbers(sealed: SealedModel) -> str:
    """The model's numbers as macros."""
    floating = sealed.exponential is not None

    def one(value: float | None) -> str:
        if floating:
            return lexical.number(float(value or 0.0), sealed.arithmetic)
        # -2147483648 is no literal of its own, and a suffix keeps one from being too short on AVR.
        suffix = "LL" if sealed.arithmetic == "int32" else "L"
        return f"({int(value or 0) + 1}{suffix} - 1)"

    def several(values: Sequence[float | None]) -> str:
        return "{ " + ", ".join(one(value) for value in values) + " }"

    macros = {
        "LOW": several([entry.low for entry in sealed.inputs]),
        "HIGH": several([entry.high for entry in sealed.inputs]),
        "WEIGHT": several([term.weights[0][0] for term in sealed.terms]),
        "INTERCEPT": one(sealed.intercepts[0]),
        "THRESHOLD": one(sealed.decision.high),
    }
    if sealed.exponential is not None:
        constants = sealed.exponential
        macros |= {
            "DEGREE": str(len(constants.coefficients) - 1),
            "COEFFICIENT": several(constants.coefficients),
            "INV_LN2": one(constants.inv_ln2),
            "LN2_HIGH": one(constants.ln2_high),
            "LN2_LOW": one(constants.ln2_low),
            "FLOOR": one(constants.floor),
        }
    if sealed.table is not None:
        macros |= {
            "ROWS": several(
                [
                    number
                    for entry, term in zip(sealed.inputs, sealed.terms, strict=True)
                    for number in (entry.low, entry.high, term.datum, term.weights[0][0], term.shift)
                ]
            ),
            "NODES": str(len(sealed.table.nodes)),
            "NODE": several(sealed.table.nodes),
            "STEP": str(sealed.table.step),
            "DROP": str(sealed.table.drop),
        }
    return "".join(f"#define {name} {text}\n" for name, text in macros.items())


def costs(part: Part, sealed: SealedModel, function: str, rows: Sequence[Sequence[float]]) -> tuple[Cost, Cost]:
    """By hand, and of the header."""
    of_type = result_type(sealed, function)
    by_hand = {
        "call.c": f"#define RESULT {of_type}\n#define {function.upper()}\n".encode()
        + (FLOORS / f"{sealed.arithmetic}.c").read_bytes(),
        "floor.h": (FLOORS / "floor.h").read_bytes(),
        "numbers.h": numbers(sealed).encode(),
    }
    header = TARGETS["c"].emit(sealed, self_test_of(sealed, make_vectors(sealed)))
    generated = {"model.h": header, "call.c": call_of(sealed, function)}
    hand, own = (cost_of(part, sources, sealed, function, rows) for sources in (by_hand, generated))
    if hand.answers != own.answers:
        raise SystemExit(f"{part.name}, {sealed.arithmetic} {function}: by hand {hand.answers}, header {own.answers}")
    return hand, own


def main(arithmetics: Sequence[str]) -> int:
    """Print the table; exit status 1 where the aim is missed, or the floor gives other bits."""
    missed = False
    print(f"8 inputs, -std=gnu99 -Os, mean of {ROWS} rows; by hand / header = ratio; aim: at most {AIM}\n")
    print("| arithmetic | function | part | bytes | instructions (AVR: cycles) |\n|---|---|---|---|---|")
    for arithmetic in arithmetics:
        sealed = sealed_model(arithmetic)
        rng = random.Random(8)
        rows = [random_row(sealed, rng) for _ in range(ROWS)]
        for function in FUNCTIONS:
            for part in PARTS.values():
                hand, own = costs(part, sealed, function, rows)
                sizes = hand.text + hand.data, own.text + own.data
                counts = sum(hand.row_counts) / ROWS, sum(own.row_counts) / ROWS
                over = [function != "check_inputs" and not b <= AIM * a for a, b in (sizes, counts)]
                pairs = zip((sizes, counts), over, strict=True)
                shown = [f"{a:.0f} / {b:.0f} = {b / a:.2f}{' (!)' if beyond else ''}" for (a, b), beyond in pairs]
                missed = missed or any(over)
                print(f"| {arithmetic} | {function} | {part.name} | {' | '.join(shown)} |", flush=True)
    print("\n" + ("missed where marked" if missed else "met"))
    return int(missed)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:] or ARITHMETICS))
