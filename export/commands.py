"""The command line: reads the request, calls the rooms in order, prints, and turns every mistake into a sentence.

Rooms are imported inside the functions that need them, so that `--help` costs nothing and only here do the trainer and
the exporter meet.
"""

from __future__ import annotations

import argparse
import os
import sys
import traceback
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING

from export.interrupts import Stopped, stoppable
from runtime_min.errors import FirmlogitError, Problem, ReleaseError

if TYPE_CHECKING:
    from export.check import Check
    from runtime_min.model import SealedModel, TrainedModel
    from trainer.plan import Plan

CAUTION = "A statistical classifier is not a safety function."
TRACEBACK = "FIRMLOGIT_TRACEBACK"


def main(arguments: list[str] | None = None) -> int:
    """Exit status: 0 done and every check held; 1 a check or the budget failed; 2 the request or data were wrong.

    130, 143 or 129 where Ctrl-C, SIGTERM or the end of the terminal stopped it.
    """
    with stoppable():
        try:
            _open_streams()
            request = _parser().parse_args(arguments)
            status = int(request.run(request))
            sys.stdout.flush()
            return status
        except FirmlogitError as error:
            print(error, file=sys.stderr)
            return error.exit_status
        except Stopped as stop:
            print("; ".join([f"stopped by {stop}", *getattr(stop, "__notes__", ())]), file=sys.stderr)
            return stop.exit_status
        except BrokenPipeError:
            _close_stdout()
            return 0
        except (OSError, MemoryError) as error:
            _close_stdout()
            _traceback()
            print(_machine(error), file=sys.stderr)
            return 2
        except Exception as error:
            _traceback()
            print(_mistake(error), file=sys.stderr)
            return 2


def _open_streams() -> None:
    """Where a stream was closed before the start, what is printed goes nowhere."""
    for name in ("stdout", "stderr"):
        if getattr(sys, name) is None:
            setattr(sys, name, os.fdopen(os.open(os.devnull, os.O_WRONLY), "w", encoding="utf-8"))


def _close_stdout() -> None:
    """Nobody reads on: what is still to be printed goes nowhere, and the flush at the end of Python finds no error."""
    with suppress(OSError, ValueError):
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _machine(error: OSError | MemoryError) -> Problem:
    if isinstance(error, MemoryError):
        return Problem("memory", "found too little for these rows", "take fewer rows, or a machine with more memory")
    where = error.filename if isinstance(error.filename, str) else "this machine"
    return Problem(where, f"cannot be used ({error.strerror or error})", "free space or allow access there")


def _mistake(error: Exception) -> str:
    last = traceback.extract_tb(error.__traceback__)[-1]
    what = " ".join(f"{type(error).__name__}: {error}".split())
    at = f"{Path(last.filename).name}, line {last.lineno}"
    return f"this is a mistake in firmlogit: {what} ({at}); please report it with what {TRACEBACK}=1 shows"


def _traceback() -> None:
    if os.environ.get(TRACEBACK):
        traceback.print_exc()


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="firmlogit",
        description="Labelled measurements to a classifier on a device, with the proof attached.",
        epilog=CAUTION,
    )
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    draft = commands.add_parser("draft", help="write a commented plan from a data file, to look at and to ship")
    draft.add_argument("rows", type=Path, help="a .csv, .npz or .parquet with a header")
    draft.add_argument("--into", type=Path, metavar="PLAN", help="the plan (default: plan.toml beside the rows)")
    draft.set_defaults(run=_draft)

    ship = commands.add_parser("ship", help="the whole job: fit, seal, write, run and check a release")
    ship.add_argument("plan", type=Path, help="the plan, a TOML file")
    ship.add_argument("--into", type=Path, metavar="FOLDER", help="the release (default: release/ beside the plan)")
    _check_options(ship)
    ship.set_defaults(run=_ship)

    fit = commands.add_parser("fit", help="write the trained and the sealed model only")
    fit.add_argument("plan", type=Path, help="the plan, a TOML file")
    fit.add_argument("--into", type=Path, metavar="FOLDER", help="where to (default: beside the plan)")
    fit.set_defaults(run=_fit)

    export = commands.add_parser("export", help="write the artefacts of a sealed model, without running them")
    export.add_argument("sealed", type=Path, help="NAME.sealed.json")
    export.add_argument("--into", type=Path, metavar="FOLDER", default=Path("artefacts"), help="default: artefacts/")
    export.set_defaults(run=_export)

    check = commands.add_parser("check", help="run every artefact of a release again")
    check.add_argument("release", type=Path, help="the folder of a release, or a copy of it")
    _check_options(check)
    check.set_defaults(run=_check)

    score = commands.add_parser("score", help="score a CSV with a sealed model")
    score.add_argument("sealed", type=Path, help="NAME.sealed.json")
    score.add_argument("rows", type=Path, help="a CSV with a column for each input")
    score.set_defaults(run=_score)
    return parser


