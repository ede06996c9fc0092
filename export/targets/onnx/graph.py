"""A graph under construction: named nodes and constants in the order in which they are added."""

from __future__ import annotations

import struct
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from onnx import GraphProto, NodeProto, TensorProto, helper

from runtime_min.model import Input

FORMATS: dict[int, str] = {
    TensorProto.FLOAT: "f",
    TensorProto.DOUBLE: "d",
    TensorProto.INT32: "i",
    TensorProto.INT64: "q",
}


@dataclass
class Graph:
    """Nodes and constants so far. `kind` is the element type of log-odds: FLOAT or DOUBLE, INT32 or INT64."""

    kind: int
    nodes: list[NodeProto] = field(default_factory=list)
    constants: dict[str, TensorProto] = field(default_factory=dict)

    def node(self, name: str, operator: str, *inputs: str, **attributes: Any) -> str:
        """Add an operator with one output, called like the node; returns that name."""
        self.nodes.append(helper.make_node(operator, inputs, [name], name=name, **attributes))
        return name

    def number(self, name: str, value: float) -> str:
        """A scalar of the type of log-odds."""
        return self._constant(name, self.kind, (), [value])

    def numbers(self, name: str, values: Sequence[float]) -> str:
        """A vector of the type of log-odds."""
        return self._constant(name, self.kind, (len(values),), values)

    def integer(self, name: str, value: int) -> str:
        """An int64 scalar: a position, a class, a decision."""
        return self._constant(name, TensorProto.INT64, (), [value])

    def proto(self, name: str, inputs: Sequence[Any], outputs: Sequence[Any], text: str) -> GraphProto:
        """The finished graph."""
        return helper.make_graph(
            self.nodes, name, inputs, outputs, initializer=list(self.constants.values()), doc_string=text
        )

    def any(self, flags: Sequence[str], name: str) -> str:
        """Or of them all; of none: false in every row."""
        if not flags:
            first = self.node("first_column", "Gather", "inputs", self.integer("first", 0), axis=1)
            return self.node(name, "Less", first, first)
        result = flags[0]
        for count, flag in enumerate(flags[1:], start=1):
            result = self.node(name if count == len(flags) - 1 else f"{name}.{count}", "Or", result, flag)
        return result

    def _constant(self, name: str, kind: int, shape: tuple[int, ...], values: Sequence[float]) -> str:
        # Raw little-endian bytes, so that the bits are those of the sealed model.
        raw = struct.pack(f"<{len(values)}{FORMATS[kind]}", *values)
        self.constants[name] = helper.make_tensor(name, kind, shape, raw, raw=True)
        return name


def prefix(entry: Input) -> str:
    """What the names of an input's own nodes start with; no other node's name starts so, whatever the plan's names."""
    return f"input.{entry.name}"
