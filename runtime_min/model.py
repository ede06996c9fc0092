"""The frozen data classes that stand between the rooms, and nothing that computes.

Three stages, each plain data that goes to JSON and back without loss (`codec`):

* `TrainedModel`: what the rows said. Its log-odds are the *exact* real function of its numbers:
  for class k + 1 against class 0, ``intercept_k + sum_j weight_kj * (v_j - centre_j) / scale_j``.
* `Request`: what was asked of sealing, exactly as the plan put it (numbers as decimal or rational texts).
* `SealedModel`: every number that a device carries, each rounded once. Only these are hashed into the model id.

Units: an input's value is in the unit that the plan names; log-odds are natural logarithms of odds.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

FLOATS = ("binary64", "binary32")
INTEGERS = ("int16", "int32")
ARITHMETICS = FLOATS + INTEGERS
"""How a target computes."""

FAULT = -2
NO_CALL = -1


# --- trained ---------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class TrainedInput:
    """One measured quantity as training saw it. `levels` is empty for a number.

    `typical` is the fitted rows' mean (levels: the commonest level's index); None where the rows gave none.
    """

    name: str
    unit: str
    levels: tuple[str, ...]
    typical: float | None


@dataclass(frozen=True)
class TrainedTerm:
    """One column of the design matrix: the input itself ("value") or the indicator of one level ("level").

    The column is (v - centre) / scale; an indicator has centre 0 and scale 1.
    """

    name: str
    form: str
    of: tuple[int, ...]
    level: int | None
    centre: float
    scale: float


@dataclass(frozen=True)
class Score:
    """The log-odds of one class against class 0: an intercept and one weight a term, on standardised columns."""

    intercept: float
    weights: tuple[float, ...]


@dataclass(frozen=True)
class TrainedPrior:
    """Gaussian prior of each standardised weight, in the order of the terms. An sd of None is flat."""

    means: tuple[float, ...]
    sds: tuple[float | None, ...]
    intercept_sd: float | None


@dataclass(frozen=True)
class Strength:
    """One strength of the prior that was tried: its sd and what it gave on the folds left out of each fit.

    `log_loss`: mean over the rows; `standard_error`: of that mean, over the folds.
    """

    sd: float
    log_loss: float
    standard_error: float


@dataclass(frozen=True)
class Choice:
    """How the prior's sd was chosen: the method, the number of folds, and the whole curve, weakest prior last."""

    method: str
    folds: int
    sd: float
    strengths: tuple[Strength, ...]


@dataclass(frozen=True)
class Certificate:
    """Proof of optimality, at the weights as stored.

    `gradient`: the largest component relative to the sum of the sizes of the terms that make it;
    `newton_decrement`: sqrt(g' H^-1 g); `distance`: bound on the distance to the optimum, in posterior sd.
    """

    gradient: float
    newton_decrement: float
    distance: float


@dataclass(frozen=True)
class FittedRows:
    """How many rows there were, how many were dropped for a missing value, fitted, held out; SHA-256 of their file.

    Of several files it is the SHA-256 of their digests' lines, in the order of their names.
    """

    total: int
    dropped: int
    fitted: int
    held_out: int
    sha256: str | None


@dataclass(frozen=True)
class HeldOut:
    """Results on the rows that were never fitted; the base values are those of the fitted rows' event share alone."""

    rows: int
    events: int
    log_loss: float
    brier: float
    auc: float | None
    base_rate: float
    base_log_loss: float
    base_brier: float


@dataclass(frozen=True)
class Witness:
    """What training itself says of one row: log-odds in binary64 on standardised columns, each with its own bound."""

    inputs: tuple[float, ...]
    log_odds: tuple[float, ...]
    bounds: tuple[float, ...]


@dataclass(frozen=True)
class TrainedModel:
    """What the rows said. `covariance` is the posterior's, intercept first, (1 + terms) squared (two classes).

    `prevalence`: the event's share in the field where the plan states one (an exact text). Sealing then shifts the
    intercept by logit(prevalence) - logit(share of the event among the fitted rows), and the witness includes that
    shift; the scores and the held-out results do not.
    """

    inputs: tuple[TrainedInput, ...]
    classes: tuple[str, ...]
    class_weights: tuple[float, ...]
    terms: tuple[TrainedTerm, ...]
    scores: tuple[Score, ...]
    prior: TrainedPrior
    covariance: tuple[tuple[float, ...], ...]
    certificate: Certificate
    rows: FittedRows
    held_out: HeldOut | None
    witness: tuple[Witness, ...]
    prevalence: str | None = None
    choice: Choice | None = None

    @property
    def intercept(self) -> float:
        """The intercept on standardised columns (two classes)."""
        return self._only_score().intercept

    @property
    def weights(self) -> tuple[float, ...]:
        """The weights on standardised columns, one a term (two classes)."""
        return self._only_score().weights

    def _only_score(self) -> Score:
        if len(self.scores) != 1:
            raise AttributeError("more than two classes: read scores, one a class after the first")
        return self.scores[0]

    def folded(self) -> Score:
        """Intercept and weights per unit of each term (two classes): the exact fold, each rounded to binary64."""
        from runtime_min.sealing import fold

        exact = fold(self)[0]
        return Score(float(exact.intercept), tuple(float(weight) for weight in exact.weights))


