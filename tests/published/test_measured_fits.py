"""Fits of published measurements; sources: ../shared/data/README.md of the project's surroundings."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from realize.files import read
from realize.fitting import Fit, fit_response

FOLDER = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"

pytestmark = pytest.mark.skipif(not FOLDER.is_dir(), reason=f"measured data are not at {FOLDER}")


@pytest.fixture(scope="module")
def fitted() -> Callable[..., Fit]:
    def fit(name: str, columns: list[str] | None = None, **options: object) -> Fit:
        data = read(FOLDER / name, columns=columns)
        return fit_response(data.radians, data.response, **options)

    return fit


def test_three_responses_of_one_structure(fitted: Callable[..., Fit]) -> None:
    """Common resonances near lines 279, 460, 687 and 959 (README of the data), one line taken as 1 Hz."""
    fit = fitted("mechanical_points_1_to_3.csv")
    assert 10 <= fit.order <= 24
    assert fit.residues.shape[1:] in ((3, 1), (1, 3))
    hertz = np.array([row.frequency / (2 * np.pi) for row in fit.pole_table if row.pair and row.damping < 0.01])
    for line in (279, 460, 687, 959):
        assert np.min(np.abs(hertz - line)) < 1
    assert fit.rms < 0.15
    assert fit.worst.value < 0.25


def test_battery_impedance(fitted: Callable[..., Fit]) -> None:
    """Smooth diffusive spectrum over six and a half decades: real poles, misfit below half a percent."""
    fit = fitted("EIS_battery_exampleData.csv", ["frequency_hz", "real", "imaginary"])
    assert fit.order <= 16
    assert fit.rms < 5e-3
    assert fit.worst.value < 1e-2
    assert all(row.damping > 0.2 for row in fit.pole_table if row.dominance > 0.01)


@pytest.mark.parametrize(
    ("name", "columns", "hertz", "quality", "within"),
    [
        # A. Gregory, National Physical Laboratory Report MAT 58 (2021): loaded Q 7454, 3.987848 GHz
        ("NPL_MAT58_Figure6b.txt", ["frequency_ghz", "real", "imaginary"], 3.987848e9, 7454, 0.01),
        # no published value: a fit of the project's own surroundings gave 9.760151 GHz and 4750
        ("NPL_MAT58_Figure23.txt", ["frequency_ghz", "real", "imaginary", "-", "-"], 9.760151e9, 4750, 0.02),
    ],
)
def test_microwave_resonators(
    fitted: Callable[..., Fit], name: str, columns: list[str], hertz: float, quality: float, within: float
) -> None:
    fit = fitted(name, columns)
    row = max((row for row in fit.pole_table if row.pair), key=lambda row: row.dominance)
    assert row.frequency / (2 * np.pi) == pytest.approx(hertz, rel=2e-6)
    assert 1 / (2 * row.damping) == pytest.approx(quality, rel=within)
    assert fit.order <= 6
    assert fit.rms < 3e-3
    assert fit.weighted < 1.2
