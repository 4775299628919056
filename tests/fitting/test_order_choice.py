"""The order chosen for noisy data."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable

import numpy as np
import pytest

from realize.fitting import fit_response
from realize.fitting.problem import Problem
from realize.fitting.thinning import thinned


@pytest.mark.parametrize("kind", ["constant", "proportional"])
def test_order_six_with_one_percent_noise(invented: Callable, complex_noise: Callable, kind: str) -> None:
    w = np.linspace(0.05, 13, 200) if kind == "constant" else np.geomspace(0.05, 15, 200)
    orders = Counter()
    for seed in range(4):
        H = invented(6, seed=seed).at(1j * w)
        size = np.sqrt(np.mean(np.abs(H) ** 2)) if kind == "constant" else np.abs(H)
        fit = fit_response(w, H + 0.01 * size * complex_noise(H.shape, seed))
        orders[fit.order] += 1
        assert 0.8 < fit.weighted < 1.2
    assert orders[6] >= 3
    assert all(5 <= n <= 8 for n in orders)


def test_noise_alone_and_a_noisy_constant_have_order_zero(complex_noise: Callable) -> None:
    w = np.geomspace(0.1, 10, 200)
    noise = complex_noise((200, 1, 1), 3)
    assert fit_response(w, noise).order == 0
    fit = fit_response(w, 1 + 0.01 * noise)
    assert fit.order == 0
    assert fit.noise.level == pytest.approx(0.01, rel=0.2)


def test_a_range_is_kept_to(invented: Callable, complex_noise: Callable) -> None:
    w = np.geomspace(0.05, 15, 200)
    H = invented(6, seed=1).at(1j * w)
    H = H + 0.01 * np.abs(H) * complex_noise(H.shape, 1)
    assert fit_response(w, H, order=(2, 4)).order == 4
    assert fit_response(w, H, order=(2, 9)).order == 6
    assert 8 <= fit_response(w, H, order=(8, 9)).order <= 9


def test_an_order_too_large_is_remarked(invented: Callable, complex_noise: Callable) -> None:
    w = np.geomspace(0.05, 15, 200)
    H = invented(4, seed=1).at(1j * w)
    fit = fit_response(w, H + 0.01 * np.abs(H) * complex_noise(H.shape, 1), order=8)
    assert fit.order == 8
    assert any("order 4 would do" in text for text in fit.cautions)


def test_one_line_that_is_wrong_gets_no_pole(invented: Callable, complex_noise: Callable) -> None:
    w = np.linspace(0.05, 13, 300)
    H = invented(4, seed=3).at(1j * w)
    H = H + 0.01 * np.sqrt(np.mean(np.abs(H) ** 2)) * complex_noise(H.shape, 1)
    H[150] += 0.12 * np.sqrt(np.mean(np.abs(H) ** 2))
    assert fit_response(w, H).order == 4


def test_misfit_falls_with_the_order(invented: Callable, complex_noise: Callable) -> None:
    w = np.geomspace(0.05, 15, 150)
    H = invented(8, seed=2).at(1j * w) + 0.01 * complex_noise((150, 1, 1), 1)
    fit = fit_response(w, H)
    rms = [c.weighted for c in fit.candidates]
    # a pair more is never worse: it starts from the smaller fit
    assert all(later <= sooner * (1 + 1e-6) for sooner, later in zip(rms, rms[2:], strict=False))


def test_the_search_on_very_many_lines_uses_fewer(invented: Callable, complex_noise: Callable) -> None:
    w = np.linspace(0.05, 13, 12000)
    system = invented(4, seed=1, damping=(2e-3, 1e-2))
    H = system.at(1j * w)
    H = H + 0.05 * np.sqrt(np.mean(np.abs(H) ** 2)) * complex_noise(H.shape, 1)
    few = thinned(Problem(1j * w, H[:, :, 0], np.ones((12000, 1)), False, True, True, np.inf))
    assert few.points.size < 7000
    # nothing of the response is lost between the lines that are left
    exact = system.at(1j * w)[:, 0, 0]
    left = np.isin(w, few.x)
    between = np.interp(w, few.x, exact[left].real) + 1j * np.interp(w, few.x, exact[left].imag)
    assert np.max(np.abs(between - exact)) < 0.02 * np.max(np.abs(exact))
    fit = fit_response(w, H)
    assert fit.order == 4
    assert fit.misfit.shape[0] == 12000
    assert fit.weighted < 1.1
