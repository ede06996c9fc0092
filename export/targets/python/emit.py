"""Sealed model -> a Python module. The templates read like the module; here stands only what goes into them."""

from __future__ import annotations

from fractions import Fraction
from functools import lru_cache
from pathlib import Path
from typing import Any

from jinja2 import Environment, FileSystemLoader, StrictUndefined, Template

from export.targets import (
    SELF_TEST_ROUNDING,
    SELF_TEST_SUBNORMALS,
    SELF_TEST_TABLES,
    SELF_TEST_VECTOR,
    SelfTest,
)
from export.targets.functions import exponential_of, table_of
from export.targets.python import lexical
from runtime_min.arithmetic import ACCUMULATOR_BITS, from_bits
from runtime_min.errors import Problem, ReleaseError
from runtime_min.folding import unit_map
from runtime_min.integer_score import missing_count
from runtime_min.model import INTEGERS, SealedModel
from runtime_min.names import delivered_unit

CODES = {
    "tables": SELF_TEST_TABLES,
    "rounding": SELF_TEST_ROUNDING,
    "subnormals": SELF_TEST_SUBNORMALS,
    "vector": SELF_TEST_VECTOR,
}

# The largest binary32 number is (2 - 2^-23) 2^127; below half of it no sum of rounded steps comes near.
BINARY32_SAFE = Fraction(2) ** 127


def emit(sealed: SealedModel, self_test: SelfTest) -> bytes:
    """The module, in ASCII. Raises ReleaseError where a step could leave binary32 within the ranges."""
    if sealed.arithmetic == "binary32" and not _largest_sum(sealed) <= BINARY32_SAFE:
        found = "a step of the log-odds can be too large for binary32 within the ranges"
        raise ReleaseError(Problem(f"{sealed.name}.py", found, "narrow the ranges, or choose binary64"))
    integers = sealed.arithmetic in INTEGERS
    parts = _integer_parts(sealed) if integers else _float_parts(sealed)
    common = _common_parts(sealed)
    text = _template(integers).render(sealed=sealed, self_test=self_test, codes=CODES, **common, **parts)
    return text.encode("ascii")


@lru_cache(maxsize=2)
def _template(integers: bool) -> Template:
    environment = Environment(
        loader=FileSystemLoader(Path(__file__).parent),
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        autoescape=False,
    )
    for rule in (lexical.value, lexical.string, lexical.docstring, lexical.comment, lexical.target, lexical.pair):
        environment.filters[rule.__name__] = rule
    environment.filters["number"] = lexical.integer if integers else lexical.number
    environment.filters["listed"] = lexical.listed
    environment.globals.update(constant=lexical.constant, local=lexical.local, delivered=delivered_unit)
    return environment.get_template("integers.py.jinja" if integers else "floats.py.jinja")


def _common_parts(sealed: SealedModel) -> dict[str, Any]:
    """What the templates need beside the model: lists of names and expressions, one entry an input or term."""
    names = [entry.name for entry in sealed.inputs]
    return {
        "steps": list(zip(sealed.inputs, sealed.terms, strict=True)),
        "xs": [lexical.local("x", name) for name in names],
        "wrong_count": f"{sealed.name} takes {len(names)} inputs, found %d",
        "tables": _tables(sealed),
    }


def _float_parts(sealed: SealedModel) -> dict[str, Any]:
    names = [entry.name for entry in sealed.inputs]
    steps = list(zip(sealed.inputs, sealed.terms, strict=True))
    with_datum = [entry.name for entry, term in steps if term.datum is not None]
    products = [entry.name for entry, term in steps if term.form == "value"]
    exponential = exponential_of(sealed)
    return {
        "integers": False,
        "counts_of": (),
        "single": sealed.arithmetic == "binary32",
        "unlike_unit": any(delivered_unit(entry) != entry.unit for entry in sealed.inputs),
        "exponential": exponential,
        "floats": [f"float({lexical.local('x', name)})" for name in names],
        "ds": [lexical.local("d", name) for name in with_datum],
        "differences": [f"{lexical.local('x', name)} - {lexical.constant('DATUM', name)}" for name in with_datum],
        "ps": [lexical.local("p", name) for name in products],
        "products": [
            f"{lexical.constant('WEIGHT', name)} * {lexical.local('d' if name in with_datum else 'x', name)}"
            for name in products
        ],
        "counts": sorted({1, 2, len(names), len(with_datum), len(products)} - {0}),
        "coefficients": [f"C{degree}" for degree in range(len(exponential.coefficients))],
    }


def _integer_parts(sealed: SealedModel) -> dict[str, Any]:
    bits = ACCUMULATOR_BITS[sealed.arithmetic]
    return {
        "integers": True,
        "missing": missing_count(sealed),
        "no_log_odds": -(1 << (bits - 1)),
        "counts_of": [(entry, *unit_map(entry)) for entry in sealed.inputs if entry.counts is not None],
        "natural": lambda units: f"{units / 2 ** (sealed.accumulator_shift or 0):.6g}",
        "table": table_of(sealed),
        "signed": lambda raw: lexical.integer(from_bits(raw, sealed.arithmetic)),
        "width": bits // 8,
    }


def _tables(sealed: SealedModel) -> list[str]:
    """Every device number as tuples of the module's names, in the order of `device_numbers`, the CRC's."""
    scalars = [
        lexical.constant(key.upper(), entry.name)
        for key in ("low", "high", "typical")
        for entry in sealed.inputs
        if getattr(entry, key) is not None
    ]
    scalars.append("INTERCEPT")
    steps = list(zip(sealed.inputs, sealed.terms, strict=True))
    scalars += [lexical.constant("DATUM", entry.name) for entry, term in steps if term.datum is not None]
    scalars += [lexical.constant("SHIFT", entry.name) for entry, term in steps if term.shift is not None]
    tuples = []
    for entry, term in steps:
        if term.form == "level":
            tuples += [*_tuples(scalars), lexical.constant("WEIGHTS", entry.name)]
            scalars = []
        else:
            scalars.append(lexical.constant("WEIGHT", entry.name))
    logistic = ["DROP", "STEP"] if sealed.exponential is None else ["INV_LN2", "LN2_FIRST", "LN2_REST", "EXP_FLOOR"]
    last = "NODES" if sealed.exponential is None else "EXP_COEFFICIENTS"
    return [*tuples, *_tuples(scalars), "THRESHOLDS", *_tuples(logistic), last]


def _tuples(names: list[str]) -> list[str]:
    """One tuple of these names; of no names, none."""
    return [f"({lexical.listed(names)}{',' if len(names) == 1 else ''})"] if names else []


def _largest_sum(sealed: SealedModel) -> Fraction:
    """Bound on the size of every product and partial sum, before rounding, over the ranges."""
    total = abs(Fraction(sealed.intercepts[0]))
    for entry, term in zip(sealed.inputs, sealed.terms, strict=True):
        if term.form == "level":
            total += max(abs(Fraction(weight)) for weight in term.weights[0])
        else:
            reach = max(abs(Fraction(limit) - Fraction(term.datum or 0)) for limit in (entry.low, entry.high))
            total += max(reach, abs(Fraction(term.weights[0][0])) * reach)
    return total
