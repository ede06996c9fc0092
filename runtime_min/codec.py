"""Model <-> canonical JSON, and the model id.

A file is ``{"format": ..., "model": {...}, "about": {...}}`` (sealed) or ``{"format": ..., "trained": {...}}``. What is
loaded is first held against the data classes (every field, every type), then against `validity`; every problem is named
in one go. Loading never runs code from the file.
"""

from __future__ import annotations

import functools
import hashlib
import json
import math
import re
import types
import typing
from dataclasses import fields, is_dataclass
from pathlib import Path
from typing import Any

from runtime_min.canonical import LARGEST_PLAIN_INTEGER, canonical
from runtime_min.errors import FileError, Problem
from runtime_min.model import INTEGERS, SealedModel, TrainedModel
from runtime_min.validity import sealed_problems, trained_problems

SEALED_FORMAT = "firmlogit sealed model 1"
TRAINED_FORMAT = "firmlogit trained model 1"


def plain(value: Any) -> Any:
    """Data classes as dicts, tuples as lists; numbers, texts and None as they are."""
    if is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in fields(value)}
    if isinstance(value, (list, tuple)):
        return [plain(entry) for entry in value]
    return value


def model_id(sealed: SealedModel) -> str:
    """First 16 hex digits of SHA-256 over the canonical JSON of the `model` part."""
    return hashlib.sha256(canonical(_model_part(sealed)).encode()).hexdigest()[:16]


def sealed_text(sealed: SealedModel) -> str:
    """The sealed model's file, one line of canonical JSON."""
    return canonical({"format": SEALED_FORMAT, "model": _model_part(sealed), "about": plain(sealed.about)}) + "\n"


def trained_text(trained: TrainedModel) -> str:
    """The trained model's file, one line of canonical JSON."""
    return canonical({"format": TRAINED_FORMAT, "trained": plain(trained)}) + "\n"


def load(path: str | Path) -> SealedModel:
    """The sealed model in a file. Raises FileError with every problem of a file that is not one."""
    where = str(path)
    parts = _read(Path(path), SEALED_FORMAT, ("model", "about"))
    joined = {**parts["model"], "about": parts["about"]} if isinstance(parts["model"], dict) else parts["model"]
    whole = isinstance(joined, dict) and joined.get("arithmetic") in INTEGERS
    sealed = _decode(SealedModel, joined, "model", where, whole)
    _raise_if(sealed_problems(sealed), where)
    return typing.cast(SealedModel, sealed)


def load_trained(path: str | Path) -> TrainedModel:
    """The trained model in a file. Raises FileError with every problem of a file that is not one."""
    where = str(path)
    parts = _read(Path(path), TRAINED_FORMAT, ("trained",))
    trained = _decode(TrainedModel, parts["trained"], "trained", where)
    _raise_if(trained_problems(trained), where)
    return typing.cast(TrainedModel, trained)


def _model_part(sealed: SealedModel) -> dict[str, Any]:
    part = plain(sealed)
    del part["about"]
    return typing.cast(dict[str, Any], part)


def _raise_if(problems: list[tuple[str, str, str]], where: str) -> None:
    if problems:
        raise FileError(Problem(f"{where}: {place}", found, todo) for place, found, todo in problems)


# An integer beyond 2^53, as `canonical` writes it.
_LONG_INTEGER = re.compile("-?[1-9][0-9]{15,39}")
_SURROGATES = re.compile("[\ud800-\udfff]")
_AGAIN = "take the file from the release again"