def _check_options(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("--all", action="store_true", help="every compiler, dialect and option that is here")
    parser.add_argument(
        "--unchecked",
        action="append",
        default=[],
        metavar="ARTEFACT",
        help="accept python, c, onnx or a part without a run",
    )
    parser.add_argument(
        "--on", action="append", default=[], metavar="PART", help="an emulated part that runs the C header too, or all"
    )
    parser.add_argument(
        "--prove", action="store_true", help="a static analyser follows the C header too, for all inputs (Frama-C)"
    )
    parser.add_argument("--json", action="store_true", help="print the result for a program")


def _draft(request: argparse.Namespace) -> int:
    from export.folder import write_files
    from trainer.draft import draft

    place = request.into or request.rows.parent / "plan.toml"
    if os.path.lexists(place):
        raise ReleaseError(Problem(str(place), "is there already", "choose another --into, or remove it"))
    with _progress() as progress:
        progress("reading the rows")
        made = draft(request.rows, place.parent)
    write_files(place.parent, {place.name: made.text.encode()})
    _print([*(f"{guess.taken_for:<10}{guess.column}: {guess.why}" for guess in made.guesses), ""])
    _print([f"written   {place}: look at each guess, the ranges first; then: firmlogit ship {place}"])
    return 0


def _ship(request: argparse.Namespace) -> int:
    into = request.into or request.plan.parent / "release"
    with _told(into):
        return _ship_into(request, into)


def _ship_into(request: argparse.Namespace, into: Path) -> int:
    from export.report import check_lines, fit_lines, model_lines, report_json

    unchecked, on = _unchecked(request), _on(request)
    with _progress() as progress:
        progress("reading the plan")
        plan, trained, sealed = _fitted(request.plan, progress)
        from export.release import write_release

    if not request.json:
        _print([*model_lines(sealed), *fit_lines(trained)])
    with _progress() as progress:
        progress("holding the fit against the raw rows")
        report = write_release(
            sealed,
            trained,
            into,
            write=plan.write,
            thorough=request.all,
            unchecked=unchecked,
            on=on,
            prove=request.prove,
            fit_checks=(_fit_check(plan, trained, sealed),),
            progress=progress,
        )
    _print([report_json(report)] if request.json else check_lines(report))
    return 0 if report.ok else 1


@contextmanager
def _told(into: Path) -> Iterator[None]:
    """Where a signal stops the writing of a release, its sentence says what now stands in the place."""
    from export.folder import identity

    before = identity(into)
    try:
        yield
    except Stopped as stop:
        after = identity(into)
        if after is None:
            stop.add_note(f"no release was written to {into}")
        elif after == before:
            stop.add_note(f"what was in {into} before is as it was")
        else:
            stop.add_note(f"the new release is complete in {into}")
        raise


def _fit(request: argparse.Namespace) -> int:
    from export.folder import write_files
    from export.report import fit_lines, model_lines, weight_lines
    from runtime_min.codec import sealed_text, trained_text

    with _progress() as progress:
        plan, trained, sealed = _fitted(request.plan, progress)
    into = request.into or plan.path.parent
    written = {
        f"{plan.model}.trained.json": trained_text(trained).encode(),
        f"{plan.model}.sealed.json": sealed_text(sealed).encode(),
    }
    write_files(into, written)
    _print([*model_lines(sealed), *fit_lines(trained), *weight_lines(trained)])
    _print([f"{'written':<10}{into / name}" for name in written])
    return 0


def _export(request: argparse.Namespace) -> int:
    from export.release import export_artefacts
    from export.targets import WRITTEN_BY_DEFAULT
    from runtime_min.codec import load

    with _told(request.into), _progress() as progress:
        progress("writing the artefacts")
        written = export_artefacts(load(request.sealed), request.into, WRITTEN_BY_DEFAULT)
    _print([f"{'written':<12}{request.into / name}" for name in written])
    return 0


def _check(request: argparse.Namespace) -> int:
    from export.check import check_release
    from export.report import check_lines, report_json

    with _progress() as progress:
        report = check_release(
            request.release,
            thorough=request.all,
            unchecked=_unchecked(request),
            on=_on(request),
            prove=request.prove,
            progress=progress,
        )
    _print([report_json(report)] if request.json else [f"{'model':<12}{report.model_id}", *check_lines(report)])
    return 0 if report.ok else 1


def _score(request: argparse.Namespace) -> int:
    from runtime_min.__main__ import score_rows
    from runtime_min.codec import load

    score_rows(load(request.sealed), request.rows, sys.stdout)
    return 0


def _fitted(path: Path, progress: Callable[[str], None]) -> tuple[Plan, TrainedModel, SealedModel]:
    from runtime_min.sealing import seal_request
    from trainer.fit import fit_plan
    from trainer.plan import read_plan
    from trainer.request import request_of
    from trainer.table import read_rows

    plan = read_plan(path)
    progress("reading the rows")
    rows = read_rows(plan)
    progress("fitting")
    trained = fit_plan(plan, rows)
    return plan, trained, seal_request(trained, request_of(plan, rows), plan.purpose, plan.sha256)


def _fit_check(plan: Plan, trained: TrainedModel, sealed: SealedModel) -> Check:
    """The fit against its own optimality condition, recomputed from the file."""
    from export.check import Check
    from export.optimality import AskedPrior, AskedTerm, Source, recheck_fit
    from trainer.sources import row_files

    rows = plan.rows
    files = row_files(rows.file, plan.path.parent)
    source = Source(files, rows.label, rows.held_out, rows.seed, rows.weight, rows.group)
    prior = plan.prior
    terms = tuple(AskedTerm(t.name, t.mean, t.sd, t.method == "shared", t.per == "unit") for t in prior.terms)
    asked = AskedPrior(prior.method, prior.sd, prior.intercept_sd, terms, plan.decision.prevalence)
    found = recheck_fit(trained, sealed.about.request, source, asked)
    held = f"{found.rows:,} rows, within {found.step:.1e} posterior sd"
    sentence = "; ".join(found.problems) or held
    name, wrong = f"{plan.model}.trained.json", len(found.problems)
    return Check(name, "optimum of the raw rows", True, not wrong, wrong, sentence)


def _unchecked(request: argparse.Namespace) -> tuple[str, ...]:
    from export.parts import PARTS
    from export.targets import TARGETS

    return _named("--unchecked", request.unchecked, (*TARGETS, *PARTS))


def _on(request: argparse.Namespace) -> tuple[str, ...]:
    from export.parts import ALL, PARTS

    return _named("--on", request.on, (*PARTS, ALL))


def _named(option: str, names: Sequence[str], known: Sequence[str]) -> tuple[str, ...]:
    for name in names:
        if name not in known:
            raise ReleaseError(Problem(option, f'found "{name}"', "name one of " + ", ".join(known)))
    return tuple(names)


def _print(lines: list[str]) -> None:
    """Print in whatever encoding the terminal or pipe has; what it cannot show becomes an escape.

    Where nobody reads any more the work goes on: the exit status is that of the work.
    """
    encoding = sys.stdout.encoding or "ascii"
    try:
        for line in lines:
            print(line.encode(encoding, "backslashreplace").decode(encoding))
        sys.stdout.flush()
    except BrokenPipeError:
        _close_stdout()


@contextmanager
def _progress() -> Iterator[Callable[[str], None]]:
    """A line on standard error that says what is being done; nothing where that is not a terminal."""
    if not sys.stderr.isatty():
        yield lambda step: None
        return
    from rich.console import Console

    console = Console(stderr=True)
    with console.status("starting") as status:
        yield lambda step: status.update(step)


if __name__ == "__main__":
    sys.exit(main())
