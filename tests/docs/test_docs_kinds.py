"""The example of each kind in the docs reads, and is the plant that the page says it is."""

from __future__ import annotations

import json
import re
from pathlib import Path

import numpy as np
import pytest

from realize.files import read
from realize.models import Model
from realize.schema import KINDS
from realize.steps import convert, inspect

PAGE = Path(__file__).parents[2] / "docs" / "formats" / "examples.rst"
BLOCK = re.compile(r"^\.\. code-block:: json\n\n((?:   .*\n|\n)+)", re.MULTILINE)


def examples() -> dict[str, str]:
    texts = BLOCK.findall(PAGE.read_text(encoding="utf-8"))
    found = {json.loads(text)["kind"]: text for text in texts}
    assert len(found) == len(texts), "one example for each kind"
    return found


def model_of(kind: str, folder: Path) -> Model:
    (folder / "model.json").write_text(examples()[kind], encoding="utf-8")
    return read(folder / "model.json")


def test_every_kind_has_its_example() -> None:
    assert set(examples()) == set(KINDS)


#: What the page says: value of each channel at a point.
VALUES = {
    "transfer-function": lambda s: [[2 / (s + 3)], [2 / (s * (s + 3))]],
    "zero-pole-gain": lambda s: [[4 * (s + 1) / ((s + 2) ** 2 + 1)]],
    "pole-residue": lambda s: [[1 / (s + 1) + 3 / (s + 1) ** 2 + 0.5]],
    "sections": lambda z: [[0.01 * (z + 1) ** 3 / ((z * z - 1.5 * z + 0.6875) * (z - 0.5))]],
    "matrix-fraction": lambda s: [[1 / (s * s + 1), s / (s + 2) - s / ((s * s + 1) * (s + 2))]],
    "state-space": lambda s: [[s / (5 * s + 2)]],
    "second-order": lambda s: [[8 / (s * s * (2 * s * s + 24))], [(s * s + 8) / (2 * s * s + 24)]],
}


@pytest.mark.parametrize("kind", VALUES)
def test_the_plant_is_what_the_page_says(kind: str, tmp_path: Path) -> None:
    model = model_of(kind, tmp_path)
    for point in (0.7 + 0.3j, -0.2 + 1.9j):
        assert np.allclose(model.evaluate(point), VALUES[kind](point), rtol=1e-13)
    made = convert(model, "transfer-function")
    assert np.allclose(made.model.evaluate(0.7 + 0.3j), VALUES[kind](0.7 + 0.3j), rtol=1e-13)
    assert inspect(model)["kind"] == kind


@pytest.mark.parametrize("kind", ["frequency-response", "impulse-response", "time-record"])
def test_data_reads(kind: str, tmp_path: Path) -> None:
    model = model_of(kind, tmp_path)
    assert model.kind == kind and model.shape == ((1, 2) if kind == "time-record" else (1, 1))
