"""The table of modes and channels of a fit."""

from __future__ import annotations

import math
from typing import Any

import pytest

from realize.reports.look import Page
from realize.reports.modes import bars_in_words, channels_table, modes_table

BARS: dict[str, Any] = {
    "basis": "information",
    "level": 1.0,
    "freedom": 100,
    "correlation": 0.01,
    "white": True,
    "independent": True,
    "enlarged": False,
    "growth": 1.0,
    "excludes": "errors of the model",
}


def mode(hertz: float, **more: Any) -> dict[str, Any]:
    return {
        "frequency": 2 * math.pi * hertz,
        "frequency_deviation": 2 * math.pi * hertz * 1e-4,
        "damping": 0.005,
        "damping_deviation": 1e-4,
        "dominance": 0.5,
        "pair": True,
        "rank": 1,
        "strength": 50.0,
        "cancelling": False,
        "output_shape": [[1.0, 0.0]],
        "output_shape_deviation": [0.0],
        "input_shape": [[1.0, 0.0]],
        "input_shape_deviation": [0.0],
    } | more


def lines(text: str) -> list[str]:
    return [" ".join(line.split()) for line in text.splitlines()]


def test_frequencies_damping_and_bars_in_one_unit() -> None:
    text = lines(modes_table({"modes": [mode(120.0), mode(2400.0)], "bars": BARS}))
    assert text[1].startswith("kHz ± damping ± share")
    assert "0.12 0.01 % 0.005 2 % 50 %" in text
    assert "2.4 0.01 % 0.005 2 % 50 %" in text
    assert any("Not in the bars: errors of the model." in line for line in text)


def test_shapes_with_phase_and_a_mode_that_may_be_noise() -> None:
    shape = [[1.0, 0.0], [-0.5, 1e-9], [0.0, 0.25]]
    text = modes_table({"modes": [mode(3, output_shape=shape, cancelling=True, rank=2)], "bars": BARS})
    assert "1 0.5∠180 0.25∠90" in " ".join(text.split())
    assert "may be noise" in text
    assert "inputs" not in text
    modes_table({"modes": [mode(3, output_shape=shape * 9)], "bars": BARS}, page=Page(40, False, True)).encode("ascii")


def test_a_real_pole_and_what_is_open() -> None:
    one = mode(1.0, pair=False, damping=1.0, damping_deviation=None, frequency_deviation=None)
    text = lines(modes_table({"modes": [one], "bars": BARS | {"level": None}}))
    assert any("open real pole" in line for line in text)
    assert any("No bars" in line for line in text)
    assert modes_table({"modes": [], "bars": BARS}) == "no modes: order 0\n"
    many = modes_table({"modes": [mode(k + 1.0) for k in range(60)], "bars": BARS})
    assert "and 20 more modes" in many


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"basis": "sandwich", "white": False, "growth": 1.7, "correlation": 0.66}, "up to 1.7: neighbouring lines"),
        ({"basis": "sandwich", "independent": False, "growth": 2.0}, "channels err together"),
        ({"basis": "sandwich", "growth": 2.0}, "larger in places"),
        ({"enlarged": True, "level": 3.0}, "3 times the deviations given"),
    ],
)
def test_what_the_bars_rest_on(change: dict[str, Any], text: str) -> None:
    assert text in " ".join(bars_in_words(BARS | change))


def test_channels() -> None:
    row = {"output": 1, "input": 0, "rms": 0.01, "weighted": 1.02, "worst": 0.05, "frequency": 2 * math.pi * 60}
    text = lines(channels_table({"channels": [row] * 50}))
    assert "0 → 1 0.01 1.02 0.05 60 Hz" in text
    assert text[-1] == "... and 10 more channels"
