"""Sealing from outside: rounding against NumPy, struct and IEEE 754, the fold against 25-digit coefficients, thresholds
against published ones, the datum rule by its definition, and the device's log-odds against the exact ones.

Sources: `check_values/facts/ieee754.json` (IEEE 754-2019), `check_values/facts/cost_thresholds.json` (Elkan 2001),
`check_values/sets/*.json` (fits at 60 digits by mpmath, standardised and raw). All else follows from definitions, in
rational arithmetic.
"""

from __future__ import annotations

import itertools
import json
import math
import struct
from dataclasses import replace
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from models import Quantity, make_request, make_trained, sample_sealed_models

from runtime_min import score
from runtime_min.codec import load, load_trained, sealed_text, trained_text
from runtime_min.errors import SealError
from runtime_min.model import DecisionRequest, Score, TrainedModel
from runtime_min.sealing import datum_of, fold, round_to, seal, seal_request, threshold_of
from runtime_min.validity import device_numbers

CHECK_VALUES = Path(__file__).parent / "check_values"
IEEE = json.loads((CHECK_VALUES / "facts" / "ieee754.json").read_text(encoding="utf-8"))
COSTS = json.loads((CHECK_VALUES / "facts" / "cost_thresholds.json").read_text(encoding="utf-8"))["values"]
SETS = ("pima_tr", "lowbwt_hl22", "spector", "orings_binary", "iris_vv", "crabs", "beetle", "womensrole")
SAMPLES = sample_sealed_models()
DIGITS = {"binary32": 24, "binary64": 53}


def bits32(number: float) -> str:
    return struct.pack(">f", number).hex()


# --- rounding --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("case", IEEE["decimal_to_binary32"], ids=lambda case: case["text"])
def test_decimal_is_rounded_to_binary32_once(case: dict[str, str]) -> None:
    """Among the cases are four that rounding by way of binary64 gets wrong."""
    assert bits32(round_to("binary32", Fraction(case["text"]))) == case["bits"]


@pytest.mark.parametrize("case", IEEE["binary64"], ids=lambda case: case["what"])
def test_seventeen_digits_are_rounded_to_their_binary64(case: dict[str, str]) -> None:
    number = round_to("binary64", Fraction(case["seventeen_digits"]))
    assert struct.pack(">d", number).hex() == case["bits"]


@pytest.mark.parametrize(
    "case", [c for c in IEEE["binary32"] if c["what"] != "minus zero"], ids=lambda case: case["what"]
)
def test_nine_digits_are_rounded_to_their_binary32(case: dict[str, str]) -> None:
    assert bits32(round_to("binary32", Fraction(case["nine_digits"]))) == case["bits"]


def _binary32(bits: int) -> float:
    return float(struct.unpack(">f", bits.to_bytes(4, "big"))[0])


@given(st.integers(0, 0x7F7FFFFE), st.sampled_from([-1, 0, 1]), st.booleans())
@example(0, 0, False)  # half the smallest subnormal
@example(0x007FFFFF, 0, False)  # between the largest subnormal and the smallest normal
@example(0x00800000, 0, True)
@example(0x3F800000, 0, False)
def test_ties_of_binary32_go_to_the_even_neighbour(bits: int, side: int, negative: bool) -> None:
    """The midpoint of two neighbours, and the points 2^-400 beside it; numpy's cast is asked at the midpoint too."""
    sign = -1 if negative else 1
    midpoint = (Fraction(_binary32(bits)) + Fraction(_binary32(bits + 1))) / 2
    expected = bits + (bits % 2 if side == 0 else side > 0)
    found = round_to("binary32", sign * (midpoint + side * Fraction(2) ** -400))
    assert found == sign * _binary32(expected)
    assert math.copysign(1.0, found) == (sign if expected else 1)
    if side == 0:
        assert abs(found) == np.float32(float(midpoint)) == struct.unpack("<f", struct.pack("<f", float(midpoint)))[0]


