"""What every method that fits frequency responses keeps: exact data are reproduced to rounding, in any units."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from realize.errors import InputError, UsageError
from realize.fitting import METHODS, fit_response

NAMES = [name for name, method in METHODS.items() if method.fit is not None] + ["auto"]
EPS = 2.0**-52


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize(("order", "shape"), [(1, (1, 1)), (2, (1, 3)), (5, (2, 2)), (8, (3, 1)), (12, (1, 1))])
def test_exact_responses_are_recovered(name: str, order: int, shape: tuple[int, int], invented: Callable) -> None:
    system = invented(order, shape, seed=order)
    w = np.geomspace(0.03, 30, 240)
    H = system.at(1j * w)
    for wanted in (order, "auto"):
        fit = fit_response(w, H, order=wanted, method=name)
        assert fit.order == order
        assert fit.worst.value < 256 * EPS
        assert max(np.min(np.abs(fit.poles - pole)) / abs(pole) for pole in system.poles) < 1e-9


@pytest.mark.parametrize("name", NAMES)
def test_lines_from_zero_on(name: str, invented: Callable) -> None:
    system = invented(6, (2, 1), seed=4)
    w = np.linspace(0, 12, 300)
    H = system.at(1j * w)
    H[0] = H[0].real
    fit = fit_response(w, H, order=6, method=name)
    assert fit.worst.value < 256 * EPS


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize(("unit", "time"), [(1e-300, 1e-200), (1e300, 1e200), (1e-150, 1e150), (1.0, 1e-300)])
def test_units_change_nothing(name: str, unit: float, time: float, invented: Callable) -> None:
    system = invented(4, (1, 2), seed=7)
    w = np.geomspace(0.05, 20, 150)
    fit = fit_response(w / time, system.at(1j * w) / 50 * unit, order=4, method=name)
    assert fit.worst.value < 256 * EPS
    assert max(np.min(np.abs(fit.poles * time - pole)) / abs(pole) for pole in system.poles) < 1e-10


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("period", [1e-6, 1.0])
@pytest.mark.parametrize("direct", [True, False])
def test_sampled_responses(name: str, period: float, direct: bool) -> None:
    poles = np.array([0.95, 0.7 * np.exp(0.5j), 0.7 * np.exp(-0.5j), -0.8])
    residues = np.array([[0.3, 0.1], [0.1 + 0.2j, -0.3], [0.1 - 0.2j, -0.3], [0.05, 0.4]])
    w = np.linspace(0.01, 3.1, 200) / period
    z = np.exp(1j * w * period)
    H = ((1 / (z[:, None] - poles)) @ residues + (0.2 if direct else 0.0))[:, None, :]
    fit = fit_response(w, H, order=4, period=period, method=name, direct=direct)
    assert fit.worst.value < 256 * EPS
    assert np.all(np.abs(fit.poles) < 1)
    assert max(np.min(np.abs(fit.poles - pole)) for pole in poles) < 1e-11


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("level", [1e-3, 3e-2])
def test_noise_is_reached(name: str, level: float, invented: Callable, complex_noise: Callable) -> None:
    system = invented(10, (1, 1), seed=21, damping=(5e-3, 0.05))
    w = np.linspace(0.05, 12, 600)
    H = system.at(1j * w)
    size = np.sqrt(np.mean(np.abs(H) ** 2))
    noisy = H + level * size * complex_noise(H.shape, 3)
    fit = fit_response(w, noisy, deviation=np.full(H.shape, level * size), order=10, method=name)
    # 1200 numbers, 31 unknowns: chi-squared within four standard deviations
    assert np.sqrt(1 - 31 / 1200) * (1 - 0.085) < fit.weighted < np.sqrt(1 - 31 / 1200) * (1 + 0.085)
    assert np.all(fit.poles.real < 0)


@pytest.mark.parametrize("name", NAMES)
def test_weights_differ_from_channel_to_channel(name: str, invented: Callable, complex_noise: Callable) -> None:
    system = invented(4, (1, 2), seed=3)
    w = np.geomspace(0.05, 20, 300)
    H = system.at(1j * w)
    sigma = np.abs(H) * np.array([1e-4, 0.1]) + 1e-6
    fit = fit_response(w, H + sigma * complex_noise(H.shape, 8), deviation=sigma, order=4, method=name)
    assert fit.weighted == pytest.approx(1, abs=0.1)
    assert max(np.min(np.abs(fit.poles - pole)) / abs(pole) for pole in system.poles) < 0.01


@pytest.mark.parametrize("name", NAMES)
def test_repeated_poles(name: str) -> None:
    w = np.geomspace(0.03, 30, 150)
    H = 1 / (1j * w + 1) ** 3
    assert fit_response(w, H, order=3, method=name).worst.value < 1e-6
    assert fit_response(w, 1 / (1j * w + 1) ** 2, order=2, method=name).worst.value < 1e-9


@pytest.mark.parametrize("name", NAMES)
def test_few_lines_and_small_orders(name: str) -> None:
    assert fit_response([1.0], [0.5], method=name).order == 0
    with pytest.raises(InputError, match="1 line"):
        fit_response([1.0], [1 / (1j + 1)], method=name)
    fit = fit_response([1.0], [1 / (1j + 1)], order=1, method=name, direct=False)
    assert fit.worst.value < 16 * EPS and fit.poles[0] == pytest.approx(-1)
    for count in (2, 3, 4):
        w = np.geomspace(0.5, 2, count)
        fit = fit_response(w, 1 / (1j * w + 1), order=1, method=name)
        assert fit.worst.value < 64 * EPS
    w = np.linspace(1, 2, 30)
    assert fit_response(w, np.full(30, 2.0), order=3, method=name).order == 0
    assert fit_response(w, np.full(30, 2.0 + 1.0j), order=0, method=name).order == 0
    assert np.all(fit_response(w, np.full(30, 2.0 + 1.0j), order=4, method=name).poles.real < 0)
    with pytest.raises(InputError, match="increasing"):
        fit_response([1.0, 1.0, 2.0], [1, 1, 2], method=name)


@pytest.mark.parametrize("name", NAMES)
def test_a_channel_of_zeros_stays_zero(name: str, invented: Callable) -> None:
    w = np.geomspace(0.05, 20, 120)
    H = invented(4, (1, 3), seed=2).at(1j * w)
    H[:, 0, 1] = 0
    fit = fit_response(w, H, order=4, method=name)
    assert fit.worst.value < 256 * EPS
    assert not np.any(fit.residues[:, 0, 1]) and fit.direct[0, 1] == 0


def test_methods_say_what_they_take() -> None:
    with pytest.raises(UsageError, match="takes an impulse response"):
        fit_response([1.0, 2.0], [1, 2], method="ho-kalman")
