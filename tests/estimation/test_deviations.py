"""Deviations of estimated responses are as large as the errors: thousands of small records with known truth."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy import signal

from realize.estimation import Settings, estimate_response
from realize.estimation.runs import merge

T = 0.01
B, A = [1.0, -0.5], [1.0, -0.9, 0.4]
C, D = [0.5], [1.0, 0.3]


def truth(frequency: np.ndarray) -> np.ndarray:
    return signal.freqz(B, A, 2 * np.pi * frequency * T)[1][:, None, None]


def _white(rng: Any, samples: int, outputs: float, inputs: float) -> tuple[np.ndarray, np.ndarray]:
    """Random input, 100 samples of settling cut off."""
    u = rng.standard_normal(samples + 100)
    y = signal.lfilter(B, A, u) + outputs * rng.standard_normal(u.size)
    return (u + inputs * rng.standard_normal(u.size))[100:, None], y[100:, None]


def ratios(make: Callable[[Any], tuple[Any, Any]], count: int, settings: Settings, true: Any = truth) -> np.ndarray:
    """Mean square of error / deviation of each record."""
    rng = np.random.default_rng(7)
    found = []
    for _ in range(count):
        inputs, outputs = make(rng)
        inputs = inputs if isinstance(inputs, list) else [inputs]
        outputs = outputs if isinstance(outputs, list) else [outputs]
        made = estimate_response(inputs, outputs, T, settings)
        assert made.deviation is not None
        found.append(np.mean(np.abs((made.response - true(made.frequency)) / made.deviation) ** 2))
    return np.array(found)


@pytest.mark.parametrize(
    ("samples", "noise", "settings"),
    [
        (1024, (0.2, 0.0), Settings()),
        (512, (0.5, 0.0), Settings()),
        (1024, (0.2, 0.0), Settings(segment=128, overlap=0.75)),
        (1024, (0.2, 0.0), Settings(segment=128, overlap=0.0, window="hamming")),
        (1024, (0.2, 0.0), Settings(segment=128, window="blackman")),
        (1024, (0.0, 0.1), Settings(estimator="h2")),
        (1024, (0.1, 0.1), Settings(estimator="hv")),
    ],
)
def test_of_windowed_segments(samples: int, noise: tuple[float, float], settings: Settings) -> None:
    squares = ratios(lambda rng: _white(rng, samples, *noise), 200, settings)
    assert 0.88 < np.sqrt(np.mean(squares)) < 1.08


def test_of_excitations_that_are_not_noise() -> None:
    """The same sweep in every segment: overlapping segments then tell less than their number says."""
    n = np.arange(128)
    sweep = np.tile(np.sin(np.pi * 0.9 * n**2 / 256), 8)

    def make(rng: Any) -> tuple[np.ndarray, np.ndarray]:
        u = np.concatenate([sweep[-100:], sweep]) + 0.01 * rng.standard_normal(sweep.size + 100)
        y = signal.lfilter(B, A, u) + 0.5 * rng.standard_normal(u.size)
        return u[100:, None], y[100:, None]

    squares = ratios(make, 200, Settings(averaging="welch", segment=128))
    assert 0.85 < np.sqrt(np.mean(squares)) < 1.1


@pytest.mark.parametrize(("periods", "inputs"), [(2, 0.0), (3, 0.05), (6, 0.0), (16, 0.05)])
def test_of_periods(periods: int, inputs: float) -> None:
    base = np.random.default_rng(3).standard_normal(128)

    def make(rng: Any) -> tuple[np.ndarray, np.ndarray]:
        u = np.tile(base, periods + 1)
        y = signal.lfilter(B, A, u) + 0.2 * rng.standard_normal(u.size)
        return (u + inputs * rng.standard_normal(u.size))[128:, None], y[128:, None]

    squares = ratios(make, 300, Settings(excitation_period=128))
    assert 0.92 < np.sqrt(np.mean(squares)) < 1.08


def test_of_one_period() -> None:
    base = np.random.default_rng(3).standard_normal(512)

    def make(rng: Any) -> tuple[np.ndarray, np.ndarray]:
        u = np.tile(base, 2)
        y = signal.lfilter(B, A, u) + 0.2 * rng.standard_normal(u.size)
        return u[512:, None], y[512:, None]

    squares = ratios(make, 15, Settings(excitation_period=512))
    assert 0.85 < np.sqrt(np.mean(squares)) < 1.05


def _two(u: np.ndarray) -> np.ndarray:
    first, second = u.T
    return np.column_stack(
        [signal.lfilter(B, A, first) + signal.lfilter(C, D, second), 0.2 * first + 2 * signal.lfilter(C, D, second)]
    )


def true_two(frequency: np.ndarray) -> np.ndarray:
    w = 2 * np.pi * frequency * T
    h, k = signal.freqz(B, A, w)[1], signal.freqz(C, D, w)[1]
    return np.moveaxis(np.array([[h, k], [0.2 + 0 * h, 2 * k]]), 2, 0)


@pytest.mark.parametrize("estimator", ["h1", "h2"])
def test_of_two_inputs_that_move_alike(estimator: str) -> None:
    def make(rng: Any) -> tuple[np.ndarray, np.ndarray]:
        u = rng.standard_normal((2148, 2)) @ np.array([[1.0, 0.6], [0.0, 1.0]])
        y = _two(u)
        if estimator == "h1":
            y = y + rng.standard_normal(y.shape) * [0.1, 0.4]
        else:
            u = u + 0.05 * rng.standard_normal(u.shape)
        return u[100:], y[100:]

    squares = ratios(make, 60, Settings(estimator=estimator), true_two)
    assert 0.88 < np.sqrt(np.mean(squares)) < 1.08


def test_of_two_inputs_in_two_experiments() -> None:
    """Periodic, the second experiment with the sign of one input turned."""
    base = np.random.default_rng(5).standard_normal((128, 2))

    def make(rng: Any) -> tuple[list[np.ndarray], list[np.ndarray]]:
        inputs, outputs = [], []
        for sign in (1.0, -1.0):
            u = np.tile(base * [1.0, sign], (5, 1))
            y = _two(u) + rng.standard_normal(u.shape) * [0.1, 0.4]
            inputs.append(u[128:])
            outputs.append(y[128:])
        return inputs, outputs

    squares = ratios(make, 100, Settings(), true_two)
    assert 0.92 < np.sqrt(np.mean(squares)) < 1.08


def test_of_stepped_sines() -> None:
    cycles = np.geomspace(0.01, 0.2, 12)

    def make(rng: Any) -> tuple[np.ndarray, np.ndarray]:
        phase = np.concatenate([np.full(int(60 / f) if f > 0.05 else int(24 / f), f) for f in cycles]).cumsum()
        u = np.sin(2 * np.pi * phase)
        y = signal.lfilter(B, A, u) + 0.1 * rng.standard_normal(u.size)
        return u[:, None], y[:, None]

    squares = ratios(make, 25, Settings(averaging="stepped-sine"))
    assert 0.85 < np.sqrt(np.mean(squares)) < 1.15


@pytest.mark.parametrize("runs", [2, 3, 8])
@pytest.mark.parametrize("stated", [None, 1.0, 0.25])
def test_of_merged_runs(runs: int, stated: float | None) -> None:
    """Deviations that the runs contradict are raised."""
    rng = np.random.default_rng(11)
    squares = []
    for _ in range(200):
        sigma = rng.uniform(0.5, 2.0, (runs, 1, 1, 1)) * np.ones((runs, 40, 2, 1))
        error = sigma * (rng.standard_normal(sigma.shape) + 1j * rng.standard_normal(sigma.shape)) / np.sqrt(2)
        mean, deviation = merge(3.0 + error, None if stated is None else stated * sigma)
        squares.append(np.mean(np.abs((mean - 3.0) / deviation) ** 2))
    assert 0.85 < np.sqrt(np.mean(squares)) < 1.06


def test_bias_by_resolution_is_covered() -> None:
    """A resonance about as wide as the lines: the error at the peak is mostly bias, and the deviation contains it."""
    poles = 0.985 * np.exp(1j * np.array([0.7, -0.7]))
    a = np.poly(poles).real
    rng = np.random.default_rng(2)
    squares = []
    for _ in range(40):
        u = rng.standard_normal(9000)
        y = signal.lfilter([1.0], a, u)
        made = estimate_response([u[800:]], [y[800:]], T, Settings(segment=512))
        assert made.deviation is not None
        true = signal.freqz([1.0], a, 2 * np.pi * made.frequency * T)[1][:, None, None]
        near = np.abs(made.frequency * 2 * np.pi * T - 0.7) < 0.05
        squares.append(np.mean(np.abs((made.response - true)[near] / made.deviation[near]) ** 2))
    assert np.sqrt(np.mean(squares)) < 1.2
