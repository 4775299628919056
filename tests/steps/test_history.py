"""The chain of receipts: accumulated error, restarts, and changes by other means."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import realize


def _plant() -> realize.TransferFunction:
    return realize.TransferFunction(numerator=[1.0, 5.1], denominator=[1.0, 3.3, 2.7])


def test_errors_compose_as_products() -> None:
    first = realize.convert(_plant(), "state-space")
    second = realize.convert(first, "zero-pole-gain")
    record = realize.history(second)
    errors = [row["error"] for row in record["history"]]
    assert [row["step"] for row in record["history"]] == ["convert", "convert"]
    assert record["accumulated_error"] == pytest.approx((1 + errors[0]) * (1 + errors[1]) - 1, rel=1e-9, abs=1e-30)
    assert record["edited"] == []


def test_a_reduction_counts_and_a_fit_restarts() -> None:
    w = np.geomspace(0.1, 100, 120)
    values = 1 / (1j * w + 1) + 0.1 / (-(w**2) + 0.4j * w + 100)
    data = realize.FrequencyResponse(frequency=w, frequency_unit="rad/s", response=values[:, None, None])
    fitted = realize.fit(data, order=3)
    reduced = realize.reduce(fitted, order=1)
    record = realize.history(reduced)
    assert record["history"][0]["accumulated_error"] == 0.0
    claim = reduced.receipt.claim("reduction-error")
    assert record["accumulated_error"] >= claim.relative
    assert record["accumulated_error"] == pytest.approx(claim.relative, rel=0.01)


def test_a_number_changed_by_hand_breaks_the_chain(tmp_path: Path) -> None:
    path = tmp_path / "model.json"
    realize.write(realize.convert(_plant(), "zero-pole-gain").model, path)
    assert realize.history(realize.read(path))["edited"] == []
    record = json.loads(path.read_text())
    record["gain"] = 1.0000000000000002
    path.write_text(json.dumps(record))
    assert realize.history(realize.read(path))["edited"] == ["after the last step (convert)"]


def test_a_model_swapped_in_the_middle_is_seen() -> None:
    first = realize.convert(_plant(), "zero-pole-gain").model
    other = first.with_(gain=[[2.0]])
    second = realize.convert(other, "transfer-function").model
    assert realize.history(second)["edited"] == ["between step 1 (convert) and step 2 (convert)"]


def test_a_model_without_receipts() -> None:
    assert realize.history(_plant())["history"] == []


def test_the_shell_prints_it(tmp_path: Path, run) -> None:  # type: ignore[no-untyped-def]
    path = tmp_path / "model.json"
    realize.write(realize.convert(_plant(), "zero-pole-gain").model, path)
    done = run("inspect", str(path), "--history", "--json")
    assert json.loads(done.out)["history"][0]["step"] == "convert"
    assert "Every digest fits" in run("inspect", str(path), "--history").out
