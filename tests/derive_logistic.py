"""Derives runtime_min/logistic_constants.py: the numbers of the exponential and the logistic, with their bounds.

    python tests/derive_logistic.py            print the module
    python tests/derive_logistic.py --check    compare it with the file; exit 1 where they differ

The fixed sequence, every operation rounded once in the type:

    t = -|z|;  e = 0 where t < floor, else
    k = t * inv_ln2 rounded to an integer, ties to even
    r = (t - k * ln2_high) - k * ln2_low                  (Cody and Waite 1980)
    p = c_n;  p = p * r + c_(n-1);  ...;  p = p * r + c_0
    e = p * 2^k
    1 / (1 + e) for z >= 0,  e / (1 + e) for z < 0

Coefficients: c0 = c1 = 1; the others minimise the largest |P(r) - exp(r)| / exp(r) over |r| <= R (Remez 1934) and are
then rounded. Degree 11 is the least that keeps the binary64 exponential below 2 ulp (10: 2.6 ulp from the polynomial
alone; 11: 0.1).

The bound of binary64 is derived: `logistic_bounds`. That of binary32 is the largest error over every argument, by
tests/logistic_every_argument.c; the derivation runs for binary32 too, and must lie above it.
"""

import math
import sys
from dataclasses import dataclass
from decimal import ROUND_CEILING, Context, Decimal
from pathlib import Path

import mpmath
from logistic_bounds import Bounds, Constants, derive, ulp

MODULE = Path(__file__).resolve().parents[1] / "runtime_min" / "logistic_constants.py"

mpmath.mp.dps = 60


@dataclass(frozen=True)
class Type:
    """One arithmetic: precision in bits, degree of the polynomial, and where the exponential becomes 0.

    `high_bits`: ln2_high is ln 2 rounded to a multiple of 2^-high_bits. `last_bits`: units in the last place added to
    c2, c3, ... after rounding.
    """

    name: str
    digits: int
    least_normal: int
    degree: int
    floor: int
    high_bits: int
    last_bits: tuple[int, ...]


BINARY32 = Type("binary32", 24, -126, 6, -87, 9, (0, 0, 0, 3, -40))
"""c5 and c6 stand a few last bits from the rounded optimum: the set that was first tried over every argument. The
rounded optimum itself has the same largest errors to six digits, and so has a correctly rounded exponential: they come
from 1 + e and the division, and no polynomial mends them."""

BINARY64 = Type("binary64", 53, -1022, 11, -708, 42, (0,) * 10)

MEASURED_BINARY32 = Bounds(ulps=(1.498326, 2.401877), absolute=8.930719e-08, exponential_ulps=1.176428)
"""Largest errors over every argument: the logistic, and (last) the exponential, which softmax uses alone.
Command: pytest tests/test_logistic_constants.py -m slow"""


def rounded(value: mpmath.mpf, digits: int) -> float:
    """The number of `digits` bits nearest to a positive or negative value, ties to even (normal range)."""
    exponent = math.frexp(float(value))[1] - digits
    return math.ldexp(int(mpmath.nint(mpmath.ldexp(value, -exponent))), exponent)


def largest_remainder(kind: Type) -> mpmath.mpf:
    """R, which |r| never exceeds: |t / ln 2 - k| <= 1/2 + |t / ln 2| (2u + u^2), one u each for inv_ln2 and its
    product; 4u more covers ln2_low and its subtraction, which `derive` checks."""
    unit = mpmath.mpf(2) ** -kind.digits
    return mpmath.ln(2) / 2 + -kind.floor * 2.01 * unit + 4 * unit


def minimax(degree: int, bound: mpmath.mpf) -> list[mpmath.mpf]:
    """c2, ..., c_degree that minimise the largest |P(r) - exp(r)| / exp(r) over |r| <= bound (Remez).

    P = 1 + r + r^2 Q: Q against (exp(r) - 1 - r) / r^2 with the weight r^2 exp(-r). The points of equal error start
    evenly spread over a Chebyshev grid and move to the extremes between the sign changes.
    """
    unknowns = degree - 1
    grid = [bound * mpmath.cos(mpmath.pi * (i + mpmath.mpf(1) / 4) / 400) for i in range(401)]
    weights = [r**2 * mpmath.exp(-r) for r in grid]
    wanted = [1 - (1 + r) * mpmath.exp(-r) for r in grid]
    at = [round(400 * i / unknowns) for i in range(unknowns + 1)]
    for _ in range(40):
        rows = [[weights[a] * grid[a] ** j for j in range(unknowns)] + [(-1) ** i] for i, a in enumerate(at)]
        solution = mpmath.lu_solve(mpmath.matrix(rows), mpmath.matrix([wanted[a] for a in at]))
        found = [solution[j] for j in range(unknowns)]
        errors = [
            w * mpmath.fsum(c * r**j for j, c in enumerate(found)) - v
            for r, w, v in zip(grid, weights, wanted, strict=True)
        ]
        moved = extremes(errors, unknowns + 1)
        if moved == at:
            return found
        at = moved
    raise ArithmeticError("the points of equal error did not settle")


