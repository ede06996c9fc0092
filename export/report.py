"""What a command says: short lines at arm's length for a person, one JSON object for a program."""

from __future__ import annotations

import json
import math
import textwrap
from typing import Any

from export.check import Check, Report
from runtime_min.model import SealedModel, TrainedModel

WIDTH = 80
_INDENT = 12


def _line(title: str, text: str) -> str:
    """A title in the margin, the text beside it, folded at 80 columns."""
    return textwrap.fill(
        text,
        WIDTH,
        initial_indent=f"{title:<{_INDENT}}",
        subsequent_indent=" " * _INDENT,
        break_long_words=False,
        break_on_hyphens=False,
    )


def fit_lines(trained: TrainedModel) -> list[str]:
    """What was fitted, and how it does on the rows that were never fitted."""
    rows, certificate = trained.rows, trained.certificate
    shares = " · ".join(
        f"{weight:,.10g} {name}" for name, weight in zip(trained.classes, trained.class_weights, strict=True)
    )
    dropped = f", {rows.dropped:,} dropped for a missing value" if rows.dropped else ""
    lines = [
        _line("rows", f"{rows.total:,} read{dropped}, {rows.fitted:,} fitted ({shares}), {rows.held_out:,} held out"),
        _line(
            "fit",
            f"{len(trained.terms)} terms; gradient {certificate.gradient:.1e} of its terms, Newton decrement "
            f"{certificate.newton_decrement:.1e}, within {certificate.distance:.1e} posterior sd of the optimum",
        ),
    ]
    held = trained.held_out
    if held is None:
        lines.append(_line("held out", "no rows: nothing says how the model does on rows it has not seen"))
        return lines
    auc = "not defined (one class)" if held.auc is None else f"{held.auc:.3f} (chance 0.500)"
    lines.append(
        _line(
            "held out",
            f"log loss {held.log_loss:.4f} (base rate {held.base_log_loss:.4f}), Brier {held.brier:.4f} "
            f"({held.base_brier:.4f}), area under ROC {auc}",
        )
    )
    return lines


def model_line(sealed: SealedModel) -> str:
    """The model's name, id and arithmetic."""
    return _line("model", f"{sealed.name} {sealed.model_id}, {sealed.arithmetic}")


def check_lines(report: Report) -> list[str]:
    """The budget, each check, and the verdict."""
    lines = []
    if report.budget is not None:
        allowed = "none stated" if report.tolerance is None else f"{float(report.tolerance):.3g}"
        text = f"log-odds off by at most {_up(float(report.budget.log_odds))} (tolerance {allowed})"
        if report.attack is not None:
            text += f"; worst found {float(report.attack.worst):.3g}, {report.attack.share:.0%} of the bound"
        lines.append(_line("budget", text))
    lines += [_check_line(entry, report.accepted) for entry in report.checks]
    failed = [entry for entry in report.checks if entry.ran and not entry.ok]
    missing = [entry for entry in report.checks if not entry.ran and entry.target not in report.accepted]
    if report.ok:
        verdict = f"all {len(report.checks)} checks hold"
        if report.release is not None:
            verdict += f": {report.release}"
        return [*lines, _line("release", verdict)]
    counts = []
    if failed:
        counts.append(f"{len(failed)} of {len(report.checks)} checks failed")
    if missing:
        counts.append(f"{len(missing)} could not run")
    where = "nothing was written" if report.release is None else report.release
    return [*lines, _line("release", f"{', '.join(counts)}: {where}")]


def _check_line(entry: Check, accepted: tuple[str, ...]) -> str:
    mark = "ok" if entry.ok else "FAILED" if entry.ran else "not run" if entry.target in accepted else "NOT RUN"
    return _line(mark, f"{entry.artefact}, {entry.what}: {entry.found}")


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
        "threshold": float(report.budget.threshold),
        "probability": float(report.budget.probability),
        "decision_band": list(report.budget.band),
    }