@given(st.floats(allow_nan=False, allow_infinity=False))
@example(math.ldexp(1 - 2.0**-25, 128))
@example(math.ldexp(1 - 2.0**-25 - 2.0**-53, 128))
@example(-(2.0**-150))
def test_binary64_is_rounded_to_binary32_as_numpy_casts_it(number: float) -> None:
    with np.errstate(over="ignore", under="ignore"):
        assert round_to("binary32", Fraction(number)) == np.float32(number)
    assert round_to("binary64", Fraction(number)) == number


@given(st.integers(-(10**40), 10**40), st.integers(1, 10**40), st.integers(-320, 320))
def test_quotient_is_rounded_to_binary64_as_python_divides_integers(above: int, below: int, exponent: int) -> None:
    """Python's division of integers is correctly rounded (reference, `int.__truediv__`); subnormals included."""
    numerator, denominator = above * 10 ** max(exponent, 0), below * 10 ** max(-exponent, 0)
    try:
        expected = numerator / denominator
    except OverflowError:
        expected = math.inf if numerator > 0 else -math.inf
    assert round_to("binary64", Fraction(numerator, denominator)) == expected


def test_overflow_begins_halfway_beyond_the_largest_number() -> None:
    for arithmetic, digits, limit in (("binary32", 24, 128), ("binary64", 53, 1024)):
        largest = Fraction(2) ** limit - Fraction(2) ** (limit - digits)
        half = Fraction(2) ** (limit - digits - 1)
        assert round_to(arithmetic, largest) == float(largest)
        assert round_to(arithmetic, largest + half) == math.inf
        assert round_to(arithmetic, -largest - half) == -math.inf
        assert round_to(arithmetic, largest + half - Fraction(1, 10**9)) == float(largest)


# --- the fold --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_folded_model_is_the_same_affine_function(name: str) -> None:
    """Both forms agree, exactly, at the origin and one step along each term: that is, everywhere."""
    trained, _ = SAMPLES[name]
    exact = fold(trained)[0]
    width = len(trained.terms)
    for point in [[0] * width, *([int(j == k) for j in range(width)] for k in range(width))]:
        standardised = Fraction(trained.intercept) + sum(
            Fraction(weight) * (value - Fraction(term.centre)) / Fraction(term.scale)
            for weight, term, value in zip(trained.weights, trained.terms, point, strict=True)
        )
        assert standardised == exact.intercept + sum(w * v for w, v in zip(exact.weights, point, strict=True))


def trained_of(names: list[str], fit: dict[str, Any], mean: dict[str, str], sd: dict[str, str]) -> TrainedModel:
    """A trained model whose numbers are a record's, each rounded to binary64."""
    invented = make_trained([Quantity(name, "", "0", "1") for name in names], 1)
    terms = tuple(
        replace(term, centre=float(mean[name]), scale=float(sd[name]))
        for term, name in zip(invented.terms, names, strict=True)
    )
    weights = tuple(float(fit["standardised"][name]) for name in names)
    return replace(invented, terms=terms, scores=(Score(float(fit["standardised"]["intercept"]), weights),))


@pytest.mark.parametrize("name", SETS)
def test_fold_of_published_sets_gives_their_raw_coefficients(name: str) -> None:
    """Intercept, weight, mean and sd carry one rounding each, u = 2^-53; the fold adds none, `folded` one at last."""
    record = json.loads((CHECK_VALUES / "sets" / f"{name}.json").read_text(encoding="utf-8"))
    u = 2.0**-53
    for fit in record["map"]["fits"]:
        mean, sd = record["map"]["mean"], record["map"]["sd"]
        folded = trained_of(record["inputs"], fit, mean, sd).folded()
        spread = 0.0
        for entry, weight in zip(record["inputs"], folded.weights, strict=True):
            raw = Fraction(fit["raw"][entry])
            assert abs(Fraction(weight) - raw) <= 3.01 * u * abs(raw)
            spread += abs(float(raw) * float(mean[entry]))
        intercept = Fraction(fit["raw"]["intercept"])
        allowed = u * (abs(float(intercept)) + abs(float(fit["standardised"]["intercept"])) + 3.01 * spread)
        assert abs(Fraction(folded.intercept) - intercept) <= Fraction(allowed * 1.01)


