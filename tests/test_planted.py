"""It must be able to fail: every mistake of the list is planted, and what must find it finds it and names it."""

from __future__ import annotations

import re
from collections import Counter
from functools import cache
from pathlib import Path

import pytest
from planted import Planted, every_mistake
from planted.bench import Bench

from export import attack, check

MISTAKES = every_mistake()
search = cache(attack.attack)


@pytest.fixture
def bench(release_copy: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Bench:
    """The attack on one and the same pair of models is run once: it depends on nothing else."""
    monkeypatch.setattr(check, "attack", search)
    return Bench(release_copy, tmp_path, monkeypatch)


@pytest.mark.parametrize("planted", MISTAKES, ids=lambda planted: f"{planted.stage}: {planted.mistake}")
def test_mistake_is_caught_and_named(planted: Planted, bench: Bench) -> None:
    sentences = planted.found(bench)
    assert [sentence for sentence in sentences if "mistake in firmlogit" in sentence] == []
    assert any(re.search(planted.told, sentence) for sentence in sentences), sentences


def test_list_holds_forty_different_mistakes_over_every_stage() -> None:
    counts = Counter((planted.stage, planted.mistake) for planted in MISTAKES)
    assert max(counts.values()) == 1
    assert len(counts) >= 40
    assert {planted.stage for planted in MISTAKES} >= {
        "rows",
        "split",
        "standardise",
        "fit",
        "held-out results",
        "witness",
        "seal",
        "budget",
        "reference scorer",
        "sealed model",
        "trained model",
        "vectors",
        "documents",
        "manifest",
        "C header",
        "Python module",
        "ONNX graph",
    }


@pytest.mark.parametrize("target", ["python", "c", "onnx"])
def test_release_without_a_mistake_passes(target: str, bench: Bench) -> None:
    assert bench.check(target) == []


def test_small_plan_without_a_mistake_passes(bench: Bench) -> None:
    assert bench.ship() == []
