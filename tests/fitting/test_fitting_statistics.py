"""A sample of benchmarks/accuracy/fitting_statistics.py, and its bound against finite differences."""

from __future__ import annotations

import importlib
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

PLACE = Path(__file__).resolve().parents[2] / "benchmarks" / "accuracy"


@pytest.fixture(scope="module")
def statistics() -> Iterator[Any]:
    if not (PLACE / "fitting_statistics.py").is_file():
        pytest.skip("benchmarks/accuracy/fitting_statistics.py is not beside the tests")
    sys.path.insert(0, str(PLACE))
    try:
        yield importlib.import_module("fitting_statistics")
    finally:
        sys.path.remove(str(PLACE))


@pytest.mark.parametrize("case", ["heavy 1x1 1.0% constant", "integrator 1x1 1.0% constant"])
def test_order_bars_and_bound(statistics: Any, case: str) -> None:
    found = next(c for c in statistics.cases() if c[0] == case)
    row = statistics.one((*found, 1, False))
    assert row["above"]
    assert row["order"] == row["truth"] == row["states"]
    assert row["stable"]
    ratios = np.array(row["ratios"])
    # 3 deviations of the RMS of so few numbers
    limit = 1 + 3 / np.sqrt(2 * ratios.shape[0])
    assert np.all(np.sqrt(np.mean(ratios**2, axis=0)) < limit)


def test_the_derivatives_of_the_truth(statistics: Any) -> None:
    from dataclasses import replace

    import fitting_truth

    truth = fitting_truth.integrating(0, (2, 1))
    slopes = truth.derivatives()
    h = 1e-5
    for unit, row in ((1, 0), (1j, 1)):
        plus, minus = (
            replace(truth, pairs=truth.pairs + e * unit * np.eye(truth.pairs.size)[0]).response() for e in (h, -h)
        )
        assert np.allclose((plus - minus) / (2 * h), slopes[row], rtol=1e-5, atol=1e-7 * np.max(np.abs(slopes[row])))
    left = truth.left.copy()
    left[0, 1] += 1j * h
    change = (replace(truth, left=left).response() - truth.response()) / h
    assert np.allclose(change, slopes[5], rtol=1e-4, atol=1e-6 * np.max(np.abs(slopes[5])))
