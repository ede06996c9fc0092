"""Writes and reads scripts for Gappa, the independent prover of rounding-error bounds (de Dinechin, Lauter and
Melquiond 2011, Certifying the floating-point implementation of an elementary function using Gappa).

The script says what a device computes and what training means, and asks how far they can be apart. It shares no code
with the error budget: its numbers come from the two models alone.
"""

import re
import subprocess
from fractions import Fraction

import mpmath
import numpy as np

from runtime_min.model import SealedModel, TrainedModel

FORMATS = {"binary32": "float<ieee_32, ne>", "binary64": "float<ieee_64, ne>"}
PRECISION = 200
"""Bits of Gappa's own arithmetic, and of the quotients written as intervals."""


def script(trained: TrainedModel, sealed: SealedModel) -> str:
    """Ask Gappa for the largest |device log-odds - trained log-odds| (two classes).

    Capitals are real numbers (training), small letters what the device has: X0 a real input, x0 its rounding. A real
    is held within half a gap of the device limits, its rounding within the limits; a count is a whole number, there as
    here. Both are of what the device delivers: of a value less its origin, the value. A level is a number within the
    hull of its device weights, as far from the trained one as the worst level is.
    """
    definitions = [f"@rnd = {FORMATS[sealed.arithmetic]};", "@whole = fixed<0, ne>;"]
    given: list[str] = []
    hints: list[str] = []
    exact = Fraction(trained.intercept) + _prevalence(trained)
    computed, meant = _dyadic(Fraction(sealed.intercepts[0])), "B"
    for j, (entry, term) in enumerate(zip(sealed.inputs, sealed.terms, strict=True)):
        columns = [
            (column, weight) for column, weight in zip(trained.terms, trained.weights, strict=True) if column.of == (j,)
        ]
        device = [Fraction(weight) for weight in term.weights[0]]
        if entry.levels:
            real = [Fraction(0)] * len(entry.levels)
            for column, weight in columns:
                real[column.level] = Fraction(weight) / Fraction(column.scale)
            off = [u - w for u, w in zip(device, real, strict=True)]
            given += [f"l{j} in [{_dyadic(min(device))}, {_dyadic(max(device))}]"]
            given += [f"l{j} - L{j} in [{_enclosure(min(off))[0]}, {_enclosure(max(off))[1]}]"]
            addend, real_addend = f"l{j}", f"L{j}"
        else:
            [(column, weight)] = columns
            gain = Fraction(entry.counts.gain) if entry.counts else Fraction(1)
            offset = Fraction(entry.counts.offset) if entry.counts else Fraction(entry.origin or 0)
            slope = Fraction(weight) / Fraction(column.scale)
            datum = Fraction(term.datum or 0)
            exact += slope * (offset + gain * datum - Fraction(column.centre))
            slope *= gain
            low, high = Fraction(entry.low), Fraction(entry.high)
            if entry.counts is None:
                low, high = _reals(sealed.arithmetic, entry.low, entry.high)
            definitions += [f"X{j} = whole(C{j});"] if entry.counts else []
            given += [f"X{j} in [{_dyadic(low)}, {_dyadic(high)}]"]
            given += [f"x{j} in [{_dyadic(Fraction(entry.low))}, {_dyadic(Fraction(entry.high))}]"]
            given += [f"W{j} in [{', '.join(_enclosure(slope))}]"]
            definitions += [f"x{j} = rnd(X{j});"]
            u, value, real_value, exact_value = _dyadic(device[0]), f"x{j}", f"X{j}", f"x{j}"
            if datum:
                less = f"- {_dyadic(datum)}"
                definitions += [f"d{j} rnd= x{j} {less};", f"D{j} = X{j} {less};"]
                value, real_value, exact_value = f"d{j}", f"D{j}", f"(x{j} {less})"
            definitions += [f"p{j} rnd= {u} * {value};", f"P{j} = W{j} * {real_value};"]
            # Gappa's own way to split u d - W D has second-order terms, which cost about 1e-7 of the bound.
            parts = [f"({u} - W{j}) * {exact_value}", f"W{j} * (x{j} - X{j})"]
            parts += [f"{u} * (d{j} - {exact_value})"] if datum else []
            hints += [f"{u} * {value} - W{j} * {real_value} -> {' + '.join(parts)};"]
            addend, real_addend = f"p{j}", f"P{j}"
        definitions += [f"z{j} rnd= {computed} + {addend};", f"Z{j} = {meant} + {real_addend};"]
        computed, meant = f"z{j}", f"Z{j}"
    given += [f"B in [{', '.join(_enclosure(exact))}]"]
    return "\n".join([*definitions, "{ " + " /\\\n  ".join(given), f"  -> {computed} - {meant} in ? }}", *hints, ""])


def _prevalence(trained: TrainedModel) -> Fraction:
    """logit(prevalence) - logit(weighted share of the event), to 60 digits and more."""
    if trained.prevalence is None:
        return Fraction(0)
    with mpmath.workdps(70):
        field = Fraction(trained.prevalence)
        share = Fraction(trained.class_weights[1]) / sum(map(Fraction, trained.class_weights))
        logits = [mpmath.log(mpmath.mpf(p.numerator) / (p.denominator - p.numerator)) for p in (field, share)]
        return Fraction(str(logits[0] - logits[1]))


def prove(text: str) -> Fraction:
    """Run Gappa on a script: the bound that it proves."""
    # Without the threshold Gappa passes over a better bound that is not better by a hundredth.
    command = ["gappa", f"-Eprecision={PRECISION}", "-Echange-threshold=0"]
    ran = subprocess.run(command, input=text, capture_output=True, text=True, timeout=300, check=False)
    answer = re.search(r"in \[(\S+?)(?: \{[^}]*\})?, (\S+?)(?: \{[^}]*\})?\]", ran.stdout + ran.stderr)
    if ran.returncode or not answer:
        raise AssertionError(f"Gappa proved nothing:\n{ran.stdout}{ran.stderr}")
    return max(abs(_number(end)) for end in answer.groups())


def _dyadic(number: Fraction) -> str:
    """A dyadic rational exactly: integer b exponent."""
    exponent = number.denominator.bit_length() - 1
    if number.denominator != 1 << exponent:
        raise ValueError(f"{number} is not dyadic")
    return f"{number.numerator}b{-exponent}"


def _enclosure(number: Fraction) -> tuple[str, str]:
    """Neighbouring dyadic rationals of PRECISION bits round a number."""
    size = abs(number.numerator).bit_length() - number.denominator.bit_length()
    unit = Fraction(2) ** (size - PRECISION)
    units = number / unit
    return _dyadic(units.__floor__() * unit), _dyadic(units.__ceil__() * unit)


def _reals(arithmetic: str, low: float, high: float) -> tuple[Fraction, Fraction]:
    """Every real that rounds to a number from low to high lies between these."""
    dtype = np.float32 if arithmetic == "binary32" else np.float64
    below, above = np.nextafter(dtype(low), dtype(-np.inf)), np.nextafter(dtype(high), dtype(np.inf))
    return (Fraction(low) + Fraction(float(below))) / 2, (Fraction(high) + Fraction(float(above))) / 2


def _number(text: str) -> Fraction:
    """What Gappa prints: 123, 123b-4, 123e-4."""
    digits, _, exponent = text.partition("b")
    if exponent:
        return int(digits) * Fraction(2) ** int(exponent)
    digits, _, exponent = text.partition("e")
    return int(digits) * Fraction(10) ** int(exponent or 0)