# --- threshold and datum ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("case", COSTS, ids=lambda case: case["threshold"])
def test_threshold_is_the_published_one_rounded_once(case: dict[str, Any]) -> None:
    """Elkan (2001): costs of right decisions are subtracted from those of wrong ones."""
    false_alarm = str(case["cost_false_alarm"] - case["cost_true_negative"])
    miss = str(case["cost_miss"] - case["cost_true_positive"])
    decision = DecisionRequest(false_alarm, miss, None)
    published = Fraction(case["log_odds_threshold"])
    assert abs(threshold_of(decision) - published) <= Fraction(1, 10**24) * max(1, abs(published))
    quantities = [Quantity("flow", "", "0", "1")]
    for arithmetic in DIGITS:
        asked = make_request(quantities, arithmetic=arithmetic, decision=decision)
        sealed = seal_request(make_trained(quantities, 3), asked)
        assert sealed.decision.low == sealed.decision.high == round_to(arithmetic, published)


@pytest.mark.parametrize(
    ("low", "high", "datum"),
    [
        ("273.15", "323.15", 298),  # midpoint 298.15; between 256 and 512 the step of 8 bits is 2
        ("256", "258", 256),  # midpoint 257, a tie between 128 and 129 steps of 2
        ("258", "260", 260),  # midpoint 259, a tie between 129 and 130
        ("-12", "-10", -11),
        ("0.1", "0.3", Fraction(205, 1024)),  # 0.2 = 204.8 / 1024, between 1/8 and 1/4 the step is 1/1024
        ("510", "512", 512),  # midpoint 511, a tie between 255 and 256: the next power of two
        ("0", "10", None),  # midpoint 5 is not farther from 0 than half the width, 5
        ("0.001", "10", 5),
        ("-95", "250", None),
        ("-1", "1", None),
    ],
)
def test_datum_is_the_midpoint_to_eight_bits_where_the_range_lies_away_from_zero(
    low: str, high: str, datum: int | Fraction | None
) -> None:
    assert datum_of(Fraction(low), Fraction(high)) == datum


@given(st.fractions(-(10**12), 10**12), st.fractions(Fraction(1, 10**12), 10**12))
def test_datum_by_its_definition(low: Fraction, width: Fraction) -> None:
    midpoint, datum = low + width / 2, datum_of(low, low + width)
    if datum is None:
        assert abs(midpoint) <= width / 2
        return
    assert abs(midpoint) > width / 2
    mantissa, exponent = math.frexp(float(datum))
    assert mantissa * 256 == int(mantissa * 256)
    assert Fraction(float(datum)) == datum
    step = Fraction(2) ** (exponent - 8)
    assert abs(midpoint - datum) <= step / 2


@pytest.mark.parametrize("name", SAMPLES)
def test_every_device_number_is_its_exact_value_rounded_once(name: str) -> None:
    trained, sealed = SAMPLES[name]
    exact = fold(trained)[0]
    by_term = dict(zip([term.name for term in trained.terms], exact.weights, strict=True))
    intercept = exact.intercept
    for entry, asked, term in zip(sealed.inputs, sealed.about.request.inputs, sealed.terms, strict=True):
        if entry.levels:
            wanted = [Fraction(0), *(by_term[f"{entry.name}={level}"] for level in entry.levels[1:])]
        else:
            wanted = [by_term[entry.name]]
            assert entry.low == round_to(sealed.arithmetic, Fraction(str(asked.low)))
            assert entry.high == round_to(sealed.arithmetic, Fraction(str(asked.high)))
            datum = datum_of(Fraction(str(asked.low)), Fraction(str(asked.high)))
            assert term.datum == (None if datum is None else float(datum))
            intercept += by_term[entry.name] * (datum or 0)
        assert list(term.weights[0]) == [round_to(sealed.arithmetic, weight) for weight in wanted]
    assert sealed.intercepts[0] == round_to(sealed.arithmetic, intercept)
    assert not any(number == 0 and math.copysign(1, number) < 0 for _, number in device_numbers(sealed))


