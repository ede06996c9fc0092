"""The C header in int16 and int32, compiled and run: the reference scorer's bits, also at the proven extremes.

Expected values: the reference scorer's bits (what an artefact must reproduce); hand calculation on models of a few
small integers; for planted mistakes, that they are found.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from c_programs import FAMILIES, C, compiler, header, run_header
from models import Quantity, make_request, make_trained, sample_integer_models

from export.targets import Run
from export.targets.c import ways
from export.targets.c.emit_integers import can_halve
from export.targets.c.ways import Way
from export.vectors import expected, make_vectors
from runtime_min.arithmetic import ACCUMULATOR_BITS, from_bits
from runtime_min.integer_score import missing_count
from runtime_min.model import Counts, SealedModel, Term, Thresholds
from runtime_min.proof import proof
from runtime_min.sealing import seal_request

MODELS = {name: sealed for name, (_, sealed) in sample_integer_models().items()}
STRICT_C99 = ("-std=c99", "-O2")
SANITISED = ("-std=c99", "-O1", "-g", "-fsanitize=address,undefined", "-fno-sanitize-recover=all")


def gcc(*flags: str) -> Way:
    return Way(compiler("gcc"), "c", flags or STRICT_C99)


def assert_same_bits(run: Run, sealed: SealedModel) -> None:
    assert (run.ran, run.trouble, run.model_id, run.self_test) == (True, None, sealed.model_id, 0), run
    assert list(run.outputs or ()) == [vector.expected for vector in make_vectors(sealed)], run.what


# --- the same bits ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", MODELS)
def test_integer_header_gives_the_bits_of_the_reference_scorer(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    path = tmp_path / C.file(sealed)
    path.write_text(header(sealed))
    compiler("gcc")
    runs = list(C.run(path, sealed, [vector.inputs for vector in make_vectors(sealed)], False))
    assert len(runs) == 3
    for run in runs:
        assert_same_bits(run, sealed)


@pytest.mark.slow
@pytest.mark.parametrize("name", list(MODELS)[::3])  # every model is compiled in the quick ways above
def test_whole_matrix_gives_the_bits_in_integers(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    path = tmp_path / C.file(sealed)
    path.write_text(header(sealed))
    wanted = sum(len(ways.thorough(compiler(family))) for family in FAMILIES)
    runs = list(C.run(path, sealed, [vector.inputs for vector in make_vectors(sealed)], True))
    assert len(runs) == wanted
    for run in runs:
        assert_same_bits(run, sealed)


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("name", ["pump_int16", "pump_int32", "wide_int16", "counts_int32", "many_int16"])
def test_integer_header_runs_clean_under_the_sanitisers(name: str, family: str, tmp_path: Path) -> None:
    assert_same_bits(run_header(header(MODELS[name]), MODELS[name], Way(compiler(family), "c", SANITISED), tmp_path),
                     MODELS[name])  # fmt: skip


def converters(offset: str = "-95") -> SealedModel:
    """int32 on counts of 12 bits: products may be made in halves."""
    counts = Counts(12, "0.1", offset, False, False)
    inputs = [Quantity(f"adc_{k}", "kPa", "-95", "250", counts=counts) for k in range(5)]
    return seal_request(make_trained(inputs, 9), make_request(inputs, model="converters", arithmetic="int32"))


def test_products_in_halves_give_the_same_bits(tmp_path: Path) -> None:
    for sealed in (converters(), MODELS["counts_int32"]):
        assert can_halve(sealed)
        for family in FAMILIES:
            way = Way(compiler(family), "c", (*SANITISED, f"-D{sealed.name.upper()}_HALVES=1"))
            assert_same_bits(run_header(header(sealed), sealed, way, tmp_path), sealed)
    assert not can_halve(MODELS["pump_int32"])  # counts of 32 bits
    assert "HALVES" not in header(MODELS["pump_int32"])


# --- the proven extremes ---------------------------------------------------------------------------------------------


def extreme_rows(sealed: SealedModel) -> list[tuple[int, ...]]:
    """The rows that push the accumulator as far down, and as far up, as it goes."""
    rows = []
    for sign in (-1, 1):
        row = []
        for term, entry in zip(sealed.terms, sealed.inputs, strict=True):
            weights = [sign * int(weight) for weight in term.weights[0]]
            if term.form == "level":
                row.append(weights.index(max(weights)))
            else:
                row.append(int(entry.high) if weights[0] > 0 else int(entry.low))
        rows.append(tuple(row))
    return rows


@pytest.mark.parametrize("name", MODELS)
def test_accumulator_reaches_its_proven_extremes_and_no_further(name: str, tmp_path: Path) -> None:
    sealed = MODELS[name]
    rows = extreme_rows(sealed)
    last = [step for step in proof(sealed) if step.what == "sum"][-1]
    for family in FAMILIES:
        run = run_header(header(sealed), sealed, Way(compiler(family), "c", SANITISED), tmp_path, rows)
        assert (run.trouble, run.self_test) == (None, 0)
        found = [from_bits(output.log_odds[0], sealed.arithmetic) for output in run.outputs or ()]
        assert found == [last.lowest, last.highest]
        assert list(run.outputs or ()) == [expected(sealed, row) for row in rows]


# --- outputs that follow by hand -------------------------------------------------------------------------------------


def by_hand(arithmetic: str, **changes: object) -> SealedModel:
    """z = 5 + 3 (n - 2) 2^2 for n in [-10, 12], in units of 2^-4: a node every 4 units; z >= 17 is class 1."""
    sealed = MODELS[f"one_input_{arithmetic}"]
    table = replace(sealed.table, drop=0, step=2)  # type: ignore[type-var]
    return replace(
        sealed,
        inputs=(replace(sealed.inputs[0], low=-10, high=12, **changes),),
        terms=(Term("value", (0,), 2, ((3,),), 2),),
        intercepts=(5,),
        decision=Thresholds(17, 17),
        accumulator_shift=4,
        table=table,
    )


@pytest.mark.parametrize("arithmetic", ["int16", "int32"])
def test_integer_outputs_follow_by_hand(arithmetic: str, tmp_path: Path) -> None:
    sealed = by_hand(arithmetic)
    nodes = sealed.table.nodes  # type: ignore[union-attr]
    least, missing = -(1 << (ACCUMULATOR_BITS[arithmetic] - 1)), missing_count(sealed)
    # |z| / 4 is 1 1/4, 4 1/4, 1 3/4, beyond the last node (32), 31 1/4
    between = {
        5: nodes[1] + ((nodes[2] - nodes[1]) * 1 + 2) // 4,
        17: nodes[4] + ((nodes[5] - nodes[4]) * 1 + 2) // 4,
        -7: 32768 - (nodes[1] + ((nodes[2] - nodes[1]) * 3 + 2) // 4),
        -139: 32768 - nodes[32],
        125: nodes[31] + ((nodes[32] - nodes[31]) * 1 + 2) // 4,
    }
    rows = [(2, 0, 5, 0), (3, 0, 17, 1), (1, 0, -7, 0), (-10, 0, -139, 0), (12, 0, 125, 1)]
    rows += [(n, 1, least, -2) for n in (-11, 13, missing, missing + 1, -missing - 1)]
    run = run_header(header(sealed), sealed, gcc(), tmp_path, [row[:1] for row in rows])
    found = [(output.fault, from_bits(output.log_odds[0], arithmetic), output.decision) for output in run.outputs or ()]
    assert found == [row[1:] for row in rows]
    chances = [output.probability[0] for output in run.outputs or ()]
    assert chances == [between.get(row[2], 0xFFFF) for row in rows]


@pytest.mark.parametrize("arithmetic", ["int16", "int32"])
def test_integer_policies_clamp_and_stand_in(arithmetic: str, tmp_path: Path) -> None:
    sealed = by_hand(arithmetic, outside="clamp", missing="typical", typical=4)
    missing = missing_count(sealed)
    rows = [(missing, 29), (missing + 1, -139), (-missing - 1, 125), (-11, -139), (13, 125), (4, 29)]
    run = run_header(header(sealed), sealed, gcc(), tmp_path, [row[:1] for row in rows])
    assert [(o.fault, from_bits(o.log_odds[0], arithmetic)) for o in run.outputs or ()] == [(0, z) for _, z in rows]
    strict = by_hand(arithmetic, outside="clamp")  # what is missing never clamps
    run = run_header(header(strict), strict, gcc(), tmp_path, [(missing,), (missing + 1,)])
    assert [output.fault for output in run.outputs or ()] == [1, 0]


def test_half_is_exact_at_log_odds_zero_and_the_table_is_symmetric(tmp_path: Path) -> None:
    sealed = replace(by_hand("int16"), intercepts=(0,))
    run = run_header(header(sealed), sealed, gcc(), tmp_path, [(n,) for n in range(-8, 13)])
    chances = [output.probability[0] for output in run.outputs or ()]  # z = 12 (n - 2), n - 2 from -10 to 10
    assert chances[10] == 16384
    assert [32768 - chance for chance in reversed(chances)] == chances
    assert chances == sorted(chances)
