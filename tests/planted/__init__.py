"""Mistakes on purpose, one entry each: at which stage, what it is, how to plant it, and what must be said of it.

`in_artefacts`: in a file that a device runs; only running it may find them. `in_files`: in what else a release holds.
`in_code`: in the tool's own functions, replaced while a small plan is shipped.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from planted.bench import Bench


@dataclass(frozen=True)
class Planted:
    """`found`: plants the mistake and gives the sentences of the checks that failed; one must match `told`."""

    stage: str
    mistake: str
    found: Callable[[Bench], list[str]]
    told: str


def every_mistake() -> tuple[Planted, ...]:
    """All of them, in the order of the flow."""
    from planted import in_artefacts, in_code, in_files

    return (*in_code.MISTAKES, *in_files.MISTAKES, *in_artefacts.MISTAKES)
