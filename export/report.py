"""What a command says: short lines at arm's length for a person, one JSON object for a program."""

from __future__ import annotations

import json
import math
import textwrap
from dataclasses import asdict
from typing import Any

from export.check import Check, Report
from export.parts.board import BOARD
from runtime_min.model import Choice, SealedModel, TrainedModel

WIDTH = 80
_INDENT = 10


def _line(title: str, text: str) -> str:
    """A title in the margin, the text beside it, folded at 80 columns."""
    return _folded(f"{title:<{_INDENT}}{text}", _INDENT)


def _folded(text: str, indent: int) -> str:
    return textwrap.fill(text, WIDTH, subsequent_indent=" " * indent, break_long_words=False, break_on_hyphens=False)


def fit_lines(trained: TrainedModel) -> list[str]:
    """What was fitted, and how it does on the rows that were never fitted."""
    rows, certificate = trained.rows, trained.certificate
    classes = zip(trained.class_weights, trained.classes, strict=True)
    shares = ", ".join(f"{weight:,.10g} {_shown(name)}" for weight, name in classes)
    weightless = rows.total - rows.dropped - rows.fitted - rows.held_out
    dropped = f", {rows.dropped:,} dropped for a missing value" if rows.dropped else ""
    dropped += f", {weightless:,} of weight 0" if weightless else ""
    lines = [
        _line("rows", f"{rows.total:,} read{dropped}, {rows.fitted:,} fitted, {rows.held_out:,} held out"),
        _line("", f"{shares} (the event)"),
        *_choice_lines(trained.choice),
        _line("fit", f"{len(trained.terms)} terms, within {certificate.distance:.1e} posterior sd of the optimum"),
        _line(
            "",
            f"(gradient {certificate.gradient:.1e} of its terms, Newton decrement {certificate.newton_decrement:.1e})",
        ),
    ]
    held = trained.held_out
    if held is None:
        return [*lines, _line("held out", "no rows: nothing says how the model does on rows it has not seen")]
    table = [
        ("log loss", f"{held.log_loss:.4f}", f"{held.base_log_loss:.4f}"),
        ("Brier score", f"{held.brier:.4f}", f"{held.base_brier:.4f}"),
        ("area under ROC", "none" if held.auc is None else f"{held.auc:.4f}", "0.5000"),
    ]
    lines.append(f"{'held out':<{_INDENT}}{'':<18}{'model':<10}base rate {held.base_rate:.4f}")
    return [*lines, *(f"{'':<{_INDENT}}{what:<18}{model:<10}{base}" for what, model, base in table)]


def weight_lines(trained: TrainedModel) -> list[str]:
    """Each weight on standardised columns with its posterior sd, and per unit of its input."""
    spread = [math.sqrt(max(row[at], 0.0)) for at, row in enumerate(trained.covariance)]
    folded = trained.folded()
    rows = [("intercept", trained.intercept, spread[0], folded.intercept)]
    each = zip(trained.terms, trained.weights, spread[1:], folded.weights, strict=True)
    rows += [(_shown(term.name), weight, sd, per_unit) for term, weight, sd, per_unit in each]
    width = max(len(name) for name, *_ in rows)
    head = f"{'weights':<{_INDENT}}{'':<{width}}{'per spread':>12}{'posterior sd':>14}{'per unit':>14}"
    return [head, *(f"{'':<{_INDENT}}{name:<{width}}{w:>12.4f}{sd:>14.4f}{unit:>14.6g}" for name, w, sd, unit in rows)]


def _choice_lines(choice: Choice | None) -> list[str]:
    """The prior's sd where the rows chose it; a choice at an end of the grid wants a look."""
    if choice is None:
        return []
    chosen = next(strength for strength in choice.strengths if strength.sd == choice.sd)
    text = (
        f"sd {choice.sd:g} by {choice.method} in {choice.folds} folds, log loss {chosen.log_loss:.4f} "
        f"(standard error {chosen.standard_error:.4f})"
    )
    sds = [strength.sd for strength in choice.strengths]
    if choice.sd in (min(sds), max(sds)):
        text += "; it is the end of what was tried: the inputs say almost nothing, or all"
    return [_line("prior", text)]


def model_lines(sealed: SealedModel) -> list[str]:
    """The model's name, id and arithmetic, and the ranges that nobody stated."""
    lines = [f"{sealed.name} {sealed.model_id}, {sealed.arithmetic}"]
    assumed = [entry.name for entry in sealed.about.request.inputs if entry.assumed and not entry.levels]
    if assumed:
        text = f"the ranges of {', '.join(assumed)} are the rows' own, a tenth wider: state what the device can deliver"
        lines.append(_line("assumed", text))
    return lines


