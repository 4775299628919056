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


def test_the_conditions_of_a_licence() -> None:
    """Both weights stated, the plant without dead time, the model a plant and not a controller."""
    import realize
    from realize.models import DeadTime

    plant = realize.TransferFunction(numerator=[1.0], denominator=[1.0, 3.2, 3.4, 1.0])
    states = realize.convert(plant, "state-space").model
    both = {"input_weight": [2.0], "output_weight": [0.5]}
    late = states.with_(dead_time=DeadTime((0.5,), (0.0,), ((0.0,),)), receipts=())

    def given(model: realize.Model = states, **options: object) -> bool:
        return realize.reduce(model, order=2, method="balanced-truncation", **options).receipt.details["licence"][
            "given"
        ]

    assert given(**both)
    assert not given() and not given(input_weight=[2.0]) and not given(output_weight=[0.5])
    assert not given(late, **both)
    assert not given(plant=plant, **both)
    assert given(controller=plant, **both)