# --- asked of sealing ------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Counts:
    """The device has an integer: value = offset + gain * count, both exact texts, the count within `bits`.

    `chosen`: by the tool, from the range, since the plan gives no counts and the arithmetic is of integers.
    """

    bits: int
    gain: str
    offset: str
    signed: bool
    chosen: bool


@dataclass(frozen=True)
class InputRequest:
    """What the device delivers. `low` and `high` are exact texts ("-95", "1/10"); None for an input with levels.

    `origin`: an exact text; the device delivers value - origin, subtracted before it becomes a float.
    """

    name: str
    column: str
    unit: str
    levels: tuple[str, ...]
    low: str | None
    high: str | None
    outside: str
    missing: str
    assumed: bool
    origin: str | None = None
    counts: Counts | None = None


@dataclass(frozen=True)
class DecisionRequest:
    """Costs as exact texts, or the threshold in log-odds itself; with a threshold the costs are None.

    `no_call`: half the width, in log-odds, of the interval round the threshold in which nothing is decided.
    """

    cost_false_alarm: str | None
    cost_miss: str | None
    threshold: str | None
    no_call: str | None = None


@dataclass(frozen=True)
class Placement:
    """Where the table of coefficients lies in the device's memory, and its byte order, "little" or "big"."""

    address: int
    byte_order: str


@dataclass(frozen=True)
class Request:
    """All that sealing needs beside the trained model. `tolerance` is the largest allowed log-odds error, or None.

    `compiler`: the user's own command line, which compiles the header in a check. `part`: the emulated part that runs
    it there as well. `real_rows`: vectors and witness may carry rows of the data. `table`: where the table of
    coefficients lies, if one is written.
    """

    model: str
    arithmetic: str
    inputs: tuple[InputRequest, ...]
    decision: DecisionRequest
    tolerance: str | None
    compiler: str | None = None
    part: str | None = None
    real_rows: bool = False
    table: Placement | None = None


# --- sealed ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Input:
    """One input as the device checks it. With `levels` it is 0, 1, … K - 1, and low and high are 0 and K - 1.

    `low`, `high` and `typical` are of what the device delivers: the value in the input's unit, or the value less
    `origin`, or a count. `typical` stands in for a missing value where `missing` is "typical"; otherwise it is None.
    """

    name: str
    unit: str
    levels: tuple[str, ...]
    low: float
    high: float
    outside: str
    missing: str
    typical: float | None
    origin: str | None = None
    counts: Counts | None = None


@dataclass(frozen=True)
class Term:
    """One step of the sum. `form` "value": one weight, on the input less its datum; "level": one weight a level.

    `of` holds the positions of its inputs; `weights[k]` belongs to the log-odds of class k + 1 against class 0.
    In integers a value's product is shifted left by `shift`: z + (weight * (count - datum) << shift).
    """

    form: str
    of: tuple[int, ...]
    datum: float | None
    weights: tuple[tuple[float, ...], ...]
    shift: int | None = None


@dataclass(frozen=True)
class Thresholds:
    """Two classes: z >= high is class 1, z < low is class 0, between them is no call."""

    low: float
    high: float


@dataclass(frozen=True)
class Exponential:
    """The constants of exp(t), t <= 0; see `arithmetic.exponential`."""

    inv_ln2: float
    ln2_high: float
    ln2_low: float
    floor: float
    coefficients: tuple[float, ...]


@dataclass(frozen=True)
class Table:
    """The logistic function for integers, in units of 2^-15. See `integer_score.table_probability` for its use.

    The last `drop` bits of |z| are dropped; then nodes stand at every 2^step, from 0. Between two nodes it is linear;
    beyond the last it is the last; below 0 it is 32768 less the value at -z.
    """

    drop: int
    step: int
    nodes: tuple[int, ...]


@dataclass(frozen=True)
class About:
    """What goes with a sealed model but is not hashed into its id."""

    purpose: str
    request: Request
    rows_sha256: str | None
    plan_sha256: str | None
    tool: str


@dataclass(frozen=True)
class SealedModel:
    """Every number that a device carries. `intercepts[k]` belongs to the log-odds of class k + 1 against class 0.

    In floating point `exponential` is there and `accumulator_shift` and `table` are None. In integers every number is
    an int; log-odds, intercepts, level weights and thresholds are in units of 2^-accumulator_shift; `table` is there.
    """

    name: str
    arithmetic: str
    classes: tuple[str, ...]
    inputs: tuple[Input, ...]
    terms: tuple[Term, ...]
    intercepts: tuple[float, ...]
    decision: Thresholds
    exponential: Exponential | None
    about: About
    accumulator_shift: int | None = None
    table: Table | None = None

    @cached_property
    def model_id(self) -> str:
        """First 16 hex digits of SHA-256 over the canonical JSON of all fields but `about`."""
        from runtime_min.codec import model_id

        return model_id(self)


def in_range(sealed: SealedModel, inputs: tuple[float, ...]) -> bool:
    """True where every input lies within the device limits (levels: is one of them)."""
    return all(
        entry.low <= value <= entry.high and (not entry.levels or value == int(value))
        for entry, value in zip(sealed.inputs, inputs, strict=True)
    )
