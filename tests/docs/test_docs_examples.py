"""Examples on the pages about methods: the ten of the claims have their tests, the one of a reduction is computed."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import pytest

from realize import StateSpace, reduce

ROOT = Path(__file__).resolve().parents[2]
TESTS = ROOT / "tests" / "verification" / "test_worked_examples.py"


@pytest.mark.skipif(not TESTS.is_file(), reason="no tests of the worked examples in this copy")
def test_the_worked_examples_are_the_tested_ones() -> None:
    page = (ROOT / "docs" / "methods" / "claims.rst").read_text(encoding="utf-8")
    titles = dict(re.findall(r"^\*\*(\d+)\. (.*?)\.\*\*", page, re.MULTILINE))
    tests = dict(re.findall(r"^def test_(\d+)_(\w+)\(", TESTS.read_text(encoding="utf-8"), re.MULTILINE))
    assert sorted(map(int, titles)) == sorted(map(int, tests)) == list(range(1, 11))
    plain = {"a", "an", "the", "on", "of", "is", "that", "must", "in", "and", "identically"}
    for number, title in titles.items():
        words = set(re.findall(r"\w+", title.lower())) - plain
        assert words & set(tests[number].split("_")), (number, title, tests[number])


def about(value: float, rel: float) -> Any:
    return pytest.approx(value, rel=rel, abs=0)


def test_the_example_of_a_reduction() -> None:
    plant = StateSpace(A=[[-1.0, 0.0], [0.0, -10.0]], B=[[1.0], [1.0]], C=[[1.0, 1.0]], D=[[0.0]])
    receipt = reduce(plant, order=1).receipt
    assert receipt.details["hankel_singular_values"] == [about(0.51767, 1e-4), about(0.03233, 1e-3)]
    assert receipt.claim("reduction-bound").value == about(0.0647, 1e-2)
    assert receipt.claim("reduction-error").value == about(0.0647, 1e-2)
    assert receipt.claim("steady-state-error").value == about(0.059, 1e-2)
    assert receipt.details["lower_bound"] == about(0.0323, 1e-2)
