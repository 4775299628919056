"""Estimated responses: what is found, what is refused, and that units of the signals make no difference."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy import signal

from realize.errors import InputError, UsageError
from realize.estimation import Settings, estimate_response
from realize.estimation.periodic import period_of
from realize.kernels import spectra
from realize.schema import WINDOWS

T = 1e-3
RNG = np.random.default_rng(1)
U = RNG.standard_normal(4096)
Y = signal.lfilter([1.0, 0.5], [1.0, -0.6], U)


def true(frequency: np.ndarray) -> np.ndarray:
    return signal.freqz([1.0, 0.5], [1.0, -0.6], 2 * np.pi * frequency * T)[1]


@pytest.mark.parametrize(("scale_in", "scale_out"), [(1e-150, 1e150), (1e150, 1e-150), (1e-300, 1.0), (3.0, 1e300)])
def test_units_of_the_signals_only_scale_the_response(scale_in: float, scale_out: float) -> None:
    plain = estimate_response([U], [Y + RNG.standard_normal(Y.size) * 0], T)
    if scale_out / scale_in > 1e299:
        scale_out = scale_in * 1e299
    made = estimate_response([U * scale_in], [Y * scale_out], T)
    assert np.allclose(made.response / (scale_out / scale_in), plain.response, rtol=1e-12)
    assert made.deviation is not None and plain.deviation is not None
    assert np.allclose(made.deviation / (scale_out / scale_in), plain.deviation, rtol=1e-6)


def test_a_response_beyond_the_doubles_is_refused() -> None:
    with pytest.raises(InputError, match="beyond the largest double"):
        estimate_response([U * 1e-200], [Y * 1e200], T)


def test_an_offset_makes_no_difference() -> None:
    plain, moved = estimate_response([U], [Y], T), estimate_response([U + 1e3], [Y - 1e4], T)
    assert np.allclose(moved.response, plain.response, rtol=1e-9)


@pytest.mark.parametrize("window", WINDOWS)
def test_every_window_finds_the_response(window: str) -> None:
    made = estimate_response([U], [Y], T, Settings(window=window, averaging="welch"))
    error = np.abs(made.response[:, 0, 0] - true(made.frequency))
    assert np.median(error / np.abs(true(made.frequency))) < (0.1 if window == "rectangular" else 0.02)
    assert window in made.method
    assert set(WINDOWS) == set(spectra.COSINES)


def test_lines_that_are_kept_are_independent() -> None:
    """The squared correlation of neighbours is below 5 %; the Hann window has 1/36 two lines apart."""
    for name in WINDOWS:
        window = spectra.window_of(name, 64)
        step = spectra.independent_step(window, 0.05)
        assert spectra.line_correlation(window, step) ** 2 <= 0.05 + 1e-12
    hann = spectra.window_of("hann", 64)
    assert spectra.independent_step(hann, 0.05) == 2
    assert spectra.line_correlation(hann, 1) == pytest.approx(2 / 3, rel=1e-12)
    assert spectra.line_correlation(hann, 2) == pytest.approx(1 / 6, rel=1e-12)
    assert spectra.window_correlation(hann, 32) == pytest.approx(1 / 6, rel=1e-12)


@pytest.mark.parametrize("length", [100, 101, 256])
@pytest.mark.parametrize("noise", [0.0, 0.05])
def test_the_period_of_the_inputs_is_found(length: int, noise: float) -> None:
    u = np.tile(RNG.standard_normal((length, 1)), (6, 1))
    assert period_of(u + noise * RNG.standard_normal(u.shape)) == length


def test_no_period_is_invented() -> None:
    assert period_of(U[:, None]) is None
    assert period_of(np.cumsum(U)[:, None]) is None
    # a sine whose period is 100.4 samples repeats after 502
    n = np.arange(3000)
    assert period_of(np.sin(2 * np.pi * n / 100.4)[:, None]) == 502


def test_periods_leave_no_leakage() -> None:
    u = np.tile(U[:200], 6)
    y = signal.lfilter([1.0, 0.5], [1.0, -0.6], u)
    made = estimate_response([u], [y], T)
    assert made.details["averaging"] == "periodic" and made.details["excitation_period"] == 200
    assert np.abs(made.response[:, 0, 0] - true(made.frequency)).max() < 1e-10


def test_a_first_period_that_has_not_settled_is_left_out() -> None:
    u = np.tile(U[:200], 6)
    y = signal.lfilter([1.0], np.poly([0.999]), u) + 0.01 * RNG.standard_normal(u.size)
    made = estimate_response([u], [y], T)
    assert made.details["settled_after"][0] >= 1 and "not settled" in " ".join(made.cautions)


def test_settling_is_left_out() -> None:
    y = Y.copy()
    y[:96] += 1e3
    made = estimate_response([U], [y], T, Settings(settling=0.096))
    assert np.median(np.abs(made.response[:, 0, 0] - true(made.frequency))) < 0.01


def test_stepped_sines_with_given_dwells_and_repeated_frequencies() -> None:
    f = np.repeat([0.01, 0.05, 0.01, 0.2], 1000)
    u = np.sin(2 * np.pi * np.cumsum(f))
    y = signal.lfilter([1.0, 0.5], [1.0, -0.6], u)
    for settings in (Settings(averaging="stepped-sine"), Settings(averaging="stepped-sine", segment=1000)):
        made = estimate_response([u], [y], T, settings)
        assert np.allclose(made.frequency, [10, 50, 200], rtol=1e-5)
        assert np.allclose(made.response[:, 0, 0], true(made.frequency), rtol=1e-4)


def test_an_output_that_is_not_related_gets_a_caution() -> None:
    both = np.column_stack([Y, RNG.standard_normal(Y.size)])
    made = estimate_response([U], [both], T)
    assert any("output 1 is not related" in text for text in made.cautions)
    assert not any("output 0" in text for text in made.cautions)
    u = np.tile(U[:256], 8)
    made = estimate_response([u], [RNG.standard_normal(u.size)], T)
    assert made.details["averaging"] == "periodic" and any("not related" in text for text in made.cautions)


def test_a_resonance_that_is_not_resolved_gets_a_caution() -> None:
    y = signal.lfilter([1.0], np.poly([0.9995 * np.exp(0.5j), 0.9995 * np.exp(-0.5j)]).real, U)
    made = estimate_response([U], [y], T, Settings(segment=64))
    assert any("resolve" in text and "--segment" in text for text in made.cautions)


BAD: list[tuple[Any, Any, Settings, str]] = [
    ([U], [np.full(4096, np.nan)], Settings(), "finite"),
    ([np.ones(4096)], [Y], Settings(), "moves"),
    ([np.full(4096, 0.1)], [Y], Settings(), "moves"),
    ([U[:10]], [Y[:10]], Settings(), "at least 16"),
    ([U[:100]], [Y[:100]], Settings(), "at least 128"),
    ([U], [Y[:-1]], Settings(), "4095 samples"),
    ([U], [Y], Settings(segment=3000), "independent"),
    ([U], [Y], Settings(segment=5000), "0 segment"),
    ([np.arange(4096) > 500], [Y], Settings(), "a step or a pulse"),
    ([U], [Y], Settings(averaging="stepped-sine", segment=8), "at least 16"),
    ([U], [Y], Settings(segment=4), "at least 8"),
    ([U], [Y], Settings(averaging="periodic"), "do not repeat"),
    ([U], [Y], Settings(excitation_period=5000), "one period"),
    ([U], [Y], Settings(excitation_period=2), "at least 4"),
    ([U], [Y], Settings(averaging="stepped-sine"), "dwell"),
    ([np.column_stack([U, 2 * U])], [Y], Settings(), "move together"),
    ([np.column_stack([U, U])], [Y], Settings(excitation_period=1024), "another pattern"),
    ([U, U], [Y, np.column_stack([Y, Y])], Settings(), "other signals"),
]  # fmt: skip


@pytest.mark.parametrize(("inputs", "outputs", "settings", "words"), BAD)
def test_what_a_record_lacks_is_said(inputs: Any, outputs: Any, settings: Settings, words: str) -> None:
    with pytest.raises(InputError, match=words):
        estimate_response(inputs, outputs, T, settings)


@pytest.mark.parametrize(
    "settings",
    [
        Settings(averaging="all"),
        Settings(estimator="h3"),
        Settings(window="round"),
        Settings(overlap=1.0),
        Settings(averaging="periodic", estimator="hv"),
        Settings(averaging="welch", excitation_period=100),
        Settings(averaging="periodic", segment=100),
    ],
)
def test_settings_that_do_not_exist_or_contradict(settings: Settings) -> None:
    with pytest.raises(UsageError):
        estimate_response([U], [Y], T, settings)


def test_a_constant_output_is_zero() -> None:
    made = estimate_response([U], [np.full(4096, 5.0)], T)
    assert not np.any(made.response) and made.deviation is not None and not np.any(made.deviation)
