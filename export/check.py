"""Run every artefact of a release for real, and hold it against the vectors, the witness and the budget.

The order is the argument: the files are the ones that were written; the sealed model follows from the trained one and
everything else from the sealed one; the reference scorer gives the vectors' bits and stays within the budget of what
training itself computed; and each artefact, run, gives the same bits. Nothing of the plan or the rows is needed.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from fractions import Fraction
from pathlib import Path
from typing import Any

from export import vectors
from export.advice import advise
from export.attack import Attack, attack
from export.budget import Budget, derive
from export.contents import MANIFEST, MANIFEST_FORMAT, contents
from export.diagnose import differences
from export.parts import ALL, PARTS, Part
from export.parts.board import BOARD, run_board
from export.parts.measure import Measure, measure
from export.parts.program import TroubleError
from export.parts.run import run_part
from export.targets import TARGETS, Run, Vector
from export.targets.c.own_compiler import compile_own
from export.targets.c.prove import prove as prove_header
from export.thresholds import wrong_thresholds
from export.vector_files import read_vectors
from export.witness import witness_misses
from runtime_min.codec import load, load_trained, sealed_text
from runtime_min.errors import BudgetError, FirmlogitError, Problem, ReleaseError
from runtime_min.model import SealedModel, TrainedModel
from runtime_min.sealing import seal_request


@dataclass(frozen=True)
class Check:
    """One check: of what, how, whether it ran and held, how many rows (or files) differ, and one sentence."""

    artefact: str
    what: str
    ran: bool
    ok: bool
    differences: int
    found: str
    target: str = ""


@dataclass(frozen=True)
class Report:
    """All checks of one release. `accepted`: targets and parts that may stand without having run.

    `measures`: what each function costs on the emulated parts that ran. `decides`: sentences on decisions that the
    ranges never allow, none as a rule.
    """

    model_id: str
    release: str | None
    checks: tuple[Check, ...]
    budget: Budget | None
    attack: Attack | None
    tolerance: Fraction | None
    accepted: tuple[str, ...]
    measures: tuple[Measure, ...] = ()
    decides: tuple[str, ...] = ()

    @property
    def ok(self) -> bool:
        """Every check held, and every artefact ran or was accepted without."""
        return all(entry.ok or (not entry.ran and entry.target in self.accepted) for entry in self.checks)

    @property
    def broken(self) -> bool:
        """A check ran and did not hold."""
        return any(entry.ran and not entry.ok for entry in self.checks)


def hold_tolerance(trained: TrainedModel, sealed: SealedModel) -> Budget:
    """The error budget. Raises BudgetError where it is larger than the tolerance: what costs most, what would fit."""
    budget = derive(trained, sealed)
    tolerance = sealed.about.request.tolerance
    if tolerance is not None and not budget.log_odds <= Fraction(tolerance):
        raise BudgetError(advise(trained, sealed, budget, Fraction(tolerance)))
    return budget


def never_decided(sealed: SealedModel, budget: Budget) -> tuple[str, ...]:
    """What the model answers nowhere in the ranges: a threshold out of reach is most often a mistake of units."""
    unit = 1.0 if sealed.accumulator_shift is None else 2.0**-sealed.accumulator_shift
    low, high = sealed.decision.low * unit, sealed.decision.high * unit
    least, most = budget.reach
    never = [f'"{name}"' for name, out in ((sealed.classes[1], most < high), (sealed.classes[0], least >= low)) if out]
    if not never:
        return ()
    span = f"the log-odds reach {least:.3g} to {most:.3g} in the ranges, the thresholds are {low:.3g} and {high:.3g}"
    return (f"never {' nor '.join(never)}: {span}; look at the costs, the no-call and the ranges",)


def check_release(
    into: str | Path,
    *,
    thorough: bool = False,
    unchecked: Sequence[str] = (),
    on: Sequence[str] = (),
    prove: bool = False,
    compare_text: bool = True,
    progress: Callable[[str], None] = lambda step: None,
) -> Report:
    """Check a release folder; it may be a copy, far from plan and rows.

    thorough: every way of running each artefact and a longer attack. unchecked: targets and parts that need not run.
    on: emulated parts, by name, that run the C header beside the one of the plan.
    prove: a static analyser follows the C header too, for all inputs.
    compare_text: also write every file anew and compare bytes (off, only running can find a mistake).

    Raises ReleaseError where the folder is no release, or a part is none.
    """
    into = Path(into)
    manifest = _read_manifest(into)
    report = Report(str(manifest["model_id"]), str(into), (), None, None, None, tuple(unchecked))
    checks: list[Check] = [_digests(into, manifest)]
    try:
        sealed = load(into / f"{manifest['model']}.sealed.json")
        trained = load_trained(into / f"{manifest['model']}.trained.json")
        vectors_on_file = read_vectors(sealed, into / "vectors.csv")
    except FirmlogitError as error:
        name = Path(error.problems[0].where.partition(": ")[0]).name
        checks.append(_judged(name, "loads", len(error.problems), str(error.problems[0])))
        return replace(report, checks=tuple(checks))
    checks += _same_model(into, manifest, sealed, trained, compare_text)
    checks.append(_reference(sealed, vectors_on_file, into / "vectors.csv"))
    progress("deriving the error budget and attacking it")
    budget_checks, budget, found = _budget(trained, sealed, thorough)
    checks += budget_checks
    for name in manifest["write"]:
        progress(f"running {TARGETS[name].file(sealed)}")
        artefact = into / TARGETS[name].file(sealed)
        for run in TARGETS[name].run(artefact, sealed, [vector.inputs for vector in vectors_on_file], thorough):
            checks.append(_compared(sealed, vectors_on_file, run, artefact.name, name))
    compiler = sealed.about.request.compiler
    if compiler is not None and "c" in manifest["write"]:
        progress("compiling with the plan's compiler")
        artefact = into / TARGETS["c"].file(sealed)
        run, size = compile_own(compiler, artefact, sealed)
        checks.append(Check(artefact.name, run.what, run.ran, run.trouble is None, 0, run.trouble or size, "c"))
    if prove:
        progress("proving the C header for all inputs")
        checks += _proofs(into / TARGETS["c"].file(sealed), sealed)
    measures: list[Measure] = []
    for part in _parts(sealed, on):
        progress(f"running {TARGETS['c'].file(sealed)} on {part.shown}")
        found_there, costs = _on_part(part, into, sealed, vectors_on_file, thorough)
        checks += found_there
        measures += costs
    tolerance = sealed.about.request.tolerance
    return replace(
        report,
        checks=tuple(checks),
        measures=tuple(measures),
        decides=() if budget is None else never_decided(sealed, budget),
        budget=budget,
        attack=found,
        tolerance=None if tolerance is None else Fraction(tolerance),
    )


def _proofs(header: Path, sealed: SealedModel) -> list[Check]:
    if not header.exists():
        return [Check(header.name, "proof", False, False, 0, 'there is none; add "c" to write', "c")]
    found = prove_header(header, sealed)
    return [Check(header.name, one.what, one.ran, one.ok, one.alarms, one.found, "c") for one in found]


def _parts(sealed: SealedModel, on: Sequence[str]) -> list[Part]:
    """The part of the plan and those of the request, each once; "all" are those that suit the arithmetic."""
    asked = sealed.about.request.part
    fitting = [name for name, part in PARTS.items() if sealed.arithmetic in part.arithmetics]
    names = [*([asked] if asked else []), *(name for name in on if name != ALL), *(fitting if ALL in on else [])]
    for name in names:
        if name not in PARTS:
            raise ReleaseError(Problem("part", f'found "{name}"', "name one of " + ", ".join(PARTS)))
    return [PARTS[name] for name in dict.fromkeys(names)]


def _on_part(
    part: Part, into: Path, sealed: SealedModel, on_file: Sequence[Vector], thorough: bool
) -> tuple[list[Check], tuple[Measure, ...]]:
    """The header's vectors on an emulated part, the program for the real board there, and what each function costs."""
    header = into / TARGETS["c"].file(sealed)
    if not header.exists():
        return [Check(header.name, part.shown, False, False, 0, 'there is none; add "c" to write', part.name)], ()
    runs = list(run_part(part, header, sealed, [vector.inputs for vector in on_file], thorough))
    checks = [_compared(sealed, on_file, run, header.name, part.name) for run in runs]
    if not all(run.ran for run in runs):
        return checks, ()
    what = f"{part.shown}, emulated"
    try:
        checks.append(Check(BOARD, what, True, True, 0, run_board(part, into, sealed, on_file), part.name))
    except TroubleError as trouble:
        checks.append(Check(BOARD, what, True, False, 0, str(trouble), part.name))
    within = [vector.inputs for vector in on_file if vector.expected.fault == 0]
    try:
        return checks, measure(part, header.read_bytes(), sealed, within)
    except TroubleError as trouble:
        return [*checks, Check(header.name, f"cost on {part.shown}", True, False, 0, str(trouble), part.name)], ()