# --- the device against the trained model ----------------------------------------------------------------------------

NAMES = [f"sensor_{position}" for position in range(4)]
TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=8)


@st.composite
def quantities_of_models(draw: st.DrawFn) -> list[Quantity]:
    quantities = []
    for name in NAMES[: draw(st.integers(1, 4))]:
        if draw(st.integers(0, 3)) == 0:
            levels = draw(st.lists(TEXTS.filter(bool), min_size=2, max_size=5, unique=True))
            quantities.append(
                Quantity(name, "", levels=tuple(levels), missing=draw(st.sampled_from(["fault", "typical"])))
            )
            continue
        low = draw(st.fractions(-1000, 1000, max_denominator=1000))
        width = draw(st.fractions(Fraction(1, 10), 500, max_denominator=1000))
        policies = draw(st.sampled_from(["fault", "clamp"])), draw(st.sampled_from(["fault", "typical"]))
        quantities.append(Quantity(name, draw(TEXTS), str(low), str(low + width), (), *policies))
    return quantities


@given(quantities_of_models(), st.integers(0, 10**6), st.sampled_from(list(DIGITS)), st.data())
@settings(deadline=None)
def test_device_log_odds_are_the_exact_ones_but_for_rounding(
    quantities: list[Quantity], seed: int, arithmetic: str, data: st.DataObject
) -> None:
    """A plain bound: every number that meets passes at most p + 4 roundings, u each, p the number of inputs.

    Input, weight, difference, product and up to p sums; sizes taken at the inputs themselves.
    """
    trained = make_trained(quantities, seed)
    sealed = seal_request(trained, make_request(quantities, arithmetic=arithmetic))
    shares = [data.draw(st.floats(0, 1)) for _ in quantities]
    row = [
        float(int(share * (len(entry.levels) - 1))) if entry.levels else entry.low + (entry.high - entry.low) * share
        for entry, share in zip(sealed.inputs, shares, strict=True)
    ]
    row = [min(max(value, entry.low), entry.high) for value, entry in zip(row, sealed.inputs, strict=True)]
    exact = fold(trained)[0].intercept
    size = abs(Fraction(sealed.intercepts[0]))
    for term, weight in zip(trained.terms, fold(trained)[0].weights, strict=True):
        value = Fraction(row[term.of[0]]) if term.level is None else Fraction(int(row[term.of[0]] == term.level))
        exact += weight * value
        datum = Fraction(sealed.terms[term.of[0]].datum or 0)
        size += abs(weight) * (abs(value) + abs(datum))
    found = score.log_odds(sealed, row)
    u = Fraction(1, 2 ** DIGITS[arithmetic])
    assert abs(Fraction(found) - exact) <= (len(quantities) + 4) * u * size * Fraction(101, 100)


@given(quantities_of_models(), st.integers(0, 10**6), st.sampled_from(list(DIGITS)), TEXTS, TEXTS, TEXTS)
@settings(deadline=None)
def test_every_model_reads_back_from_its_file(
    tmp_path_factory: pytest.TempPathFactory,
    quantities: list[Quantity],
    seed: int,
    arithmetic: str,
    one: str,
    other: str,
    purpose: str,
) -> None:
    folder = tmp_path_factory.getbasetemp()
    trained = make_trained(quantities, seed, classes=(one, other if other != one else other + "'"))
    sealed = seal_request(trained, make_request(quantities, arithmetic=arithmetic), purpose)
    (folder / "trained.json").write_text(trained_text(trained), encoding="utf-8", newline="")
    (folder / "sealed.json").write_text(sealed_text(sealed), encoding="utf-8", newline="")
    assert load_trained(folder / "trained.json") == trained
    assert load(folder / "sealed.json") == sealed


# --- what cannot be sealed -------------------------------------------------------------------------------------------

PUMP = [Quantity("flow", "m³/h", "0", "180"), Quantity("impeller", levels=("closed", "open"))]


