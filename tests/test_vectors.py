"""Which rows the artefacts are tried on."""

from __future__ import annotations

import pytest
from models import sample_extended_models, sample_integer_models, sample_sealed_models

from export.vectors import make_vectors, self_test_of
from runtime_min.model import INTEGERS
from runtime_min.score import log_odds

MODELS = {name: sealed for name, (_, sealed) in (sample_sealed_models() | sample_extended_models()).items()}
MODELS |= {name: sealed for name, (_, sealed) in sample_integer_models().items()}
REACHABLE = ("pump_int16", "pump_int32", "wide_int16", "rare_int32", "many_int16", "many_int32", "pump_binary32")


@pytest.mark.parametrize("name", [name for name in REACHABLE if name in MODELS])
def test_some_rows_lie_exactly_on_a_threshold(name: str) -> None:
    sealed = MODELS[name]
    limits = (sealed.decision.low, sealed.decision.high)
    on = [v for v in make_vectors(sealed) if not v.expected.fault and log_odds(sealed, v.inputs) in limits]
    assert len(on) >= 5
    assert all(entry.low <= x <= entry.high for v in on for x, entry in zip(v.inputs, sealed.inputs, strict=True))


@pytest.mark.parametrize("name", MODELS)
def test_rows_of_the_self_test_are_all_different_and_of_several_kinds(name: str) -> None:
    vectors = self_test_of(MODELS[name], make_vectors(MODELS[name])).vectors
    assert len({repr(vector.inputs) for vector in vectors}) == len(vectors)
    assert len({vector.kind for vector in vectors}) >= 2


@pytest.mark.parametrize("name", MODELS)
def test_every_input_is_tried_missing_and_beyond_each_limit(name: str) -> None:
    sealed = MODELS[name]
    vectors = make_vectors(sealed)
    for position, entry in enumerate(sealed.inputs):
        tried = [vector.inputs[position] for vector in vectors]
        missing = (lambda x: x != x) if sealed.arithmetic not in INTEGERS else (lambda x: x in (-(2**15), -(2**31)))
        assert any(map(missing, tried))
        assert any(x < entry.low for x in tried if x == x)
        assert any(x > entry.high for x in tried if x == x)
