"""Thirty of the random loops of benchmarks/accuracy/licences.py: a licensed loop is stable with the full plant."""

from __future__ import annotations

import importlib.util
from collections import Counter
from pathlib import Path

import pytest

PLACE = Path(__file__).resolve().parents[2] / "benchmarks" / "accuracy" / "licences.py"


def test_licensed_loops_are_stable() -> None:
    if not PLACE.is_file():
        pytest.skip("benchmarks/accuracy/licences.py is not beside the tests")
    spec = importlib.util.spec_from_file_location("licences", PLACE)
    assert spec is not None and spec.loader is not None
    licences = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(licences)
    outcomes = Counter(licences.one_loop(seed) for seed in range(30))
    assert outcomes["VIOLATED"] == 0
    # the test says something only where controllers are licensed
    assert outcomes["licensed"] >= 5