def _judged(artefact: str, what: str, count: int, found: str) -> Check:
    return Check(artefact, what, True, count == 0, count, found)


def _read_manifest(into: Path) -> dict[str, Any]:
    path = into / MANIFEST
    try:
        manifest = json.loads(path.read_bytes())
    except OSError as error:
        raise ReleaseError(
            Problem(str(path), f"cannot be read ({error.strerror})", "name the folder of a release")
        ) from None
    except ValueError as error:
        raise ReleaseError(Problem(str(path), f"is not JSON ({error})", "copy the release again")) from None
    wanted = {"format": str, "model": str, "model_id": str, "write": list, "files": dict}
    if not isinstance(manifest, dict) or manifest.get("format") != MANIFEST_FORMAT:
        raise ReleaseError(Problem(str(path), "is not the manifest of a release", "name the folder of a release"))
    wrong = [key for key, kind in wanted.items() if not isinstance(manifest.get(key), kind)]
    wrong += [f"write: {name}" for name in manifest["write"] if name not in TARGETS] if not wrong else []
    wrong += [f"files: {name}" for name in manifest["files"] if Path(name).name != name] if not wrong else []
    if "/" in str(manifest.get("model")) or wrong:
        damage = "is damaged at " + ", ".join(wrong or ["model"])
        raise ReleaseError(Problem(str(path), damage, "copy the release again"))
    return manifest