def extremes(errors: list[mpmath.mpf], count: int) -> list[int]:
    """Positions of the largest error of each run of one sign; beyond `count` runs, the smaller end run is dropped."""
    runs: list[int] = []
    for i, error in enumerate(errors):
        if not runs or (error > 0) != (errors[runs[-1]] > 0):
            runs.append(i)
        elif abs(error) > abs(errors[runs[-1]]):
            runs[-1] = i
    while len(runs) > count:
        runs.pop(0 if abs(errors[runs[0]]) < abs(errors[runs[-1]]) else -1)
    if len(runs) < count:
        raise ArithmeticError(f"{len(runs)} runs of one sign in the error, expected {count}")
    return runs


def constants(kind: Type) -> Constants:
    """All numbers of one type."""
    ln2 = mpmath.ln(2)
    high = math.ldexp(int(mpmath.nint(mpmath.ldexp(ln2, kind.high_bits))), -kind.high_bits)
    nearest = [rounded(c, kind.digits) for c in minimax(kind.degree, largest_remainder(kind))]
    moved = [c + by * ulp(c, kind.digits) for c, by in zip(nearest, kind.last_bits, strict=True)]
    return Constants(
        digits=kind.digits,
        least_normal=kind.least_normal,
        inv_ln2=rounded(1 / ln2, kind.digits),
        ln2_high=high,
        ln2_low=rounded(ln2 - high, kind.digits),
        floor=float(kind.floor),
        coefficients=(1.0, 1.0, *moved),
        largest_remainder=float(largest_remainder(kind)),
    )


def upwards(x: float, digits: int) -> float:
    """A decimal of so many digits that is not below x."""
    return float(Context(prec=digits, rounding=ROUND_CEILING).plus(Decimal(x)))


TEMPLATE = '''"""Numbers of the exponential and the logistic in binary32 and binary64, with the bounds of their errors.

GENERATED: python tests/derive_logistic.py > runtime_min/logistic_constants.py

exp(t) for t <= 0 is 0 below `floor`, else 2^k p(r): k = t * inv_ln2 rounded to an integer, ties to even,
r = (t - k * ln2_high) - k * ln2_low, p by Horner's rule from `coefficients` (c0 first). The logistic is 1 / (1 + e) or
e / (1 + e) with e = exp(-|z|). Each number is the exact value, as the shortest decimal of its binary64.

|p(r) / exp(r) - 1| < {poly32} * 2^-24 and {poly64} * 2^-53 for |r| <= {remainder}; k * ln2_high is exact; the least
exponential above `floor` is a normal number.

binary32: every argument tried (command: pytest tests/test_logistic_constants.py -m slow).
exp: {exp32} ulp at most. The derivation alone gives {derived32} ulp for the logistic (z >= 0, z < 0).
binary64: derived for every argument by tests/logistic_bounds.py. exp: {exp64} ulp at most.
"""

BINARY32 = {{
{binary32}}}

BINARY64 = {{
{binary64}}}

# |device probability - logistic(z)| / ulp, (z >= 0, z < 0), floor <= -|z|; an ulp is the distance between neighbours
# in the binade of the larger of the two.
BINARY32_PROBABILITY_ULPS = {ulps32}
BINARY64_PROBABILITY_ULPS = {ulps64}

# |device probability - logistic(z)| <= this for every z but NaN, those beyond the floor included.
BINARY32_PROBABILITY_ERROR = {error32!r}
BINARY64_PROBABILITY_ERROR = {error64!r}
'''


def as_lines(c: Constants) -> str:
    """The entries of one dictionary."""
    lines = [f'    "{name}": {getattr(c, name)!r},\n' for name in ("inv_ln2", "ln2_high", "ln2_low", "floor")]
    inner = "".join(f"        {value!r},\n" for value in c.coefficients)
    return "".join(lines) + f'    "coefficients": (\n{inner}    ),\n'


def module_text() -> str:
    """The generated module. Raises ArithmeticError where a measured error lies above its derived bound."""
    c32, c64 = constants(BINARY32), constants(BINARY64)
    (derived32, poly32), (derived64, poly64) = derive(c32), derive(c64)
    measured = MEASURED_BINARY32
    pairs = [*zip(measured.ulps, derived32.ulps, strict=True), (measured.absolute, derived32.absolute)]
    if not all(found <= bound for found, bound in pairs):
        raise ArithmeticError(f"binary32 was measured at {measured}, above the derived bound {derived32}")
    return TEMPLATE.format(
        poly32=upwards(poly32, 2),
        poly64=upwards(poly64, 2),
        remainder=upwards(max(c32.largest_remainder, c64.largest_remainder), 4),
        exp32=upwards(measured.exponential_ulps, 4),
        exp64=upwards(derived64.exponential_ulps, 4),
        derived32=tuple(upwards(u, 4) for u in derived32.ulps),
        binary32=as_lines(c32),
        binary64=as_lines(c64),
        ulps32=tuple(upwards(u, 4) for u in measured.ulps),
        ulps64=tuple(upwards(u, 4) for u in derived64.ulps),
        error32=upwards(measured.absolute, 4),
        error64=upwards(derived64.absolute, 4),
    )


def main(arguments: list[str]) -> int:
    """Print the module, or compare it with the file."""
    text = module_text()
    if arguments != ["--check"]:
        sys.stdout.write(text)
        return 0
    if MODULE.read_text() == text:
        return 0
    print(f"{MODULE.name}: differs from what this script derives; run it without --check and write its output there")
    return 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