def _read(path: Path, expected: str, keys: tuple[str, ...]) -> dict[str, Any]:
    where = str(path)
    try:
        data = json.loads(path.read_bytes().decode("utf-8"), object_pairs_hook=_no_twins, parse_constant=_no_constant)
    except OSError as error:
        raise FileError(Problem(where, f"cannot be read ({error.strerror})", "name an existing file")) from None
    except (ValueError, RecursionError) as error:
        raise FileError(Problem(where, f"is not JSON ({error})", _AGAIN)) from None
    if not isinstance(data, dict) or data.get("format") != expected:
        found = data.get("format") if isinstance(data, dict) else type(data).__name__
        todo = f'name a file whose format is "{expected}"'
        raise FileError(Problem(f"{where}: format", f"found {_shown(found)}", todo))
    if set(data) != {"format", *keys}:
        listed = ", ".join(sorted(data))
        raise FileError(Problem(where, f"found the keys {listed}", "expected format, " + ", ".join(keys)))
    return data


def _no_twins(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    result = dict(pairs)
    if len(result) != len(pairs):
        twin = next(key for position, (key, _) in enumerate(pairs) if key in dict(pairs[:position]))
        raise ValueError(f"the key {twin!r} stands twice in one object")
    return result


def _no_constant(name: str) -> Any:
    raise ValueError(f"{name} is not a JSON number")


@functools.cache
def _hints(kind: type) -> dict[str, Any]:
    return typing.get_type_hints(kind)


def _decode(kind: type, value: Any, place: str, where: str, whole: bool = False) -> Any:
    """The data class `kind` from plain data; with `whole`, every number of it is an int."""
    problems: list[Problem] = []

    def wrong(place: str, found: Any, expected: str) -> None:
        problems.append(Problem(f"{where}: {place}", f"found {_shown(found)}, expected {expected}", _AGAIN))

    def walk(kind: Any, value: Any, place: str) -> Any:
        if typing.get_origin(kind) is types.UnionType:
            if value is None:
                return None
            return walk(typing.get_args(kind)[0], value, place)
        if typing.get_origin(kind) is tuple:
            if not isinstance(value, list):
                return wrong(place, value, "a list")
            inner = typing.get_args(kind)[0]
            return tuple(walk(inner, entry, f"{place}[{position}]") for position, entry in enumerate(value))
        if is_dataclass(kind):
            if not isinstance(value, dict):
                return wrong(place, value, "an object")
            hints = _hints(typing.cast(type, kind))
            names = [field.name for field in fields(kind)]
            for key in value:
                if key not in names:
                    wrong(f"{place}.{key}", value[key], "no such key")
            for name in names:
                if name not in value:
                    problems.append(Problem(f"{where}: {place}.{name}", "is missing", _AGAIN))
            if not all(name in value for name in names):
                return None
            read = {name: walk(hints[name], value[name], f"{place}.{name}") for name in names}
            return typing.cast(typing.Any, kind)(**read)
        return scalar(kind, value, place)

    def scalar(kind: Any, value: Any, place: str) -> Any:
        kind = int if whole and kind is float else kind
        if kind is float and isinstance(value, (int, float)) and not isinstance(value, bool):
            try:
                number = float(value)
            except OverflowError:
                number = math.inf
            return number if math.isfinite(number) else wrong(place, value, "a finite number")
        if kind is int and isinstance(value, int) and not isinstance(value, bool):
            return value
        if kind is int and isinstance(value, float) and value.is_integer() and abs(value) <= LARGEST_PLAIN_INTEGER:
            return int(value)
        if kind is int and isinstance(value, str) and _LONG_INTEGER.fullmatch(value):
            return int(value)
        if kind is bool and isinstance(value, bool):
            return value
        if kind is str and isinstance(value, str):
            # Half of a surrogate pair has no UTF-8 form, so the model could be neither hashed nor written.
            return wrong(place, value, "a text without lone surrogates") if _SURROGATES.search(value) else value
        return wrong(place, value, {float: "a number", int: "an integer", bool: "true or false", str: "a text"}[kind])

    result = walk(kind, value, place)
    if problems:
        raise FileError(problems)
    return result


def _shown(value: Any) -> str:
    text = json.dumps(value, ensure_ascii=True, default=str)
    return text if len(text) <= 60 else text[:57] + "..."
