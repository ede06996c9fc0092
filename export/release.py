"""The release folder: what is in it, its manifest, and writing it whole or not at all."""

from __future__ import annotations

import hashlib
import json
import platform
from collections.abc import Callable, Sequence
from dataclasses import asdict, replace
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from export import check, folder
from export.contents import MANIFEST, MANIFEST_FORMAT, artefacts, contents
from export.parts.measure import Measure
from export.targets import WRITTEN_BY_DEFAULT
from export.vectors import make_vectors
from runtime_min.errors import Problem, ReleaseError
from runtime_min.model import SealedModel, TrainedModel


def write_release(
    sealed: SealedModel,
    trained: TrainedModel,
    into: str | Path,
    *,
    write: Sequence[str] = WRITTEN_BY_DEFAULT,
    thorough: bool = False,
    unchecked: Sequence[str] = (),
    on: Sequence[str] = (),
    prove: bool = False,
    fit_checks: Sequence[check.Check] = (),
    progress: Callable[[str], None] = lambda step: None,
) -> check.Report:
    """Write every artefact, run it, and put the release in its place.

    sealed, trained: from `seal` and `fit_map`. into: the release folder. write: targets by name. thorough: run each
    artefact in every way, not in a quick subset. unchecked: targets and parts that may be released without having run.
    on: emulated parts that run the C header, beside the one that the plan names.
    prove: a static analyser follows the C header too, for all inputs.
    fit_checks: checks of the fit that were made beforehand, to stand in the same report.

    Returns the report; `report.ok` tells whether every check held and ran. A release in which an artefact could not be
    run is written (and `ok` is False); one in which a check found a difference is not, and an old release stays as it
    was. Raises BudgetError where the error budget is larger than the tolerance, ReleaseError where the folder cannot
    be written.
    """
    into = Path(into)
    _refuse_foreign(into)
    check.hold_tolerance(trained, sealed)
    progress("writing the artefacts")
    vectors = make_vectors(sealed, trained)
    files = contents(sealed, trained, write, vectors)
    with folder.building(into) as staging:
        for name, data in files.items():
            (staging / name).write_bytes(data)
        _write_manifest(staging, sealed, files, write, ())
        report = check.check_release(
            staging, thorough=thorough, unchecked=unchecked, on=on, prove=prove, progress=progress
        )
        report = replace(report, checks=(*fit_checks, *report.checks), release=str(into))
        if report.broken:
            return replace(report, release=None)
        _write_manifest(staging, sealed, files, write, report.checks, report.measures)
        _refuse_foreign(into)  # it may have come while the checks ran
        folder.put_in_place(staging, into)
    return report


def export_artefacts(sealed: SealedModel, into: Path, write: Sequence[str]) -> tuple[str, ...]:
    """Write what follows from a sealed model alone, unchecked, as one folder; returns the names of the files."""
    _refuse_foreign(into, shipped=False)
    files = artefacts(sealed, write, make_vectors(sealed))
    with folder.building(into) as staging:
        for name, data in files.items():
            (staging / name).write_bytes(data)
        _write_manifest(staging, sealed, files, write, ())
        folder.put_in_place(staging, into)
    return tuple(sorted(files))


def _refuse_foreign(into: Path, shipped: bool = True) -> None:
    """What is no release, or holds what no release wrote, is never replaced. A link is followed, and stays.

    shipped: whether a release that was shipped, with its trained model and checks, may be replaced.
    """
    place = folder.followed(into)
    found = "is there and is not a release"
    try:
        if place.is_symlink():
            found = "is a link that leads in a circle"
        elif not place.exists() or (place.is_dir() and not any(place.iterdir())):
            return
        else:
            manifest = json.loads((place / MANIFEST).read_bytes())
            if manifest["format"] == MANIFEST_FORMAT:
                written = {*manifest["files"], MANIFEST, "__pycache__"}
                others = sorted(entry.name for entry in place.iterdir() if entry.name not in written)
                if not others and (shipped or not manifest["checks"]):
                    return
                found = "is a release with its checks, and an export has none"
                if others:
                    found = f"is a release that also holds {', '.join(others)}, which would be lost"
    except (FileNotFoundError, NotADirectoryError, ValueError, KeyError, TypeError, RecursionError):
        pass
    except OSError as error:
        found = f"cannot be looked at ({error.strerror})"
    raise ReleaseError(Problem(str(into), found, "choose another --into, or remove it"))


def _write_manifest(
    staging: Path,
    sealed: SealedModel,
    files: dict[str, bytes],
    write: Sequence[str],
    checks: Sequence[check.Check],
    measures: Sequence[Measure] = (),
) -> None:
    manifest: dict[str, Any] = {
        "format": MANIFEST_FORMAT,
        "model": sealed.name,
        "model_id": sealed.model_id,
        "write": list(write),
        "files": {name: hashlib.sha256(data).hexdigest() for name, data in sorted(files.items())},
        "rows_sha256": sealed.about.rows_sha256,
        "plan_sha256": sealed.about.plan_sha256,
        "versions": _versions(sealed.about.tool),
        "checks": [
            {"artefact": entry.artefact, "what": entry.what, "ran": entry.ran, "ok": entry.ok} for entry in checks
        ],
        "measures": [asdict(entry) for entry in measures],
    }
    (staging / MANIFEST).write_text(json.dumps(manifest, indent=1, sort_keys=True) + "\n", encoding="utf-8")


def _versions(tool: str) -> dict[str, str]:
    found = {"firmlogit": tool.rpartition(" ")[2], "python": platform.python_version()}
    for package in ("numpy", "scipy", "onnx", "onnxruntime"):
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            found[package] = "not installed"
    return found
