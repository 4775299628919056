"""Lines that do not belong are found, listed and weighted down; those that do are not."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from realize.fitting import fit_response
from realize.fitting.outliers import hum, threshold, trusted
from realize.fitting.problem import Problem

POLES = np.array([-0.05 + 2j, -0.15 + 5j])
W = np.linspace(0.05, 8, 320)
CLEAN = (0.1j / (1j * W[:, None] - POLES) - 0.1j / (1j * W[:, None] - POLES.conj())).sum(axis=1)[:, None, None] + 0.2
SIZE = 0.01 * np.sqrt(np.mean(np.abs(CLEAN) ** 2))


def frequencies(fit: object) -> np.ndarray:
    return np.array([row.frequency for row in fit.pole_table])


def test_without_outliers_nothing_changes(complex_noise: Callable) -> None:
    data = CLEAN + SIZE * complex_noise(CLEAN.shape, 1)
    one, two = fit_response(W, data), fit_response(W, data, robust=False)
    assert one.order == two.order == 4
    assert one.outliers == ()
    assert np.allclose(one.poles, two.poles, rtol=1e-9)


@pytest.mark.parametrize("given", [True, False])
def test_single_lines(complex_noise: Callable, given: bool) -> None:
    data = CLEAN + SIZE * complex_noise(CLEAN.shape, 2)
    lines = [20, 81, 150, 199, 260, 300]
    data[lines] += 40 * SIZE * np.exp(1j * np.arange(6))[:, None, None]
    fit = fit_response(W, data, deviation=np.full(data.shape, SIZE) if given else None)
    assert fit.order == 4
    assert sorted(row.line for row in fit.outliers) == lines
    for row in fit.outliers:
        assert row.size == pytest.approx(40, rel=0.25)
        assert row.weight == pytest.approx((threshold(320) / row.size) ** 2)
        assert row.frequency == W[row.line]
    assert any("6 value(s) of 6 line(s)" in text for text in fit.cautions)
    rows = [abs(row.frequency - abs(p)) / row.frequency_deviation for row, p in zip(fit.pole_table, POLES, strict=True)]
    assert max(rows) < 4
    plain = fit_response(W, data, order=4, robust=False)
    errors = [np.linalg.norm(frequencies(f) - np.abs(POLES)) for f in (fit, plain)]
    assert errors[0] < errors[1]
    assert fit.pole_table[0].frequency_deviation < 0.5 * plain.pole_table[0].frequency_deviation


def test_a_rough_stretch_counts_less_and_the_top_of_a_resonance_does_not(complex_noise: Callable) -> None:
    data = CLEAN + SIZE * complex_noise(CLEAN.shape, 3)
    data[230:245] += 30 * SIZE * complex_noise((15, 1, 1), 4)
    fit = fit_response(W, data, order=4)
    assert {row.line for row in fit.outliers} <= set(range(230, 245))
    assert len(fit.outliers) >= 12
    # a model without the second mode: its misfit is smooth, and no fault of the lines
    short = fit_response(W, CLEAN + SIZE * complex_noise(CLEAN.shape, 3), order=2)
    assert short.outliers == ()


def test_one_channel_of_several(complex_noise: Callable) -> None:
    H = CLEAN * np.array([[1.0], [2.0]])
    data = H + SIZE * complex_noise(H.shape, 5)
    data[100, 1, 0] += 60 * SIZE
    fit = fit_response(W, data)
    assert [(row.line, row.output, row.input) for row in fit.outliers] == [(100, 1, 0)]
    assert [row.rank for row in fit.pole_table] == [1, 1]


def test_a_narrow_resonance_is_no_outlier(complex_noise: Callable) -> None:
    pole = -0.01 + 3.01j
    H = CLEAN + (0.05j / (1j * W - pole) - 0.05j / (1j * W - pole.conjugate()))[:, None, None]
    fit = fit_response(W, H + SIZE * complex_noise(H.shape, 6))
    assert fit.order == 6
    assert fit.outliers == ()
    assert np.min(np.abs(frequencies(fit) - abs(pole))) < 0.01


def test_exact_data_have_none() -> None:
    fit = fit_response(W, CLEAN)
    assert fit.outliers == ()
    assert fit.rms < 1e-12


def test_trust_is_lowered_for_lines_alone_in_their_error_only(complex_noise: Callable) -> None:
    data = CLEAN[:, 0] + SIZE * complex_noise((320, 1), 7)
    data[[90, 200]] += 50 * SIZE
    problem = Problem(1j * W, data, np.full((320, 1), 1 / SIZE), True, False, True, np.inf)
    found = trusted(problem)
    assert found.trust is not None
    assert np.flatnonzero(found.trust[:, 0] < 1).tolist() == [90, 200]
    assert np.allclose(found.weights, problem.weights * found.trust)
    data = CLEAN[:, 0] + SIZE * complex_noise((320, 1), 7)
    assert trusted(Problem(1j * W, data, np.full((320, 1), 1 / SIZE), True, False, True, np.inf)).trust is None


def test_mains_hum_is_recognised() -> None:
    assert hum(np.array([50.0, 149.9, 250.0, 71.3])) == 50
    assert hum(np.array([60.1, 120.0, 180.0])) == 60
    assert hum(np.array([50.0, 100.0])) is None
    assert hum(np.array([13.0, 50.0, 71.0])) is None
    assert hum(np.array([50.0, 50.1, 50.2])) is None