def _digests(into: Path, manifest: dict[str, Any]) -> Check:
    other = []
    for name, digest in manifest["files"].items():
        try:
            same = hashlib.sha256((into / name).read_bytes()).hexdigest() == digest
        except OSError:
            same = False
        if not same:
            other.append(name)
    beside = {entry.name for entry in into.iterdir()} - {*manifest["files"], MANIFEST}
    unnamed = sorted(name for name in beside if name.startswith((f"{manifest['model']}.", f"{manifest['model']}_")))
    said = [
        f"{words}: {', '.join(names)}"
        for words, names in (("not as written", other), ("named like the model, and not in the manifest", unnamed))
        if names
    ]
    found = "; ".join(said) or f"{len(manifest['files'])} files as written"
    return _judged(MANIFEST, "digest of every file", len(other) + len(unnamed), found)


def _same_model(
    into: Path, manifest: dict[str, Any], sealed: SealedModel, trained: TrainedModel, compare_text: bool
) -> Iterator[Check]:
    name = f"{sealed.name}.sealed.json"
    same = sealed.model_id == manifest["model_id"]
    found = sealed.model_id if same else f"the sealed model is {sealed.model_id}, the manifest names another"
    for key in ("rows_sha256", "plan_sha256"):
        if same and manifest.get(key) != getattr(sealed.about, key):
            same, found = False, f"the manifest's {key} is not that of the sealed model"
    yield _judged(name, "model id", int(not same), found)
    try:
        again = seal_request(trained, sealed.about.request, sealed.about.purpose, sealed.about.plan_sha256)
        other = _first_other(sealed_text(sealed), sealed_text(again))
    except FirmlogitError as error:
        other = str(error.problems[0])
    yield _judged(name, "sealed anew", int(bool(other)), other or "every number follows from the trained model")
    if compare_text:
        made = vectors.make_vectors(sealed, trained)
        files = contents(sealed, trained, manifest["write"], made)
        differing = [file for file, data in files.items() if not _holds(into / file, data)]
        found = f"{len(files)} files, byte for byte" if not differing else f"other bytes in {', '.join(differing)}"
        unnamed = sorted(files.keys() - manifest["files"].keys()) if not differing else []
        if unnamed:
            found = f"the manifest does not name {', '.join(unnamed)}"
        yield _judged("every file", "written anew", len(differing) + len(unnamed), found)


