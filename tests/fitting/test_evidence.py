"""What is shown beside the criterion: held-out lines, whiteness, poles that are known at all."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from realize.fitting import fit_response
from realize.fitting.evidence import _looked_at
from realize.fitting.problem import Problem
from realize.fitting.records import Candidate

POLES = np.array([-0.05 + 2j, -0.15 + 5j, -0.1 + 6.5j])
W = np.linspace(0.05, 8, 200)
CLEAN = (0.1j / (1j * W[:, None] - POLES) - 0.1j / (1j * W[:, None] - POLES.conj())).sum(axis=1)[:, None, None] + 0.2


def test_held_out_misfit_is_that_of_fits_without_the_line(complex_noise: Callable) -> None:
    """First order in 1/lines: leaving out each tenth line in turn, poles polished again."""
    data = (CLEAN + 0.02 * complex_noise(CLEAN.shape, 1))[:, 0]
    problem = Problem(1j * W, data, np.full((200, 1), 1 / 0.02), True, False, True, np.inf)
    poles, _ = problem.polished(np.array([p for q in POLES for p in (q, q.conjugate())]), 40, 1e-12)
    _, held = _looked_at(problem, Candidate(6, 0.0, 1.0, 0.0, True), poles)
    for k in range(3, 200, 10):
        weights = problem.weights.copy()
        weights[k] = 0
        again, _ = problem.with_weights(weights).polished(poles, 40, 1e-12)
        missed = problem.with_weights(weights).misfit(again)[k, 0] / 0.02
        assert np.sqrt(held[k, 0]) == pytest.approx(abs(missed), rel=0.1, abs=0.05)


def test_orders_around_the_kept_one_show_what_speaks_against_them(complex_noise: Callable) -> None:
    fit = fit_response(W, CLEAN + 0.02 * complex_noise(CLEAN.shape, 2))
    shown = {c.order: c for c in fit.candidates if c.held_out is not None}
    kept = shown[fit.order]
    assert fit.order == 6
    assert kept.cancelling == 0
    assert kept.spread < 0.2
    assert abs(kept.correlation) < 0.2
    smaller = [c for c in shown.values() if c.order == 4]
    assert smaller[0].held_out > 1.3 * kept.held_out
    assert smaller[0].correlation > 0.3
    larger = [c for c in shown.values() if c.order >= 8]
    assert larger[0].cancelling >= 1
    assert larger[0].held_out > 0.98 * kept.held_out


def test_an_order_that_is_too_high_is_doubted(complex_noise: Callable) -> None:
    data = CLEAN + 0.02 * complex_noise(CLEAN.shape, 3)
    assert not any("left out" in text for text in fit_response(W, data).cautions)
    high = fit_response(W, data, order=(0, 12))
    assert high.order == 6


def test_more_than_forty_poles() -> None:
    """Twenty-two modes: the order is not capped at 40."""
    poles = np.linspace(2, 45, 22) * (-0.005 + 1j)
    w = np.linspace(0.5, 47, 700)
    H = np.sum(0.05j / (1j * w[:, None] - poles) - 0.05j / (1j * w[:, None] - poles.conj()), axis=1)
    rng = np.random.default_rng(1)
    noise = 0.003 * (rng.normal(size=w.size) + 1j * rng.normal(size=w.size))
    fit = fit_response(w, H + noise)
    assert fit.order == 44
    assert np.max(np.abs(np.sort([row.frequency for row in fit.pole_table]) - np.abs(poles))) < 0.02
