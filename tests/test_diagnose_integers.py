"""What a wrong integer artefact is told to look at: the number, the shift, the sign, the width or the table."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
from models import sample_integer_models

from export.diagnose import differences
from export.targets import Output
from export.vector_files import read_vectors, vectors_csv
from export.vectors import expected, make_vectors
from runtime_min.arithmetic import ACCUMULATOR_BITS, from_bits, raw_bits
from runtime_min.errors import FileError
from runtime_min.model import SealedModel

SAMPLES = sample_integer_models()
SEALED = SAMPLES["counts_int16"][1]


def sentence(sealed: SealedModel, wrong: Callable[[tuple[float, ...]], Output]) -> str:
    vectors = make_vectors(sealed)
    count, told = differences(sealed, vectors, [wrong(vector.inputs) for vector in vectors])
    assert count > 0
    return told


def of_model(changed: SealedModel) -> Callable[[tuple[float, ...]], Output]:
    return lambda inputs: expected(changed, inputs)


def with_term(position: int, **fields: object) -> SealedModel:
    terms = list(SEALED.terms)
    terms[position] = replace(terms[position], **fields)  # type: ignore[arg-type]
    return replace(SEALED, terms=tuple(terms))


def moved(off: Callable[[int], int]) -> Callable[[tuple[float, ...]], Output]:
    """The right outputs, but for log-odds that were changed after they were found."""

    def output(inputs: tuple[float, ...]) -> Output:
        right = expected(SEALED, inputs)
        if right.fault:
            return right
        z = off(int(from_bits(right.log_odds[0], SEALED.arithmetic)))
        return replace(right, log_odds=(raw_bits(z, SEALED.arithmetic),))

    return output


def test_same_outputs_have_no_differences() -> None:
    for _, sealed in SAMPLES.values():
        vectors = make_vectors(sealed)
        assert differences(sealed, vectors, [expected(sealed, vector.inputs) for vector in vectors]) == (0, "")


@pytest.mark.parametrize(
    ("changed", "told"),
    [
        (with_term(0, weights=((SEALED.terms[0].weights[0][0] + 1,),)), 'follow the weight of "adc"'),
        (with_term(2, shift=int(SEALED.terms[2].shift or 0) - 1), 'follow the weight of "falling"'),
        (with_term(1, datum=int(SEALED.terms[1].datum or 0) + 1), "follow the intercept"),
        (replace(SEALED, intercepts=(SEALED.intercepts[0] + 1,)), "follow the intercept"),
        (with_term(3, weights=((0, SEALED.terms[3].weights[0][1], 5),)), 'follow the weight of "impeller" level 2'),
    ],
)
def test_wrong_number_is_named(changed: SealedModel, told: str) -> None:
    assert told in sentence(SEALED, of_model(changed))


def test_overflow_is_named() -> None:
    wrapped = moved(lambda z: z - 2**16 * (z // 2**28 % 3))
    assert "multiples of 65536: an integer overflows" in sentence(SEALED, wrapped)


def test_shift_that_rounds_is_named() -> None:
    assert "differences of at most 1 units: a shift rounds" in sentence(SEALED, moved(lambda z: z | 1 if z % 4 else z))


def test_wrong_table_is_told_from_wrong_log_odds() -> None:
    assert SEALED.table is not None
    nodes = (SEALED.table.nodes[0], SEALED.table.nodes[1] + 1, *SEALED.table.nodes[2:])
    told = sentence(SEALED, of_model(replace(SEALED, table=replace(SEALED.table, nodes=nodes))))
    assert "log-odds agree; look at the table and its interpolation" in told


def test_count_that_was_taken_without_its_sign_is_named() -> None:
    # -1 becomes 65535, which clamps to the upper limit.
    def unsigned(inputs: tuple[float, ...]) -> Output:
        return expected(SEALED, [count % 2**16 if count != -(2**15) else count for count in inputs])

    assert 'the rows where "shunt" is negative differ' in sentence(SEALED, unsigned)


def test_first_difference_is_shown_in_decimal_and_in_the_width_of_the_number() -> None:
    told = sentence(SEALED, of_model(replace(SEALED, intercepts=(SEALED.intercepts[0] + 1,))))
    first = next(v for v in make_vectors(SEALED) if not v.expected.fault)
    z = int(from_bits(first.expected.log_odds[0], "int16"))
    assert f"expected {z} ({z % 2**32:08X})" in told


# --- vectors.csv ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SAMPLES)
def test_vectors_of_integers_survive_their_file(name: str, tmp_path: Path) -> None:
    _, sealed = SAMPLES[name]
    vectors = make_vectors(sealed)
    (tmp_path / "vectors.csv").write_bytes(vectors_csv(sealed, vectors))
    assert read_vectors(sealed, tmp_path / "vectors.csv") == vectors


def test_bits_of_vectors_are_twos_complement_in_each_width() -> None:
    header, *lines = (line.split(",") for line in vectors_csv(SEALED, make_vectors(SEALED)).decode().splitlines())
    widths = {"adc_bits": 16, "shunt_bits": 16, "log_odds_bits": ACCUMULATOR_BITS["int16"], "probability_bits": 16}
    negative = 0
    for line in lines:
        for column, width in widths.items():
            at = header.index(column)
            assert line[at] == f"{int(line[at - 1]) % 2**width:0{width // 4}X}"
            negative += line[at - 1].startswith("-")
    assert negative > 100


@pytest.mark.parametrize("edit", [("decimal", "7"), ("bits", "0007"), ("bits", "00000007"), ("bits", "xyzw")])
def test_vector_edited_in_one_place_is_refused_with_its_line(edit: tuple[str, str], tmp_path: Path) -> None:
    path = tmp_path / "vectors.csv"
    lines = vectors_csv(SEALED, make_vectors(SEALED)).decode().splitlines()
    fields = lines[3].split(",")
    fields[1 if edit[0] == "decimal" else 2] = edit[1]
    lines[3] = ",".join(fields)
    path.write_text("\n".join(lines) + "\n", encoding="ascii")
    with pytest.raises(FileError, match=r"vectors\.csv: line 4: "):
        read_vectors(SEALED, path)
