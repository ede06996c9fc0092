"""What a plan says, as frozen data classes. Decimals are exact: `gain = 0.1` is one tenth."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path


@dataclass(frozen=True)
class CountsPlan:
    """The device has an integer of `bits` bits: value = offset + gain * count."""

    bits: int
    gain: Fraction
    offset: Fraction
    signed: bool

    @property
    def whole(self) -> tuple[int, int]:
        """The least and the largest count."""
        half = 2 ** (self.bits - 1)
        return (-half, half - 1) if self.signed else (0, 2 * half - 1)

    @property
    def span(self) -> tuple[Fraction, Fraction]:
        """The least and the largest value that a count can stand for."""
        low, high = sorted(self.offset + self.gain * count for count in self.whole)
        return low, high


@dataclass(frozen=True)
class InputPlan:
    """One input. `levels` is empty for a number; `low` and `high` are None where the rows are to give them, and for
    levels; `assumed` says that the rows gave them (of levels: that the rows gave the levels).

    `origin`: the device delivers value - origin; never beside `counts`.
    """

    name: str
    column: str
    unit: str
    low: Fraction | None
    high: Fraction | None
    outside: str
    missing: str
    levels: tuple[str, ...]
    assumed: bool
    origin: Fraction | None = None
    counts: CountsPlan | None = None


@dataclass(frozen=True)
class RowsPlan:
    """`file` may be a pattern that several files match. `classes` is None where the rows are to give them.

    `weight` and `group` are columns. `held_out` is a share, 0 included, or the name of a column of 0 and 1.
    """

    file: Path
    label: str
    classes: tuple[str, ...] | None
    held_out: Fraction | str
    seed: int
    weight: str | None = None
    group: str | None = None


@dataclass(frozen=True)
class TermPrior:
    """The prior of one weight. `name`: an input's, or "impeller=open" for a level.

    `method`: "fixed", with `sd` its own (None is flat), or "shared": the sd of all weights is this one's too, and `sd`
    is None. `per`: "spread", mean and sd are of the standardised weight, or "unit", of the weight per unit of the input
    (then the sd is never shared).
    """

    name: str
    mean: Fraction
    method: str
    sd: Fraction | None
    per: str


@dataclass(frozen=True)
class PriorPlan:
    """`method`: "fixed", with `sd` of every standardised weight (None is flat), or "cross-validation", with sd None.

    `intercept_sd`: None is flat. `terms`: in the order of the plan, each name once.
    """

    method: str
    sd: Fraction | None
    intercept_sd: Fraction | None
    terms: tuple[TermPrior, ...] = ()


@dataclass(frozen=True)
class DecisionPlan:
    """`prevalence`: the event's share in the field, None where it is that of the rows. `no_call`: half the width, in
    log-odds, of what is left undecided."""

    cost_false_alarm: Fraction
    cost_miss: Fraction
    prevalence: Fraction | None = None
    no_call: Fraction = Fraction(0)


@dataclass(frozen=True)
class DevicePlan:
    """`tolerance`: the largest abs(log-odds error) allowed; None is no limit.

    `compiler`: a command line that compiles the header in a check; `part`: the emulated part that runs it.
    """

    arithmetic: str
    tolerance: Fraction | None
    compiler: str | None = None
    part: str | None = None


@dataclass(frozen=True)
class TablePlan:
    """Where the table of coefficients lies in the device's memory, and its byte order, "little" or "big"."""

    address: int
    byte_order: str


@dataclass(frozen=True)
class Plan:
    """`inputs` is empty where they are to be read from the rows; `sha256` is of the file's bytes.

    `write`: the artefacts, in the order of `plan.ARTEFACTS`; `table` is there whether or not it is written.
    `real_rows`: vectors and witness may carry rows of the data.
    """

    path: Path
    sha256: str
    model: str
    purpose: str
    rows: RowsPlan
    inputs: tuple[InputPlan, ...]
    prior: PriorPlan
    decision: DecisionPlan
    device: DevicePlan
    write: tuple[str, ...]
    real_rows: bool = False
    table: TablePlan = TablePlan(0, "little")
