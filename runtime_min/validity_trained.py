"""What must be true of a trained model, beyond the types of its fields."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from runtime_min.model import Choice, TrainedModel
from runtime_min.names import name_problem
from runtime_min.validity_rules import (
    AGAIN,
    Found,
    class_problems,
    digest_problems,
    distinct,
    is_exact_above_zero,
    shown,
)


def trained_problems(trained: TrainedModel) -> list[Found]:
    """Every problem of a trained model whose fields have the right types."""
    return list(_trained(trained))


def _trained(trained: TrainedModel) -> Iterator[Found]:
    yield from class_problems("trained", trained.classes, len(trained.scores))
    if len(trained.class_weights) != len(trained.classes) or not all(w > 0 for w in trained.class_weights):
        yield "trained.class_weights", "found other than one positive sum a class", AGAIN
    yield from distinct("trained.inputs", [entry.name for entry in trained.inputs], "an input's name")
    yield from distinct("trained.terms", [term.name for term in trained.terms], "a term's name")
    for position, entry in enumerate(trained.inputs):
        place = f"trained.inputs[{position}]"
        if problem := name_problem(entry.name):
            yield f"{place}.name", problem, AGAIN
        if len(entry.levels) == 1:
            yield f"{place}.levels", "found one level", "expected none for a number, else two or more"
        if entry.levels:
            yield from distinct(f"{place}.levels", entry.levels, "a level")
            if entry.typical is not None and entry.typical not in range(len(entry.levels)):
                yield f"{place}.typical", f"found {entry.typical!r}", "expected the position of a level"
    expected = list(_expected_terms(trained))
    found = [(term.name, term.form, term.of, term.level) for term in trained.terms]
    if len(found) != len(expected):
        yield "trained.terms", f"found {len(found)}", f"expected {len(expected)}, from the inputs and their levels"
    for position, (one, other) in enumerate(zip(found, expected, strict=False)):
        if one != other:
            yield f"trained.terms[{position}]", f"found {_term_text(*one)}", f"expected {_term_text(*other)}"
    for position, term in enumerate(trained.terms):
        place = f"trained.terms[{position}]"
        if not term.scale > 0:
            yield f"{place}.scale", f"found {term.scale!r}", "a scale is positive"
        if term.form == "level" and (term.centre, term.scale) != (0.0, 1.0):
            yield place, f"found centre {term.centre!r} and scale {term.scale!r}", "those of a level are 0 and 1"
    width = len(trained.terms)
    for k, score in enumerate(trained.scores):
        if len(score.weights) != width:
            yield f"trained.scores[{k}].weights", f"found {len(score.weights)} weights", f"expected {width}"
    if len(trained.prior.means) != width or len(trained.prior.sds) != width:
        yield "trained.prior", "found another number of terms", f"expected {width}"
    if any(sd is not None and not sd > 0 for sd in (*trained.prior.sds, trained.prior.intercept_sd)):
        yield "trained.prior", "found an sd that is not positive", "a prior sd is positive, or null where it is flat"
    side = len(trained.scores) * (1 + width)
    if len(trained.covariance) != side or any(len(row) != side for row in trained.covariance):
        yield "trained.covariance", "found another shape", f"expected {side} rows of {side}"
    yield from _shares_and_sizes(trained)
    if not is_share(trained.prevalence):
        yield "trained.prevalence", f"found {shown(trained.prevalence)}", SHARE_WANTED
    if trained.choice is not None:
        yield from _choice(trained.choice)
    for position, witness in enumerate(trained.witness):
        if len(witness.inputs) != len(trained.inputs) or not (
            len(witness.log_odds) == len(witness.bounds) == len(trained.scores)
        ):
            yield f"trained.witness[{position}]", "found another number of inputs or log-odds", AGAIN
        if not all(bound >= 0 for bound in witness.bounds):
            yield f"trained.witness[{position}].bounds", "found a negative bound", AGAIN


def _expected_terms(trained: TrainedModel) -> Iterator[tuple[str, str, tuple[int, ...], int | None]]:
    """Name, form, inputs and level of each term, in the order of the inputs and of their levels."""
    for position, entry in enumerate(trained.inputs):
        if not entry.levels:
            yield entry.name, "value", (position,), None
        for level in range(1, len(entry.levels)):
            yield f"{entry.name}={entry.levels[level]}", "level", (position,), level


def _term_text(name: str, form: str, of: Sequence[int], level: int | None) -> str:
    which = "" if level is None else f" {level}"
    return f'"{name}", {form}{which} of input {", ".join(map(str, of))}'


def _shares_and_sizes(trained: TrainedModel) -> Iterator[Found]:
    sizes = {f"certificate.{key}": value for key, value in vars(trained.certificate).items()}
    sizes |= {f"rows.{key}": value for key, value in vars(trained.rows).items() if key != "sha256"}
    held_out = {} if trained.held_out is None else vars(trained.held_out)
    sizes |= {f"held_out.{key}": value for key, value in held_out.items() if value is not None}
    shares = ("brier", "auc", "base_rate", "base_brier")
    for key, value in sizes.items():
        if not value >= 0 or (key.rpartition(".")[2] in shares and not value <= 1):
            yield f"trained.{key}", f"found {value!r}", "expected 0 or more, and of a share 1 or less"
    yield from digest_problems("trained.rows.sha256", trained.rows.sha256)


SHARE_WANTED = "expected a share between 0 and 1"


def is_share(text: str | None) -> bool:
    """True for None and for an exact text above 0 and below 1."""
    from fractions import Fraction  # loading a model without a prevalence needs no rationals

    return text is None or (is_exact_above_zero(text) and Fraction(text) < 1)


def _choice(choice: Choice) -> Iterator[Found]:
    place = "trained.choice"
    if not choice.sd > 0:
        yield f"{place}.sd", f"found {choice.sd!r}", "a prior sd is positive"
    if choice.folds < 0:
        yield f"{place}.folds", f"found {choice.folds}", "expected 0 or more"
    sds = [entry.sd for entry in choice.strengths]
    if any(not sd > 0 for sd in sds) or sds != sorted(set(sds)):
        yield f"{place}.strengths", "found sds that do not grow from above 0", AGAIN
    for position, entry in enumerate(choice.strengths):
        if not entry.standard_error >= 0:
            found = f"found {entry.standard_error!r}"
            yield f"{place}.strengths[{position}].standard_error", found, "expected 0 or more"
