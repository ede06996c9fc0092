"""The witness: log-odds of invented rows, each bound held against exact rational arithmetic."""

from __future__ import annotations

import math
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from runtime_min.errors import FitError
from runtime_min.model import Score, TrainedInput, TrainedTerm
from trainer.witness import INVENTED_ROWS, log_odds_with_bounds, shift_to_field, witness_of

INPUTS = (
    TrainedInput("suction", "kPa", (), None),
    TrainedInput("impeller", "", ("closed", "semi_open", "open"), None),
    TrainedInput("water", "°C", (), None),
)
TERMS = (
    TrainedTerm("suction", "value", (0,), None, 31.4, 47.1),
    TrainedTerm("impeller=semi_open", "level", (1,), 1, 0.0, 1.0),
    TrainedTerm("impeller=open", "level", (1,), 2, 0.0, 1.0),
    TrainedTerm("water", "value", (2,), None, 298.2, 7.3),
)
SCORE = Score(-1.3, (-0.82, 0.4, -0.3, 1.7))
LIMITS = [(-95.0, 250.0), (0.0, 2.0), (273.15, 323.15)]


def exact_log_odds(terms: tuple[TrainedTerm, ...], score: Score, row: tuple[float, ...]) -> tuple[Fraction, Fraction]:
    """(log-odds, sum of the sizes of what is added), exactly."""
    total, size = Fraction(score.intercept), abs(Fraction(score.intercept))
    for term, weight in zip(terms, score.weights, strict=True):
        value = Fraction(row[term.of[0]]) if term.level is None else Fraction(int(row[term.of[0]] == term.level))
        part = Fraction(weight) * (value - Fraction(term.centre)) / Fraction(term.scale)
        total, size = total + part, size + abs(part)
    return total, size


def test_rows_lie_within_the_ranges_and_levels_are_whole() -> None:
    found = witness_of(INPUTS, TERMS, (SCORE,), LIMITS)
    assert len(found) == INVENTED_ROWS + 4
    for witness in found:
        for value, (low, high) in zip(witness.inputs, LIMITS, strict=True):
            assert low <= value <= high
        assert witness.inputs[1] in (0.0, 1.0, 2.0)
    assert {witness.inputs[1] for witness in found} == {0.0, 1.0, 2.0}
    assert len({witness.inputs for witness in found[:INVENTED_ROWS]}) == INVENTED_ROWS


def test_corners_hold_both_ends_and_the_extreme_log_odds() -> None:
    corners = [witness.inputs for witness in witness_of(INPUTS, TERMS, (SCORE,), LIMITS)[INVENTED_ROWS:]]
    # By the signs: more suction lowers the log-odds, warmer water raises them; semi_open is the highest level, open
    # the lowest.
    assert corners == [(-95.0, 0.0, 273.15), (250.0, 2.0, 323.15), (250.0, 2.0, 273.15), (-95.0, 1.0, 323.15)]


def test_rows_follow_from_the_names_alone() -> None:
    first = witness_of(INPUTS, TERMS, (SCORE,), LIMITS)
    other = witness_of(INPUTS, TERMS, (Score(9.0, (1.0, 2.0, 3.0, 4.0)),), LIMITS)
    assert [w.inputs for w in first[:INVENTED_ROWS]] == [w.inputs for w in other[:INVENTED_ROWS]]
    renamed = (TrainedInput("pressure", "kPa", (), None), *INPUTS[1:])
    assert [w.inputs for w in witness_of(renamed, TERMS, (SCORE,), LIMITS)] != [w.inputs for w in first]


def test_bound_holds_and_is_no_more_than_a_hundred_units_of_the_sum() -> None:
    """The natural size of the error is u times what is added, u = 2^-53."""
    for witness in witness_of(INPUTS, TERMS, (SCORE,), LIMITS):
        exact, size = exact_log_odds(TERMS, SCORE, witness.inputs)
        assert abs(Fraction(witness.log_odds[0]) - exact) <= Fraction(witness.bounds[0])
        assert witness.bounds[0] <= 100 * 2.0**-53 * float(size)


magnitudes = st.integers(-1074, 300).flatmap(lambda e: st.floats(1, 2).map(lambda m: math.ldexp(m, e)))
signed = st.tuples(magnitudes, st.sampled_from([-1.0, 1.0])).map(math.prod)
moderate = st.floats(-1e6, 1e6)


