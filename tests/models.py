"""Trained and sealed models for the tests: invented numbers from a seeded generator, no rows behind them.

`make_trained` and `make_request` build one model from a few `Quantity` rows; `sample_models` and
`sample_sealed_models` give a varied set in both arithmetics: one input and many, with datum and without, levels,
clamping, typical values, a threshold from costs, and numbers next to the smallest that the arithmetic carries.
"""

from __future__ import annotations

import itertools
import random
from collections.abc import Sequence
from dataclasses import dataclass, replace
from fractions import Fraction

from runtime_min.model import (
    Certificate,
    Counts,
    DecisionRequest,
    FittedRows,
    HeldOut,
    InputRequest,
    Request,
    Score,
    SealedModel,
    TrainedInput,
    TrainedModel,
    TrainedPrior,
    TrainedTerm,
    Witness,
)
from runtime_min.sealing import prevalence_shift, seal_request

WEIGHT_GRID = 2.0**-30
WITNESS_ROWS = 12


@dataclass(frozen=True)
class Quantity:
    """One input of an invented model: a number with exact limits, or (with levels) a categorical one."""

    name: str
    unit: str = ""
    low: str | None = None
    high: str | None = None
    levels: tuple[str, ...] = ()
    outside: str = "fault"
    missing: str = "fault"
    origin: str | None = None
    counts: Counts | None = None


SUCTION = Quantity("suction", "kPa", "-95", "250")
FLOW = Quantity("flow", "m³/h", "0", "180", outside="clamp")
CURRENT = Quantity("current", "A", "4.1", "62.3")
VIBRATION = Quantity("vibration", "mm/s", "0.1", "45", missing="typical")
WATER = Quantity("water", "°C", "273.15", "323.15", outside="clamp", missing="typical")
IMPELLER = Quantity("impeller", levels=("closed", "semi_open", "open"))
VALVE = Quantity("valve", levels=("shut", "half", "full", "bypass"), missing="typical")

FROM_COSTS = DecisionRequest("1", "25", None)


def make_trained(
    quantities: Sequence[Quantity],
    seed: int,
    *,
    classes: tuple[str, str] = ("sound", "cavitating"),
    weight_sd: float = 1.0,
    intercept: float | None = None,
    with_held_out: bool = True,
    prevalence: str | None = None,
) -> TrainedModel:
    """A valid trained model of two classes over `quantities`, its numbers drawn by `random.Random(seed)`.

    Weights are on the grid of trained weights. The witness holds the exact log-odds of a few rows within the limits,
    rounded to binary64, each bound two units in its last place.
    """
    rng = random.Random(seed)
    inputs: list[TrainedInput] = []
    terms: list[TrainedTerm] = []
    for position, quantity in enumerate(quantities):
        if quantity.levels:
            inputs.append(TrainedInput(quantity.name, "", quantity.levels, float(rng.randrange(len(quantity.levels)))))
            terms += [
                TrainedTerm(f"{quantity.name}={level}", "level", (position,), rank, 0.0, 1.0)
                for rank, level in enumerate(quantity.levels)
                if rank
            ]
            continue
        low, high = _limits(quantity)
        centre = low + (high - low) * rng.uniform(0.3, 0.7)
        inputs.append(TrainedInput(quantity.name, quantity.unit, (), centre))
        scale = (high - low) * rng.uniform(0.1, 0.4)
        terms.append(TrainedTerm(quantity.name, "value", (position,), None, centre, scale))
    weights = tuple(_on_grid(rng.gauss(0.0, weight_sd)) for _ in terms)
    start = _on_grid(rng.gauss(0.0, 1.0)) if intercept is None else _on_grid(intercept)
    side = 1 + len(terms)
    trained = TrainedModel(
        inputs=tuple(inputs),
        classes=classes,
        class_weights=(1500.0, 500.0),
        terms=tuple(terms),
        scores=(Score(start, weights),),
        prior=TrainedPrior((0.0,) * len(terms), (1.0,) * len(terms), None),
        covariance=tuple(tuple(0.01 if row == column else 0.001 for column in range(side)) for row in range(side)),
        certificate=Certificate(1e-15, 1e-12, 1e-11),
        rows=FittedRows(total=2700, dropped=12, fitted=2000, held_out=688, sha256="0" * 64),
        held_out=HeldOut(688, 170, 0.31, 0.09, 0.91, 0.25, 0.56, 0.19) if with_held_out else None,
        witness=(),
        prevalence=prevalence,
    )
    return replace(trained, witness=_witness(trained, quantities, rng))


