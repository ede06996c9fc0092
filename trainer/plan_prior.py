"""The plan's [prior]: how strong it is for all weights, for the intercept, and for single terms."""

from __future__ import annotations

from collections.abc import Iterable
from decimal import Decimal
from fractions import Fraction

from runtime_min.errors import Problem
from trainer.plan_checks import Section, decimal_text, listed, shown
from trainer.plan_classes import InputPlan, PriorPlan, TermPrior

LEAST_SD = Fraction(1, 10_000)
"""Weights are kept in steps of 2^-30; a narrower prior would be lost in them."""

_NEED_SD = "write a number above 0, or inf for a flat prior"


def read_prior(section: Section) -> PriorPlan:
    section.refuse_other_keys(("sd", "intercept_sd", "term"))
    chosen = section.table.get("sd", "cross-validation")
    if chosen == "evidence":
        todo = 'write "cross-validation", a number above 0, or inf for a flat prior'
        section.report("sd", 'found "evidence", which is not there yet', todo)
    by_rows = chosen in ("cross-validation", "evidence")
    return PriorPlan(
        method="cross-validation" if by_rows else "fixed",
        sd=None if by_rows else _sd(section, "sd", f'write "cross-validation", {_NEED_SD.removeprefix("write ")}'),
        intercept_sd=_sd(section, "intercept_sd", _NEED_SD) if "intercept_sd" in section.table else None,
        terms=_terms(section.section("term")),
    )


def term_problems(where: str, prior: PriorPlan, inputs: Iterable[InputPlan]) -> list[Problem]:
    """What is wrong with the names under [prior.term]; `inputs` with their levels."""
    known: list[str] = []
    whole: dict[str, str] = {}
    for entry in inputs:
        names = [f"{entry.name}={level}" for level in entry.levels]
        known += names[1:] or [entry.name]
        if names:
            whole[entry.name] = f"name one of its levels, {listed(names[1:])}"
            whole[names[0]] = f"remove it: {shown(entry.levels[0])} is the reference level and has no weight"
    known_names = set(known)
    return [
        Problem(
            f"{where}: [prior.term]: {shown(term.name)}",
            "found no term of this name" if term.name not in whole else "found no weight of its own",
            whole.get(term.name, f"name one of the terms, {listed(known)}"),
        )
        for term in prior.terms
        if term.name not in known_names
    ]


def _sd(section: Section, key: str, todo: str) -> Fraction | None:
    value = section.table[key]
    if isinstance(value, Decimal) and value == Decimal("inf"):
        return None
    sd = section.number(key, Fraction(1), todo)
    if not sd > 0:
        section.report(key, f"found {decimal_text(sd)}", todo)
    elif sd < LEAST_SD and section.table.get("per") != "unit":
        found = f"found {decimal_text(sd)}, too narrow for weights kept in steps of 2^-30"
        section.report(key, found, f"write {decimal_text(LEAST_SD)} or more")
    return sd


def _terms(section: Section) -> tuple[TermPrior, ...]:
    terms = []
    for name in section.table:
        term = section.section(name, mark=shown(name))
        term.refuse_other_keys(
            ("mean", "sd", "per"),
            {"sign": ("signs of weights are", "remove the key: mean and sd can keep a weight on one side")},
        )
        per = term.choice("per", "spread", ("spread", "unit"))
        own = "sd" in term.table
        if per == "unit" and not own:
            found = 'found nothing beside per = "unit"'
            term.report("sd", found, "write the sd of the weight per unit: that of [prior] is per spread")
        terms.append(
            TermPrior(
                name=name,
                mean=term.number("mean", Fraction(0)),
                method="fixed" if own else "shared",
                sd=_sd(term, "sd", _NEED_SD) if own else None,
                per=per,
            )
        )
    return tuple(terms)
