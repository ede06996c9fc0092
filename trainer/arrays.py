"""Arrays from a caller, checked: every problem of every argument at once."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from runtime_min.errors import FitError, Problem, RowsError
from runtime_min.names import NAME_RULE, name_problem

Floats = npt.NDArray[np.float64]
Labels = npt.NDArray[np.int64]

LEAST_SD = 1e-4
"""Weights are kept in steps of 2^-30; a narrower prior would be lost in them."""

LARGEST = 2.0**1000
"""Differences and sums of numbers up to this do not overflow."""

MOST_NAMED = 5
_BLOCK_ROWS = 2048  # rows that are read at once
_WIDE = 512  # numbers in a row that NumPy reduces fast


@dataclass(frozen=True)
class Arrays:
    """What `fit_map` fits: values (n, d), labels (n,) 0 or 1, row_weights (n,) > 0; `total` counts weights of 0 too."""

    values: Floats
    labels: Labels
    row_weights: Floats | None
    names: tuple[str, ...]
    classes: tuple[str, ...]
    sds: tuple[float, ...]
    intercept_sd: float
    limits: tuple[tuple[float, float], ...]
    total: int


def read_arrays(
    X: npt.ArrayLike,
    y: npt.ArrayLike,
    sd: float | Sequence[float],
    names: Sequence[str] | None,
    row_weights: npt.ArrayLike | None,
    intercept_sd: float,
) -> Arrays:
    """The arguments of `fit_map`. Raises RowsError if an array has a problem, else FitError, with all problems."""
    problems: list[Problem] = []
    values = _values(X, problems)
    rows, width = values.shape
    classes, labels = _labels(y, problems)
    if rows and len(labels) and len(labels) != rows:
        problems.append(Problem("y", f"found {len(labels)} labels for {rows} rows", "give one label a row"))
    weights = None if row_weights is None else _row_weights(row_weights, rows, problems)
    low, high = _span(values)
    if rows and not (np.isfinite(low).all() and np.isfinite(high).all()):
        problems += _not_finite("X", values, "remove the rows, or put a number in")
    of_rows = len(problems)
    chosen = _names(X, names, width, problems)
    sds = _sds(sd, width, problems)
    problems += _sd_problems("intercept_sd", [intercept_sd])
    if problems:
        raise (RowsError if of_rows else FitError)(problems)
    total = rows
    if weights is not None and not weights.all():
        kept = weights > 0
        values, labels, weights = values[kept], labels[kept], weights[kept]
        low, high = _span(values)
    limits = tuple(zip(low.tolist(), high.tolist(), strict=True))
    return Arrays(values, labels, weights, chosen, classes, sds, float(intercept_sd), limits, total)


def _values(X: npt.ArrayLike, problems: list[Problem]) -> Floats:
    """X as (n, d) float64; (0, 0) where it is anything else."""
    found = _array("X", X, "biufO", "numbers", problems)
    if found is None:
        return np.empty((0, 0))
    if found.ndim != 2 or not found.size:
        problems.append(Problem("X", f"found the shape {found.shape}", "give (rows, inputs), at least one of each"))
        return np.empty((0, 0))
    try:
        return np.ascontiguousarray(found, dtype=np.float64)
    except (TypeError, ValueError, OverflowError) as error:
        problems.append(Problem("X", f"found what is not a number ({error})", "give numbers only"))
        return np.empty((0, 0))


def _labels(y: npt.ArrayLike, problems: list[Problem]) -> tuple[tuple[str, ...], Labels]:
    """(the two class names, 0 or 1 for each row); no rows where there are not two classes."""
    none: tuple[tuple[str, ...], Labels] = ((), np.empty(0, np.int64))
    found = _array("y", y, "biufUO", "labels", problems)
    if found is None:
        return none
    if found.ndim != 1 or not found.size:
        problems.append(Problem("y", f"found the shape {found.shape}", "give one label a row, in one dimension"))
        return none
    try:
        if missing := list(_not_finite("y", found[:, np.newaxis], "remove the rows")):
            problems += missing
            return none
        # Least and largest of numbers take no sorting.
        ends = [found.min(), found.max()] if found.dtype.kind in "biuf" else np.unique(found)[[0, -1]].tolist()
        first, last = ends
        is_event = found == last
        two = bool(np.all(is_event | (found == first)))
    except TypeError:
        problems.append(Problem("y", "found labels of different types", "give all labels as texts, or all as numbers"))
        return none
    if not two or first == last:
        several = "one value only" if first == last else f"{len(set(found.tolist()))} different values"
        problems.append(Problem("y", f"found {several}", "give labels of two classes"))
        return none
    return (str(first), str(last)), is_event.astype(np.int64)


def _row_weights(row_weights: npt.ArrayLike, rows: int, problems: list[Problem]) -> Floats | None:
    found = _array("row_weights", row_weights, "biufO", "numbers", problems)
    if found is None:
        return None
    try:
        weights = np.ascontiguousarray(found, dtype=np.float64)
    except (TypeError, ValueError, OverflowError) as error:
        problems.append(Problem("row_weights", f"found what is not a number ({error})", "give numbers only"))
        return None
    if weights.ndim != 1 or (rows and len(weights) != rows):
        problems.append(Problem("row_weights", f"found the shape {weights.shape}", f"give one a row, ({rows},)"))
        return None
    if not np.isfinite(weights).all():
        problems += _not_finite("row_weights", weights[:, np.newaxis], "give finite numbers")
    elif (weights < 0).any():
        place = f"row_weights[{int(np.argmax(weights < 0))}]"
        problems.append(Problem(place, f"found {float(weights.min()):g}", "give weights of 0 or more"))
    elif not float(weights.max()) * len(weights) <= LARGEST:
        place = f"row_weights[{int(np.argmax(weights))}]"
        found_weight = f"found {float(weights.max()):g}, too large to be summed"
        problems.append(Problem(place, found_weight, "scale them all down"))
    elif not weights.any():
        problems.append(Problem("row_weights", "found only zeros", "give some rows a weight"))
    return weights


def _array(where: str, given: npt.ArrayLike, kinds: str, what: str, problems: list[Problem]) -> npt.NDArray[Any] | None:
    if isinstance(given, np.ma.MaskedArray) and np.ma.getmaskarray(given).any():
        problems.append(Problem(where, "found masked entries", "remove those rows, or fill the entries"))
        return None
    try:
        found = np.asarray(given)
    except (TypeError, ValueError) as error:
        problems.append(Problem(where, f"is not an array ({error})", f"give an array of {what}"))
        return None
    if found.dtype.kind not in kinds:
        problems.append(Problem(where, f"found the type {found.dtype}", f"give an array of {what}"))
        return None
    return found


def _not_finite(where: str, values: npt.NDArray[Any], todo: str) -> Iterable[Problem]:
    """One problem for each of the first rows that hold NaN or an infinity, and one for the rest. values: (n, d)."""
    kind = values.dtype.kind
    if kind not in "fO":
        return
    bad = ~np.isfinite(values) if kind == "f" else values != values
    places = np.argwhere(bad)
    for row, column in places[:MOST_NAMED]:
        place = f"{where}[{row}]" if values.shape[1] == 1 and where != "X" else f"{where}[{row}, {column}]"
        yield Problem(place, f"found {values[row, column]}", todo)
    if len(places) > MOST_NAMED:
        yield Problem(where, f"found {len(places) - MOST_NAMED} more that are not finite", todo)


def _span(values: Floats) -> tuple[Floats, Floats]:
    """The least and the largest of each column, NaN where there is one; none of both without rows.

    Several rows are laid side by side, since NumPy is slow to reduce narrow rows; one reading of the memory.
    """
    rows, width = values.shape
    if not rows:
        return np.empty(0), np.empty(0)
    together = max(1, _WIDE // width)
    whole = rows - rows % together
    step = together * max(1, _BLOCK_ROWS // together)
    blocks = [values[at : min(at + step, whole)].reshape(-1, together * width) for at in range(0, whole, step)]
    low = [block.min(axis=0).reshape(together, width) for block in blocks]
    high = [block.max(axis=0).reshape(together, width) for block in blocks]
    rest = values[whole:]
    return np.concatenate([*low, rest]).min(axis=0), np.concatenate([*high, rest]).max(axis=0)


def _names(X: object, names: Sequence[str] | None, width: int, problems: list[Problem]) -> tuple[str, ...]:
    if names is None:
        columns = list(getattr(X, "columns", ()))
        if not columns or not all(isinstance(column, str) for column in columns):
            return tuple(f"x{position}" for position in range(width))
        names, where = columns, "X.columns"
    else:
        names, where = [str(name) for name in ([names] if isinstance(names, str) else names)], "names"
    if width and len(names) != width:
        problems.append(Problem(where, f"found {len(names)} names for {width} columns", "give one name a column"))
    for position, name in enumerate(names):
        problem = name_problem(name)
        if problem:
            problems.append(Problem(f"{where}[{position}]", problem, f"{NAME_RULE} (names=[...])"))
        elif name in names[:position]:
            problems.append(Problem(f"{where}[{position}]", f'found "{name}" twice', "name each input once"))
    return tuple(names)


def _sds(sd: float | Sequence[float], width: int, problems: list[Problem]) -> tuple[float, ...]:
    given = np.ravel(np.asarray(sd, dtype=object)).tolist()
    if np.ndim(sd) and width and len(given) != width:
        problems.append(Problem("sd", f"found {len(given)} for {width} columns", "give one number, or one a column"))
        return ()
    found = _sd_problems("sd", given)
    problems += found
    return () if found else tuple(float(entry) for entry in (given if np.ndim(sd) else given * width))


def _sd_problems(where: str, sds: Sequence[object]) -> list[Problem]:
    problems = []
    for position, sd in enumerate(sds):
        place = f"{where}[{position}]" if len(sds) > 1 else where
        try:
            number = float(sd)  # type: ignore[arg-type]
        except (TypeError, ValueError, OverflowError):
            problems.append(Problem(place, f"found {sd!r}", "give a number above 0, or math.inf for a flat prior"))
            continue
        if not number > 0:
            problems.append(Problem(place, f"found {number:g}", "give a number above 0, or math.inf for a flat prior"))
        elif number < LEAST_SD:
            found = f"found {number:g}, too narrow for weights kept in steps of 2^-30"
            problems.append(Problem(place, found, f"give {LEAST_SD:g} or more"))
    return problems