def make_request(
    quantities: Sequence[Quantity],
    *,
    model: str = "pump_cavitation",
    arithmetic: str = "binary32",
    decision: DecisionRequest = FROM_COSTS,
    tolerance: str | None = "0.01",
) -> Request:
    """What sealing is asked for; the quantities are those of `make_trained`."""
    inputs = tuple(
        InputRequest(q.name, q.name, q.unit, q.levels, q.low, q.high, q.outside, q.missing, False, q.origin, q.counts)
        for q in quantities
    )
    return Request(model, arithmetic, inputs, decision, tolerance)


def sample_models() -> dict[str, tuple[TrainedModel, Request]]:
    """Every sample as (trained model, request), by a name that says what is special about it."""
    rng = random.Random(20)
    many = [_random_quantity(rng, position) for position in range(24)]
    plain = [SUCTION, replace(FLOW, outside="fault"), CURRENT]
    pump = [SUCTION, FLOW, CURRENT, VIBRATION, WATER, IMPELLER]
    tiny = [Quantity("current", "A", "-3e-33", "2e-33"), Quantity("flow", "m³/h", "1e-30", "3e-30")]
    at = DecisionRequest(None, None, "0.375")
    kinds = {
        "one_input": ([SUCTION], {"intercept": 0.5}, {"decision": at}),
        "plain": (plain, {}, {"decision": DecisionRequest(None, None, "0")}),
        "pump": (pump, {}, {}),
        "all_datum": ([CURRENT, replace(WATER, outside="fault"), VIBRATION], {}, {"decision": at}),
        "levels_only": ([IMPELLER, VALVE], {"intercept": 0.5}, {"decision": at}),
        "lenient": ([WATER, replace(WATER, name="oil"), VALVE], {"with_held_out": False}, {"decision": at}),
        "many": (many, {}, {}),
        "steep": ([SUCTION, FLOW], {"weight_sd": 60.0, "intercept": -20.0}, {}),
        "tiny": (tiny, {}, {"decision": at}),
    }
    return {
        f"{kind}_{arithmetic}": (
            make_trained(quantities, 100 + seed, **trained),  # type: ignore[arg-type]
            make_request(quantities, model=f"{kind}_{arithmetic}", arithmetic=arithmetic, **asked),  # type: ignore[arg-type]
        )
        for (seed, (kind, (quantities, trained, asked))), arithmetic in itertools.product(
            enumerate(kinds.items()), ("binary32", "binary64")
        )
    }


def sample_sealed_models() -> dict[str, tuple[TrainedModel, SealedModel]]:
    """Every sample as (trained model, sealed model)."""
    return {
        name: (trained, seal_request(trained, request, "Early warning of cavitation (invented numbers)"))
        for name, (trained, request) in sample_models().items()
    }


# An absolute pressure in pascals, a time in seconds since 1970, and what converters of 12, 16 and 24 bits deliver.
PRESSURE = Quantity("pressure", "Pa", "95000", "108000", origin="101325")
CLOCK = Quantity("clock", "s", "1.6e9", "1700000000.5", outside="clamp", missing="typical", origin="1650000000")
COLD = Quantity("cold", "°C", "-60", "-20", origin="-40.25")
ADC = Quantity("adc", "kPa", "-95", "250", counts=Counts(12, "0.1", "-95", False, False))
SHUNT = Quantity("shunt", "A", "-3", "2.5", (), "clamp", "typical", counts=Counts(16, "1/8192", "0", True, False))
WIDE = Quantity("wide", "mV", "0", "2500", missing="typical", counts=Counts(24, "0.0002", "-0.5", False, False))
FALLING = Quantity("falling", "°C", "-10", "85", (), "clamp", counts=Counts(10, "-0.11", "95.5", False, False))

NO_CALL = DecisionRequest("1", "25", None, "0.75")


def sample_extended_models() -> dict[str, tuple[TrainedModel, SealedModel]]:
    """Floating point with origins, counts, a prevalence and a no-call, as (trained model, sealed model)."""
    kinds = {
        "origins": ([PRESSURE, CLOCK, COLD], {}, {}),
        "counts": ([ADC, SHUNT, FALLING, IMPELLER], {}, {}),
        "mixed": ([PRESSURE, ADC, FLOW, VALVE], {"prevalence": "0.02"}, {"decision": NO_CALL}),
        "rare": ([SUCTION, FLOW], {"prevalence": "1/1000"}, {}),
        "undecided": ([CURRENT, IMPELLER], {"intercept": 0.5}, {"decision": DecisionRequest(None, None, "0.1", "1")}),
    }
    models: dict[str, tuple[TrainedModel, SealedModel]] = {}
    for seed, (kind, (quantities, trained, asked)) in enumerate(kinds.items()):
        for arithmetic in ("binary32", "binary64"):
            name = f"{kind}_{arithmetic}"
            inputs = [*quantities, WIDE] if kind == "counts" else quantities
            made = make_trained(inputs, 200 + seed, **trained)  # type: ignore[arg-type]
            request = make_request(inputs, model=name, arithmetic=arithmetic, **asked)  # type: ignore[arg-type]
            models[name] = made, seal_request(made, request, "Early warning of cavitation (invented numbers)")
    return models


