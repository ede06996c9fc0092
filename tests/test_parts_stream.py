"""The same bits on every part for 100,000 random rows a model, drawn on the part itself.

Each program prints a running CRC-32 of all its answers. The host's program is held against the reference scorer, and
every part against the host's.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from c_programs import need
from models import CURRENT, FLOW, IMPELLER, SUCTION, VALVE, VIBRATION, WATER, make_request, make_trained
from part_streams import of_reference, on_host, on_part, rows

from export.parts import PARTS
from export.targets import TARGETS
from runtime_min import score
from runtime_min.model import DecisionRequest, SealedModel
from runtime_min.sealing import seal_request

ROWS = 100_000
BLOCK = 5_000
TOOLS = ("arm-none-eabi-gcc", "qemu-system-arm", "avr-gcc", "qemu-system-avr", "simavr")
PUMP = (SUCTION, FLOW, CURRENT, VIBRATION, WATER, IMPELLER)
SETS = {
    "two": (VIBRATION, IMPELLER),
    "three": (CURRENT, WATER, SUCTION),
    "six": PUMP,
    "nine": (*PUMP, VALVE, replace(FLOW, name="leak"), replace(WATER, name="oil", outside="fault")),
    "twelve": tuple(replace(SUCTION, name=f"suction_{rank}") for rank in range(12)),
    "forty": tuple(replace(PUMP[rank % 6], name=f"sensor_{rank}") for rank in range(40)),
}


def model(name: str, arithmetic: str) -> SealedModel:
    """Weights small enough that both classes come up, and no-call between them."""
    trained = make_trained(SETS[name], len(name), weight_sd=2.0 / len(SETS[name]) ** 0.5)
    decision = DecisionRequest(None, None, "0.25", "0.125")
    request = make_request(SETS[name], model=name, arithmetic=arithmetic, decision=decision, tolerance=None)
    return seal_request(trained, request)


@pytest.mark.slow
@pytest.mark.parametrize("name", SETS)
@pytest.mark.parametrize("arithmetic", TARGETS["c"].arithmetics)
def test_100000_rows_give_the_same_bits_on_every_part(name: str, arithmetic: str, tmp_path: Path) -> None:
    need(*TOOLS)
    sealed = model(name, arithmetic)
    host = on_host(sealed, ROWS, BLOCK, tmp_path)
    assert len(host) == len(set(host)) == ROWS // BLOCK
    assert host[0] == of_reference(sealed, BLOCK)
    fitting = [part for part in PARTS.values() if arithmetic in part.arithmetics]
    assert len(fitting) >= 3
    assert {part.name: on_part(part, sealed, ROWS, BLOCK) == host for part in fitting} == {
        part.name: True for part in fitting
    }


@pytest.mark.parametrize("arithmetic", TARGETS["c"].arithmetics)
def test_streams_have_every_decision_and_faults(arithmetic: str) -> None:
    """A stream whose rows were all faults would show nothing."""
    for name in SETS:
        sealed = model(name, arithmetic)
        decisions = [score.decide(sealed, row) for row in rows(sealed, 2000)]
        assert min(decisions.count(call) for call in (0, 1)) > 100, name
        assert score.FAULT in decisions, name
        assert score.NO_CALL in decisions, name
