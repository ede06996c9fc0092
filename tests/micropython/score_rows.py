"""Runs under MicroPython: the reference scorer and the generated module on every row, outputs printed as raw bits.

The model comes as JSON of plain data, each number as the bits of its binary64, and becomes a plain object.
"""

import json
import struct
import sys

sys.path.insert(0, "/house")

import artefact  # noqa: I001
from runtime_min import check_inputs, decide, log_odds, probability
from runtime_min.arithmetic import raw_bits


class Plain:
    """An object with the fields of a JSON object."""


def plain(value):
    if isinstance(value, dict):
        made = Plain()
        for key in value:
            setattr(made, key, plain(value[key]))
        return made
    return [plain(entry) for entry in value] if isinstance(value, list) else value


with open("/house/rows.json") as file:
    asked = json.load(file)
with open("/house/model.json") as file:
    model = plain(json.load(file))

print(artefact.MODEL_ID, artefact.self_test())
for texts in asked:
    row = [struct.unpack("<d", struct.pack("<Q", int(text, 16)))[0] for text in texts]
    reference = (check_inputs(model, row), log_odds(model, row), probability(model, row), decide(model, row))
    generated = (artefact.check_inputs(row), artefact.log_odds(row), artefact.probability(row), artefact.decide(row))
    for fault, z, p, decision in (reference, generated):
        print(fault, hex(raw_bits(z, "binary64")), hex(raw_bits(p, "binary64")), decision)