def _shown(text: str) -> str:
    """Text of a plan or file on a terminal: nothing that moves the cursor or turns the line around."""
    return "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in text)


def check_lines(report: Report) -> list[str]:
    """The budget, each check, and the verdict."""
    lines = []
    if report.budget is not None:
        allowed = "none stated" if report.tolerance is None else f"{float(report.tolerance):.3g}"
        bound = _up(float(report.budget.log_odds))
        lines.append(_line("budget", f"log-odds off by at most {bound}, tolerance {allowed}"))
    if report.attack is not None:
        worst, share = float(report.attack.worst), report.attack.share
        where = " in all inputs there are" if report.attack.everything else ""
        lines.append(_line("", f"worst error found{where} {worst:.3g}, {share:.0%} of that bound"))
    lines += [_line("decision", sentence) for sentence in report.decides]
    lines += ["", *(_check_line(entry, report.accepted) for entry in report.checks), ""]
    lines += _cost_lines(report)
    failed = [entry for entry in report.checks if entry.ran and not entry.ok]
    missing = [entry for entry in report.checks if not entry.ran and entry.target not in report.accepted]
    counts = [f"all {len(report.checks)} checks hold"] if report.ok else []
    if failed:
        counts.append(f"{len(failed)} of {len(report.checks)} checks failed")
    if missing:
        counts.append(f"{len(missing)} of {len(report.checks)} could not run")
    where = "nothing was written" if report.release is None else report.release
    return [*lines, _line("release", f"{', '.join(counts)}: {where}")]


def _cost_lines(report: Report) -> list[str]:
    """A short table: what each function costs on each emulated part."""
    if not report.measures:
        return []
    lines = [f"{'cost':<{_INDENT}}{'':<14}bytes   data  stack  at most"]
    for before, entry in zip((None, *report.measures), report.measures, strict=False):
        if before is None or before.part != entry.part:
            lines.append(f"{'':<{_INDENT}}{entry.part}")
        sizes = f"{entry.text:>6,}{entry.data:>7,}{entry.stack:>7,}"
        lines.append(f"{'':<{_INDENT}}  {entry.function:<13}{sizes} {entry.most:>8,} {entry.counts}")
    return [*lines, ""]


def _check_line(entry: Check, accepted: tuple[str, ...]) -> str:
    mark = "ok" if entry.ok else "FAILED" if entry.ran else "unrun" if entry.target in accepted else "NOT RUN"
    label = entry.artefact.removesuffix(".json").rpartition(".")[2] if entry.artefact.endswith(".json") else None
    of_model = entry.target and entry.artefact != BOARD
    label = label or (f".{entry.artefact.rpartition('.')[2]}" if of_model else entry.artefact)
    return _folded(f"{mark:<8}{label:<13}{_shown(entry.what)}: {_shown(entry.found)}", 21)


def _up(value: float) -> str:
    """Three digits, rounded up: a bound is never shown smaller than it is."""
    if not value > 0:
        return f"{value:.3g}"
    unit = 10.0 ** (math.floor(math.log10(value)) - 2)
    return f"{math.ceil(value / unit) * unit:.3g}"


def report_json(report: Report) -> str:
    """The report for a program, as one JSON object."""
    return json.dumps(
        {
            "model_id": report.model_id,
            "release": report.release,
            "ok": report.ok,
            "checks": [
                {
                    "artefact": entry.artefact,
                    "what": entry.what,
                    "ran": entry.ran,
                    "ok": entry.ok,
                    "differences": entry.differences,
                    "found": entry.found,
                }
                for entry in report.checks
            ],
            "budget": _budget(report),
            "decides": list(report.decides),
            "parts": [asdict(entry) for entry in report.measures],
        },
        indent=1,
    )


def _budget(report: Report) -> dict[str, Any] | None:
    if report.budget is None:
        return None
    return {
        "log_odds": float(report.budget.log_odds),
        "tolerance": None if report.tolerance is None else float(report.tolerance),
        "items": [{"what": item.what, "bound": float(item.bound)} for item in report.budget.items],
        "worst_found": None if report.attack is None else float(report.attack.worst),
        "every_input_tried": report.attack is not None and report.attack.everything,
        "threshold": float(report.budget.threshold),
        "probability": float(report.budget.probability),
        "decision_bands": [list(band) for band in report.budget.bands],
    }