@st.composite
def cases(draw: st.DrawFn) -> tuple[tuple[TrainedTerm, ...], Score, tuple[float, ...]]:
    """Ordinary numbers, or numbers of any magnitude: products that underflow are among them."""
    wild = draw(st.booleans())
    width = draw(st.integers(1, 12))
    number = signed if wild else moderate
    scale = st.integers(-300, 300).map(lambda e: math.ldexp(1.1, e)) if wild else st.floats(1e-3, 1e3)
    terms = tuple(
        TrainedTerm(f"x{position}", "value", (position,), None, draw(number), draw(scale)) for position in range(width)
    )
    score = Score(draw(number), tuple(draw(number) for _ in terms))
    return terms, score, tuple(draw(number) for _ in terms)


@given(cases())
@settings(deadline=None, max_examples=400)
def test_bound_holds_for_numbers_of_any_magnitude(
    case: tuple[tuple[TrainedTerm, ...], Score, tuple[float, ...]],
) -> None:
    terms, score, row = case
    log_odds, bounds = log_odds_with_bounds(terms, score, np.array([row]))
    if not (np.isfinite(log_odds[0]) and np.isfinite(bounds[0])):
        return
    exact, size = exact_log_odds(terms, score, row)
    assert abs(Fraction(float(log_odds[0])) - exact) <= Fraction(float(bounds[0]))
    # Not silly: a few u of what is added, and where products underflow a few of the smallest numbers.
    small = (len(terms) + sum(map(abs, score.weights))) * 16 * 2.0**-1074
    assert Fraction(float(bounds[0])) <= (len(terms) + 5) * Fraction(1, 2**52) * size + Fraction(small)


shares = st.integers(1, 10**6 - 1).map(lambda parts: Fraction(parts, 10**6))
class_weights = st.tuples(st.floats(1e-12, 1e12), st.floats(1e-12, 1e12))


@given(cases(), shares, class_weights)
@settings(deadline=None, max_examples=200)
def test_bound_holds_with_the_shift_to_the_field(
    case: tuple[tuple[TrainedTerm, ...], Score, tuple[float, ...]], share: Fraction, sums: tuple[float, float]
) -> None:
    """The shift by mpmath with 100 digits: logit(share in the field) - ln(events / others among the rows)."""
    terms, score, row = case
    shift = shift_to_field(share, sums)
    with mpmath.workdps(100):
        field = mpmath.mpf(share.numerator) / (share.denominator - share.numerator)
        exact_shift = mpmath.log(field) - mpmath.log(mpmath.mpf(sums[1]) / mpmath.mpf(sums[0]))
        scaled = Fraction(int(mpmath.nint(exact_shift * mpmath.mpf(2) ** 250)), 2**250)
    assert abs(Fraction(shift) - scaled) <= Fraction(1, 2**53) * abs(scaled) + Fraction(1, 2**240)
    log_odds, bounds = log_odds_with_bounds(terms, score, np.array([row]), shift)
    if not (np.isfinite(log_odds[0]) and np.isfinite(bounds[0])):
        return
    exact, size = exact_log_odds(terms, score, row)
    assert abs(Fraction(float(log_odds[0])) - exact - scaled) <= Fraction(float(bounds[0])) + Fraction(1, 2**240)
    small = (len(terms) + sum(map(abs, score.weights))) * 16 * 2.0**-1074
    allowed = (len(terms) + 6) * Fraction(1, 2**52) * (size + abs(scaled)) + Fraction(small)
    assert Fraction(float(bounds[0])) <= allowed


@pytest.mark.parametrize("terms", [1, 40, 400])
def test_bound_is_within_a_hundred_times_the_error_that_occurs(terms: int) -> None:
    """Ordinary models: the largest error of the rows against their mean bound."""
    rng = np.random.default_rng(terms)
    inputs = tuple(TrainedInput(f"x{position}", "", (), None) for position in range(terms))
    columns = tuple(
        TrainedTerm(entry.name, "value", (position,), None, float(rng.normal()), float(rng.uniform(0.5, 2)))
        for position, entry in enumerate(inputs)
    )
    score = Score(float(rng.normal()), tuple(rng.normal(size=terms).tolist()))
    found = witness_of(inputs, columns, (score,), [(-3.0, 3.0)] * terms)
    errors = [abs(Fraction(w.log_odds[0]) - exact_log_odds(columns, score, w.inputs)[0]) for w in found]
    assert all(error <= Fraction(w.bounds[0]) for error, w in zip(errors, found, strict=True))
    assert float(np.mean([w.bounds[0] for w in found])) <= 100 * float(max(errors))


def test_log_odds_that_are_not_finite_are_refused() -> None:
    with pytest.raises(FitError) as caught:
        witness_of(INPUTS[:1], TERMS[:1], (Score(0.0, (1e200,)),), [(-1e300, 1e300)])
    assert str(caught.value) == "ranges: found limits at which the log-odds are not finite; narrow the ranges"
