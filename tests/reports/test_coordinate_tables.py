"""Coordinates in the table for people: the condition of the transform and the facts of the form."""

from __future__ import annotations

from typing import Any

import pytest

import realize
from realize.models import StateSpace
from realize.reports.coordinates import coordinates_rows
from realize.reports.tables import receipt_table

#: -2 is reached by no input.
PLANT = StateSpace(
    A=[[-1.0, 1.0, 0.0, 0.0], [0.0, -2.0, 0.0, 0.0], [0.5, 0.0, -3.0, 1.0], [0.0, 0.0, -1.0, -3.0]],
    B=[[1.0], [0.0], [1.0], [1.0]],
    C=[[1.0, 2.0, 0.0, 1.0]],
)


@pytest.mark.parametrize(
    ("form", "facts"),
    [
        ("kalman", ["3 reachable and observable", "1 observable", "0 neither", "decided exactly", "condition 1"]),
        ("reachable-staircase", ["3 reachable, 1 unreachable", "steps of 1, 1, 1", "controllability indices 3"]),
        ("observable-staircase", ["4 observable, 0 unobservable", "observability indices 4"]),
        ("controller-hessenberg", ["1 subdiagonal", "condition 1"]),
        ("schur", ["3 blocks of 1, 1, 2", "condition 1"]),
        ("modal", ["3 blocks of 1, 1, 2", "condition 2.64"]),
        ("scaled", ["6 before, 6 after"]),
        ("controllability", ["no transform from the source's states"]),
    ],
)
def test_the_facts_of_a_form_stand_in_the_table(form: str, facts: list[str]) -> None:
    made = realize.convert(PLANT, "state-space", form=form, force=True)
    text = receipt_table(made)
    assert max(len(line) for line in text.splitlines()) <= 80
    joined = " ".join(text.split())
    for fact in facts:
        assert fact in joined
    rows = coordinates_rows(made.receipt.details)
    assert [title for title, _ in rows] == ["coordinates", "of the form"][: len(rows)]


def test_nothing_is_said_without_a_form() -> None:
    made = realize.convert(PLANT, "transfer-function")
    assert coordinates_rows(made.receipt.details) == []
    assert "of the form" not in receipt_table(made)


def test_many_blocks_are_counted() -> None:
    record: dict[str, Any] = {"form": "schur", "condition": 1.0, "blocks": [{"size": 1 + k % 2} for k in range(500)]}
    assert coordinates_rows({"coordinates": record})[1][1] == "500 blocks of 2 (250 times), 1 (250 times)"
    record = {"form": "reachable-staircase", "condition": 1.0, "controllability_indices": [3] * 20}
    assert coordinates_rows({"coordinates": record})[1][1].endswith("and 8 more")
