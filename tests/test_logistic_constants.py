"""The numbers of the exponential and the logistic keep the errors that runtime_min/logistic_constants.py states.

Expected values: the hard points of tests/check_values/facts/logistic.json and the tanh table beside it (see its
README), and mpmath at 60 digits. The sequence under test is written out anew here, from its description in
derive_logistic.py; the scorer must give the same bits.
"""

import json
import math
import random
import shutil
import struct
import subprocess
from dataclasses import dataclass, replace
from pathlib import Path
from types import SimpleNamespace

import derive_logistic
import mpmath
import pytest
from logistic_bounds import derive

from runtime_min import arithmetic, logistic_constants

HERE = Path(__file__).resolve().parent
FACTS = HERE / "check_values" / "facts"
POINTS = json.loads((FACTS / "logistic.json").read_text())
TYPES = ("binary32", "binary64")
C_FLAGS = ("-std=c99", "-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Werror", "-O2", "-ffp-contract=off")


@dataclass(frozen=True)
class Case:
    """One arithmetic with the numbers of the module."""

    name: str
    numbers: dict
    ulps: tuple[float, float]
    absolute: float

    def fl(self, x: float) -> float:
        return struct.unpack("<f", struct.pack("<f", x))[0] if self.name == "binary32" else x


def case(name: str) -> Case:
    upper = name.upper()
    names = (upper, f"{upper}_PROBABILITY_ULPS", f"{upper}_PROBABILITY_ERROR")
    return Case(name, *(getattr(logistic_constants, part) for part in names))


def device(z: float, of: Case) -> float:
    """The fixed sequence, each operation rounded once."""
    fl, n = of.fl, of.numbers
    t = -abs(z)
    if t < n["floor"]:
        e = 0.0
    else:
        k = round(fl(t * n["inv_ln2"]))
        r = fl(fl(t - fl(k * n["ln2_high"])) - fl(k * n["ln2_low"]))
        *lower, p = n["coefficients"]
        for c in reversed(lower):
            p = fl(fl(p * r) + c)
        e = fl(p * 2.0**k)
    return fl(1.0 / fl(1.0 + e)) if z >= 0 else fl(e / fl(1.0 + e))


def exact_logistic(z: float) -> mpmath.mpf:
    with mpmath.workdps(60):
        return 1 / (1 + mpmath.exp(-mpmath.mpf(z)))


def errors(z: float, of: Case) -> tuple[float, float]:
    """(ulps, absolute) at z; ulps count only above the floor. An ulp is that of the larger of exact and computed."""
    computed, exact = device(z, of), exact_logistic(z)
    off = abs(computed - exact)
    if -abs(z) < of.numbers["floor"]:
        return 0.0, float(off)
    digits = 24 if of.name == "binary32" else 53
    ulp = math.ldexp(1.0, mpmath.frexp(max(exact, computed))[1] - digits)
    return float(off / ulp), float(off)


def within(zs: list[float], of: Case) -> bool:
    found = [(z, *errors(z, of)) for z in zs]
    return all(ulps <= of.ulps[z < 0] and absolute <= of.absolute for z, ulps, absolute in found)


def drawn(of: Case, count: int) -> list[float]:
    """Random arguments of both signs: a third near 0, a third down to the floor, a third of any size; and edges."""
    rng = random.Random(20250101)
    floor = of.numbers["floor"]
    sizes = [rng.choice((rng.uniform(0, 8), rng.uniform(0, -floor), 2 ** rng.uniform(-100, 7))) for _ in range(count)]
    below = of.fl(floor * (1 + 2.0**-23)) if of.name == "binary32" else math.nextafter(floor, -math.inf)
    return [of.fl(s * rng.choice((-1, 1))) for s in sizes] + [floor, -floor, below, -below, 0.0, -0.0]


def planted(of: Case) -> Case:
    """c2 moved by 64 units in its last place."""
    c = of.numbers["coefficients"]
    step = math.ldexp(64.0, math.frexp(c[2])[1] - (24 if of.name == "binary32" else 53))
    return replace(of, numbers={**of.numbers, "coefficients": (*c[:2], c[2] + step, *c[3:])})


def measure(source: str, folder: Path, of: Case, *first: str, extra: tuple[str, ...] = ()) -> list[float]:
    """Build one of the C checkers without contraction, run it with the module's numbers, read what it prints."""
    compiler = next(filter(None, map(shutil.which, ("cc", "gcc", "clang"))), None)
    if compiler is None:
        pytest.skip("no C compiler: install gcc or clang")
    program = folder / "checker"
    subprocess.run([compiler, *C_FLAGS, *extra, str(HERE / source), "-o", str(program), "-lm"], check=True)
    n = of.numbers
    numbers = (n["inv_ln2"], n["ln2_high"], n["ln2_low"], n["floor"], *n["coefficients"])
    done = subprocess.run([str(program), *first, *map(repr, numbers)], check=True, capture_output=True, text=True)
    return [float.fromhex(word) if "x" in word else float(word) for word in done.stdout.split()]


def test_constants_file_is_what_the_script_derives():
    assert derive_logistic.MODULE.read_text() == derive_logistic.module_text()


@pytest.mark.parametrize("name", TYPES)
def test_every_number_belongs_to_its_type(name):
    of = case(name)
    numbers = [*of.numbers["coefficients"], *(v for k, v in of.numbers.items() if k != "coefficients")]
    assert [of.fl(x) for x in numbers] == numbers
    assert of.numbers["coefficients"][:2] == (1.0, 1.0)


