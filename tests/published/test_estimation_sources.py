"""Estimated responses against an independent library, textbook formulas and a published record."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy import signal

import realize
from realize.estimation import Settings, estimate_response
from realize.estimation.welch import coherences
from realize.kernels import spectra

FOLDER = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"
T = 0.002


def _record(seed: int, samples: int = 2048) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    u = rng.standard_normal(samples)
    return u, signal.lfilter([1.0, 0.4], [1.0, -0.7], u) + 0.3 * rng.standard_normal(samples)


@pytest.mark.parametrize(("window", "theirs"), [("hann", "hann"), ("blackman", "blackman"), ("flat-top", "flattop")])
@pytest.mark.parametrize("overlap", [0.0, 0.5, 0.75])
def test_against_the_spectra_of_scipy(window: str, theirs: str, overlap: float) -> None:
    """H1, H2, Hv and coherence from scipy.signal.csd, welch and coherence, at the lines that are kept."""
    u, y = _record(1)
    u, y = u - u.mean(), y - y.mean()
    options = {
        "fs": 1 / T,
        "window": theirs,
        "nperseg": 256,
        "noverlap": int(256 * overlap),
        "detrend": False,
    }
    f, cross = signal.csd(u, y, **options)
    _, xx = signal.welch(u, **options)
    _, yy = signal.welch(y, **options)
    _, coherence = signal.coherence(u, y, **options)
    expected = {
        "h1": cross / xx,
        "h2": yy / np.conj(cross),
        "hv": np.sqrt(yy / xx) * cross / np.abs(cross),
    }
    for estimator, values in expected.items():
        settings = Settings(averaging="welch", estimator=estimator, window=window, overlap=overlap, segment=256)
        made = estimate_response([u], [y], T, settings)
        at = np.searchsorted(f, made.frequency * (1 - 1e-9))
        assert np.allclose(f[at], made.frequency, rtol=1e-12)
        assert np.allclose(made.response[:, 0, 0], values[at], rtol=1e-9)
        assert made.coherence is not None
        assert np.allclose(made.coherence[:, 0, 0], coherence[at], rtol=1e-9)


def test_the_variance_formula_of_bendat_and_piersol() -> None:
    """Random Data, 4th edition 2010, section 9.1 (from memory): |H|^2 (1 - c) / (2 c n) for magnitude and for phase.

    Segments side by side; the deviation here is that of the complex value, 2 times as large in square, with n - 1 for
    n, and the noise shared with neighbours where n is small.
    """
    u, y = _record(2, 64 * 128)
    made = estimate_response([u], [y], T, Settings(averaging="welch", overlap=0.0, segment=128, window="rectangular"))
    assert made.details["segments"] == 64 and made.coherence is not None and made.deviation is not None
    c, size = made.coherence[:, 0, 0], np.abs(made.response[:, 0, 0])
    textbook = size * np.sqrt((1 - c) / (c * 64))
    # what is left is the bias by resolution, which is added in squares, and n - 1
    ratio = made.deviation[:, 0, 0] / textbook
    assert np.all(ratio >= np.sqrt(64 / 63) * (1 - 1e-9)) and np.median(ratio) < 1.05


def test_overlapping_segments_count_as_welch_says() -> None:
    """Welch 1967: with the Hann window and half overlap, K segments are worth K / (1 + 2 (1 - 1/K) / 36)."""
    u, y = _record(3)
    made = estimate_response([u], [y], T, Settings(averaging="welch", segment=128))
    k = made.details["segments"]
    assert k == 31
    assert made.details["averages"] == pytest.approx(k / (1 + 2 * (1 - 1 / k) / 36), rel=1e-12)


def test_partial_and_multiple_coherence_of_two_inputs() -> None:
    """Random Data, section 7.3 (from memory): partial coherence from conditioned spectra, multiple from all inputs."""
    rng = np.random.default_rng(4)
    u = rng.standard_normal((4096, 2)) @ np.array([[1.0, 0.5], [0.0, 1.0]])
    y = u @ np.array([[1.0], [0.3]]) + 0.5 * rng.standard_normal((4096, 1))
    window = spectra.window_of("hann", 128)
    starts = np.arange(0, 4096 - 127, 64)
    x, out = spectra.segment_spectra(u, starts, window)[1:64], spectra.segment_spectra(y, starts, window)[1:64]
    solved = spectra.solve_lines(x, out, np.arange(1, 64), starts, np.zeros_like(starts), window)
    partial, multiple = coherences(solved)
    all_signals = np.concatenate([x, out], axis=2)
    s = np.swapaxes(all_signals, 1, 2) @ np.conj(all_signals)
    for j, other in ((0, 1), (1, 0)):
        left = [[s[:, a, b] - s[:, a, other] * s[:, other, b] / s[:, other, other] for b in (j, 2)] for a in (j, 2)]
        expected = np.abs(left[1][0]) ** 2 / (left[0][0] * left[1][1]).real
        assert np.allclose(partial[:, 0, j], expected, rtol=1e-9)
    inner = s[:, :2, :2]
    row = s[:, 2:, :2]
    whole = (row @ np.linalg.solve(inner, np.conj(np.swapaxes(row, 1, 2))))[:, 0, 0].real / s[:, 2, 2].real
    assert np.allclose(multiple[:, 0], whole, rtol=1e-9)


@pytest.mark.skipif(not FOLDER.is_dir(), reason=f"measured data are not at {FOLDER}")
def test_the_robot_arm() -> None:
    """DaISy 96-009: one period of a sweep. Ratio of transforms, 199 strongly excited lines, peak near line 129."""
    record = realize.read(FOLDER / "daisy_robot_arm.dat", columns=["input_torque", "output_acceleration"], rate=1.0)
    assert isinstance(record, realize.TimeRecord) and record.input.shape == (1024, 1)
    made = realize.convert(record, "frequency-response", excitation_period=1024)
    line = np.rint(made.model.frequency * 1024).astype(int)
    assert line.size == 199 and line.max() < 230
    ratio = np.fft.rfft(record.output[:, 0])[line] / np.fft.rfft(record.input[:, 0])[line]
    assert np.allclose(made.model.response[:, 0, 0], ratio, rtol=1e-9)
    inner = np.abs(made.model.response[:, 0, 0])
    assert line[np.argmax(np.where(line > 100, inner, 0))] in (129, 130)
    fitted = realize.fit(record, excitation_period=1024)
    modes = [m["frequency"] / (2 * np.pi) * 1024 for m in fitted.receipt.details["modes"] if m["damping"] < 0.01]
    assert any(abs(mode - 129.8) < 0.7 for mode in modes) and any(abs(mode - 59.6) < 0.7 for mode in modes)
    assert fitted.model.order <= 10