def sample_integer_models() -> dict[str, tuple[TrainedModel, SealedModel]]:
    """int16 and int32, with counts and without, levels, every policy, a prevalence, a no-call; (trained, sealed)."""
    rng = random.Random(20)
    many = [_random_quantity(rng, position) for position in range(24)]
    pump = [SUCTION, FLOW, CURRENT, VIBRATION, WATER, IMPELLER]
    at = DecisionRequest(None, None, "0.375")
    # 16 bits without a sign do not fit a signed count of 16 bits: every input of that model is 32 bits wide.
    hall = Quantity("hall", "mV", "0", "5000", counts=Counts(16, "5000/65535", "0", False, False))
    kinds = {
        "one_input": ([SUCTION], {"intercept": 0.5}, {"decision": at}),
        "pump": (pump, {}, {}),
        "counts": ([ADC, SHUNT, FALLING, IMPELLER], {}, {}),
        "wide": ([hall, WIDE, ADC], {}, {}),
        "levels_only": ([IMPELLER, VALVE], {"intercept": 0.5}, {"decision": at}),
        "rare": ([SUCTION, FLOW, VALVE], {"prevalence": "0.001"}, {"decision": NO_CALL}),
        "many": (many, {}, {}),
        "steep": ([SUCTION, FLOW], {"weight_sd": 60.0, "intercept": -20.0}, {}),
        "flat": ([ADC, CURRENT], {"weight_sd": 1e-6, "intercept": 1e-6}, {"decision": DecisionRequest("1", "1", None)}),
    }
    models: dict[str, tuple[TrainedModel, SealedModel]] = {}
    for seed, (kind, (quantities, trained, asked)) in enumerate(kinds.items()):
        for arithmetic in ("int16", "int32"):
            name = f"{kind}_{arithmetic}"
            made = make_trained(quantities, 300 + seed, **trained)  # type: ignore[arg-type]
            request = make_request(quantities, model=name, arithmetic=arithmetic, **asked)  # type: ignore[arg-type]
            models[name] = made, seal_request(made, request, "Early warning of cavitation (invented numbers)")
    return models


def _limits(quantity: Quantity) -> tuple[float, float]:
    return float(Fraction(str(quantity.low))), float(Fraction(str(quantity.high)))


def _on_grid(weight: float) -> float:
    return round(weight / WEIGHT_GRID) * WEIGHT_GRID


def _random_quantity(rng: random.Random, position: int) -> Quantity:
    name = f"sensor_{position}"
    if rng.random() < 0.2:
        return Quantity(name, levels=tuple(f"state_{rank}" for rank in range(rng.randint(2, 6))))
    low = round(rng.uniform(-200.0, 300.0), 2)
    high = round(low + 10.0 ** rng.uniform(-1.0, 3.0), 2)
    policies = rng.choice(("fault", "clamp")), rng.choice(("fault", "typical"))
    return Quantity(name, rng.choice(("kPa", "°C", "m³/h", "%", "µm", "")), str(low), str(high), (), *policies)


def _witness(trained: TrainedModel, quantities: Sequence[Quantity], rng: random.Random) -> tuple[Witness, ...]:
    result = []
    for _ in range(WITNESS_ROWS):
        row = tuple(
            float(rng.randrange(len(quantity.levels))) if quantity.levels else rng.uniform(*_limits(quantity))
            for quantity in quantities
        )
        exact = Fraction(trained.intercept) + prevalence_shift(trained)
        for term, weight in zip(trained.terms, trained.weights, strict=True):
            value = Fraction(row[term.of[0]]) if term.level is None else Fraction(row[term.of[0]] == term.level)
            exact += Fraction(weight) * (value - Fraction(term.centre)) / Fraction(term.scale)
        result.append(Witness(row, (float(exact),), (abs(float(exact)) * 2.0**-51,)))
    return tuple(result)