def sentences(**changed: Any) -> list[str]:
    arguments = {"ranges": {"flow": (0, 180)}, **changed}
    with pytest.raises(SealError) as caught:
        seal(make_trained(PUMP, 5), **arguments)
    return [str(problem) for problem in caught.value.problems]


def test_seal_names_every_mistake_of_the_caller_at_once() -> None:
    found = sentences(ranges={"impeller": (0, 1), "pressure": (1, 0)}, threshold=math.nan, tolerance=-1.0, name="Pump")
    assert found[:3] == [
        'ranges["flow"]: is missing; give (low, high)',
        'ranges["pressure"]: is no input of the model; name one of flow, impeller',
        'ranges["impeller"]: is an input with levels; leave it out',
    ]
    assert found[3:] == [
        'ranges["pressure"]: found (1, 0); give finite (low, high), low < high',
        "threshold: found nan; give a finite number in log-odds",
        "tolerance: found -1.0; give a finite number above 0, or None",
        'name: found "Pump", which is not an identifier of lower-case letters; choose another name',
    ]


@pytest.mark.parametrize("limits", [(0,), (0, math.inf), (math.nan, 1), ("a", "b"), 3, (1, 1), "01"])
def test_seal_refuses_a_range_that_is_none(limits: Any) -> None:
    assert sentences(ranges={"flow": limits}) == [
        f'ranges["flow"]: found {limits}; give finite (low, high), low < high'
    ]


def test_seal_refuses_ranges_without_names() -> None:
    assert sentences(ranges=[(0, 180)]) == ['ranges: found a list; give {"name": (low, high)}']


def test_seal_takes_limits_of_any_kind_of_number() -> None:
    trained = make_trained(PUMP, 5)
    plain = seal(trained, ranges={"flow": (0.5, 180.0)}, tolerance=0.25)
    for limits in (np.array([0.5, 180], np.float32), [Fraction(1, 2), 180], (np.float64(0.5), np.int64(180))):
        assert seal(trained, ranges={"flow": limits}, tolerance=np.float32(0.25)) == plain
    assert plain.about.request.inputs[0].low == "1/2"


def test_arithmetic_that_is_not_known_is_named() -> None:
    assert sentences(arithmetic="int8") == ['arithmetic: found "int8"; choose binary64 or binary32 or int16 or int32']


def test_number_too_large_for_binary32_is_named_with_its_place() -> None:
    assert sentences(ranges={"flow": (0.0, 1e39)}) == [
        'input "flow": range: 1e+39 is too large for binary32; rescale the inputs, or choose binary64'
    ]


def test_range_that_rounding_closes_is_named() -> None:
    found = sentences(ranges={"flow": (16777216.0, 16777217.0)})
    assert found == [
        'input "flow": the range 16777216 to 16777217 has no width once rounded; widen the range, or choose binary64'
    ]
    assert seal(make_trained(PUMP, 5), ranges={"flow": (16777216.0, 16777217.0)}, arithmetic="binary64")


def test_request_for_other_inputs_is_refused() -> None:
    with pytest.raises(SealError) as caught:
        seal_request(make_trained(PUMP, 5), make_request(PUMP[:1]))
    assert str(caught.value) == "request: asks for the inputs flow; the trained model has flow, impeller"


def test_typical_value_is_clamped_into_the_range() -> None:
    quantities = [Quantity("flow", "m³/h", "0", "180", missing="typical")]
    trained = make_trained(quantities, 5)
    for mean, expected in ((-7.0, 0.0), (300.0, 180.0), (0.1, float(np.float32(0.1)))):
        moved = replace(trained, inputs=(replace(trained.inputs[0], typical=mean),))
        assert seal_request(moved, make_request(quantities)).inputs[0].typical == expected


def test_samples_cover_both_arithmetics_datum_and_levels() -> None:
    models = [sealed for _, sealed in SAMPLES.values()]
    assert {sealed.arithmetic for sealed in models} == set(DIGITS)
    forms = {(term.form, term.datum is None) for term in itertools.chain.from_iterable(s.terms for s in models)}
    assert forms == {("value", True), ("value", False), ("level", True)}