@pytest.mark.parametrize("name", TYPES)
def test_hard_points_stay_inside_the_bounds(name):
    of = case(name)
    points = [point for point in POINTS["points"] if point["format"] == name]
    assert len(points) > 20
    for point in points:
        z, value = float.fromhex(point["z"]), float.fromhex(point["value"])
        assert of.fl(float(exact_logistic(z))) == value, "mpmath and the outside value differ"
    assert within([float.fromhex(point["z"]) for point in points], of)


@pytest.mark.parametrize("name", TYPES)
def test_logistic_of_infinity_is_zero_or_one(name):
    published = {point["z"]: float(point["value"]) for point in POINTS["non_finite"]["binary64"]}
    for text in ("inf", "-inf"):
        assert device(float(text), case(name)) == published[text]


@pytest.mark.parametrize("name", TYPES)
def test_tanh_table_agrees_to_the_stated_error(name):
    of = case(name)
    for row in json.loads((FACTS / "tanh_table.json").read_text())["values"]:
        with mpmath.workdps(60):
            doubled, listed = 2 * mpmath.mpf(row["x"]), mpmath.mpf(row["logistic_of_2x_25"])
            z = of.fl(float(doubled))
            moved = abs(doubled - z) / 4  # the logistic's slope is 1/4 at most
            assert abs(device(z, of) - listed) <= of.absolute + moved + mpmath.mpf("1e-25")
            assert abs(device(-z, of) - (1 - listed)) <= of.absolute + moved + mpmath.mpf("1e-25")


@pytest.mark.parametrize("name", TYPES)
def test_random_points_stay_inside_the_bounds(name):
    of = case(name)
    assert within(drawn(of, 3000), of)


@pytest.mark.parametrize("name", TYPES)
def test_coefficient_moved_by_64_last_bits_leaves_the_bounds(name):
    of = planted(case(name))
    assert not within(drawn(of, 3000), of)


@pytest.mark.parametrize("name", TYPES)
def test_scorer_follows_the_bounded_sequence_bit_for_bit(name):
    of = case(name)
    rounded = arithmetic.ROUND[name]
    for z in drawn(of, 2000):
        assert arithmetic.logistic(z, SimpleNamespace(**of.numbers), rounded).hex() == device(z, of).hex(), z.hex()


@pytest.mark.parametrize("kind", [derive_logistic.BINARY32, derive_logistic.BINARY64])
def test_derivation_sees_a_coefficient_moved_by_64_last_bits(kind):
    of = case(kind.name)
    sound = derive_logistic.constants(kind)
    bounds, _ = derive(replace(sound, coefficients=planted(of).numbers["coefficients"]))
    assert bounds.ulps[1] > of.ulps[1] + 1.0
    assert bounds.absolute > of.absolute


def test_derivation_refuses_a_high_part_too_long_for_exact_products():
    sound = derive_logistic.constants(derive_logistic.BINARY64)
    with pytest.raises(ArithmeticError, match=r"^not so: k \* ln2_high is exact$"):
        derive(replace(sound, ln2_high=math.log(2.0), ln2_low=2.3190468138462996e-17))


def test_derivation_refuses_a_floor_where_the_exponential_is_subnormal():
    sound = derive_logistic.constants(derive_logistic.BINARY32)
    with pytest.raises(ArithmeticError, match=r"^not so: p \* 2\^k is normal$"):
        derive(replace(sound, floor=-87.4))


def test_derived_bounds_hold_on_two_million_sampled_arguments(tmp_path):
    above, below, _, absolute, *_ = measure("logistic_sampled.c", tmp_path, case("binary64"), "2000000", "7")
    bound = case("binary64")
    assert above <= bound.ulps[0]
    assert below <= bound.ulps[1]
    assert absolute <= bound.absolute
    # The sample comes close: a bound far above what happens would be no use, and a sampler far below none either.
    assert above > 0.95 * bound.ulps[0]
    assert below > 0.8 * bound.ulps[1]


@pytest.mark.slow
def test_derived_bounds_hold_on_a_hundred_million_sampled_arguments(tmp_path):
    of = case("binary64")
    bounds, _ = derive(derive_logistic.constants(derive_logistic.BINARY64))
    above, below, exponential, absolute, *_ = measure("logistic_sampled.c", tmp_path, of, "100000000", "2025")
    assert above <= bounds.ulps[0] <= of.ulps[0]
    assert below <= bounds.ulps[1] <= of.ulps[1]
    assert exponential <= bounds.exponential_ulps < 2.0
    assert absolute <= bounds.absolute <= of.absolute


@pytest.mark.slow
def test_binary32_bounds_hold_for_every_argument(tmp_path):
    of = case("binary32")
    above, below, exponential, absolute, least, *_ = measure(
        "logistic_every_argument.c", tmp_path, of, extra=("-pthread",)
    )
    recorded = derive_logistic.MEASURED_BINARY32
    # The reference is good to 2^-26 ulp; the figures are printed to six decimals.
    assert (above, below) == pytest.approx(recorded.ulps, abs=2e-6)
    assert exponential == pytest.approx(recorded.exponential_ulps, abs=2e-6)
    assert absolute == pytest.approx(recorded.absolute, rel=1e-6)
    assert above <= of.ulps[0]
    assert below <= of.ulps[1]
    assert absolute <= of.absolute
    assert least >= 2.0**-126, "an exponential above the floor is subnormal"


@pytest.mark.slow
def test_every_argument_finds_a_coefficient_moved_by_64_last_bits(tmp_path):
    of = planted(case("binary32"))
    _, below, *_ = measure("logistic_every_argument.c", tmp_path, of, extra=("-pthread",))
    assert below > of.ulps[1] + 1.0
