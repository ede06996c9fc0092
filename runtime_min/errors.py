"""What went wrong, where, and what to do: the one exception family.

Every mistake that a user, a file or a machine can make ends here, as one sentence a problem::

    plan.toml: [[input]] "suction": range: found 250 before -95; put the lower limit first

A function that can find several problems collects them all and raises once.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import NamedTuple


class Problem(NamedTuple):
    """One problem in one sentence: where it is, what was found there, what to do about it."""

    where: str
    found: str
    todo: str

    def __str__(self) -> str:
        return f"{self.where}: {self.found}; {self.todo}"


class FirmlogitError(Exception):
    """The base of the family; `problems` holds every problem found, `exit_status` what a command ends with."""

    exit_status = 2

    def __init__(self, problems: Problem | Iterable[Problem]) -> None:
        self.problems: tuple[Problem, ...] = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class PlanError(FirmlogitError):
    """The plan cannot be followed."""


class RowsError(FirmlogitError):
    """The rows cannot be read, or not as the plan says."""


class FitError(FirmlogitError):
    """The rows do not determine the model that was asked for."""


class FileError(FirmlogitError):
    """A trained model, a sealed model or a release on disk is not valid."""


class SealError(FirmlogitError):
    """The trained model cannot be turned into the device numbers that were asked for."""


class ReleaseError(FirmlogitError):
    """A release could not be written, or one of its artefacts could not be made."""


class BudgetError(FirmlogitError):
    """The derived error budget is larger than the tolerance."""

    exit_status = 1