def _holds(path: Path, data: bytes) -> bool:
    try:
        return path.read_bytes() == data
    except OSError:
        return False


def _first_other(have: str, want: str) -> str:
    """Where two sealed files part, in words; empty where they do not."""

    def leaves(value: Any, place: str) -> Iterator[tuple[str, Any]]:
        if isinstance(value, dict):
            for key, entry in value.items():
                yield from leaves(entry, f"{place}.{key}" if place else key)
        elif isinstance(value, list):
            for position, entry in enumerate(value):
                yield from leaves(entry, f"{place}[{position}]")
        else:
            yield place, value

    if have == want:
        return ""
    wanted = dict(leaves(json.loads(want), ""))
    found = dict(leaves(json.loads(have), ""))
    for place in wanted:
        if found.get(place) != wanted[place]:
            return f"{place} is {found.get(place)!r}, the trained model gives {wanted[place]!r}"
    return "has numbers that the trained model does not give"


def _reference(sealed: SealedModel, on_file: Sequence[Vector], path: Path) -> Check:
    """The vectors on file against the reference scorer; whether they are all of them, writing anew finds."""
    wrong = [row for row, vector in enumerate(on_file) if vectors.expected(sealed, vector.inputs) != vector.expected]
    found = f"{len(on_file)} rows, the same bits"
    if wrong:
        found = f"line {wrong[0] + 2} ({on_file[wrong[0]].kind}) is not what the reference scorer gives"
    elif not on_file:
        found = "holds no row"
    return _judged(path.name, "reference scorer", len(wrong) or int(not on_file), found)


def _budget(
    trained: TrainedModel, sealed: SealedModel, thorough: bool
) -> tuple[list[Check], Budget | None, Attack | None]:
    name = f"{sealed.name}.sealed.json"
    try:
        budget = derive(trained, sealed)
    except FirmlogitError as error:
        return [_judged(name, "error budget", 1, str(error.problems[0]))], None, None
    tolerance = sealed.about.request.tolerance
    over = tolerance is not None and not budget.log_odds <= Fraction(tolerance)
    decided = wrong_thresholds(sealed)
    bound = f"{float(budget.log_odds):.3g}"
    allowed = f"tolerance {float(Fraction(tolerance)):.3g}" if tolerance is not None else "no tolerance stated"
    checks = [_judged(name, "error budget", int(over) + int(bool(decided)), decided or f"{bound}, {allowed}")]
    found = attack(trained, sealed, budget, int(sealed.model_id, 16), "thorough" if thorough else "quick")
    broken = not found.share <= 1
    tried = f"all {found.tried:,} rows that there are" if found.everything else f"{found.tried:,} rows"
    sentence = f"{tried}, at worst {found.share:.0%} of the bound"
    checks.append(_judged(name, "attack on the budget", int(broken), sentence))
    seen = witness_misses(trained, sealed, budget)
    sentence = f"{seen.compared} rows, at worst {seen.largest:.0%} of what is allowed"
    if seen.rows:
        sentence = f"{len(seen.rows)} of {seen.compared} rows off: row {seen.rows[0] + 1} is the first"
    elif not seen.compared:
        sentence = "no witness row lies within the ranges"
    checks.append(_judged("witness.csv", "reference scorer", len(seen.rows) or int(not seen.compared), sentence))
    return checks, budget, found


def _compared(sealed: SealedModel, on_file: Sequence[Vector], run: Run, artefact: str, target: str) -> Check:
    if run.trouble is not None:
        return Check(artefact, run.what, run.ran, False, 0, run.trouble, target)
    if run.model_id != sealed.model_id and (run.model_id, run.outputs) != (None, None):  # HEX has no room for an id
        found = f"the artefact says model {run.model_id}, the release is {sealed.model_id}"
        return Check(artefact, run.what, True, False, 1, found, target)
    if run.outputs is None:
        return Check(artefact, run.what, True, True, 0, "read back, the same bytes", target)
    wrong, where = differences(sealed, on_file, run.outputs)
    if run.self_test:
        says = f"its self-test returned {run.self_test}"
        return Check(artefact, run.what, True, False, max(wrong, 1), f"{says}; {where}" if where else says, target)
    found = where or f"{len(on_file)} rows, the same bits"
    return Check(artefact, run.what, True, wrong == 0, wrong, found, target)
