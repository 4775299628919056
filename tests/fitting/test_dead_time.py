"""Dead times estimated with the fit: right within their stated deviations, whole periods for sampled responses."""

from __future__ import annotations

import numpy as np
import pytest

from realize.errors import UsageError
from realize.fitting import Structure, fit_response
from realize.fitting.dead_time import groups_of

W = np.geomspace(0.05, 50, 160)
S = 1j * W


def noisy(values: np.ndarray, seed: int, level: float = 0.01) -> np.ndarray:
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=values.shape) + 1j * rng.normal(size=values.shape)
    return values * (1 + level * noise / np.sqrt(2))


def test_the_error_is_as_large_as_stated_pooled_over_seeds() -> None:
    truth = 2 / ((S + 1) * (S / 10 + 1)) * np.exp(-0.37 * S)
    errors = []
    for seed in range(8):
        fit = fit_response(
            W,
            noisy(truth, seed),
            deviation=0.01 * np.abs(truth),
            order=2,
            structure=Structure(relative_degree=2, dead_time="auto"),
        )
        (row,) = fit.dead_times
        assert row.deviation is not None
        errors.append((row.seconds - 0.37) / row.deviation)
    # 8 values of a unit normal: root mean square between 0.4 and 1.6 but for 1 set in a hundred
    assert 0.4 < np.sqrt(np.mean(np.square(errors))) < 1.6


def test_modes_with_a_dead_time_of_a_fraction_of_a_period() -> None:
    rng = np.random.default_rng(5)
    w = np.linspace(0.2, 12, 400)
    s = 1j * w
    period = np.pi / 12
    plant = sum(rng.normal() * f**2 / (s**2 + 0.02 * f * s + f**2) for f in (1.3, 2.9, 4.4, 7.1))
    truth = plant * np.exp(-3.7 * period * s)
    deviation = 0.01 * float(np.sqrt(np.mean(np.abs(truth) ** 2)))
    noise = deviation * (rng.normal(size=w.size) + 1j * rng.normal(size=w.size)) / np.sqrt(2)
    fit = fit_response(
        w,
        truth + noise,
        deviation=np.full(w.size, deviation),
        structure=Structure(relative_degree=2, dead_time="auto"),
    )
    (row,) = fit.dead_times
    assert fit.order == 8
    assert abs(row.seconds / period - 3.7) < 0.1
    assert row.deviation is not None
    assert abs(row.seconds - 3.7 * period) < 4 * row.deviation
    assert 0.8 < fit.weighted < 1.2
    assert fit.dead_time is not None
    value = np.sum(fit.residues[:, 0, 0] / (s[:, None] - fit.poles), axis=1) * np.exp(-s * fit.dead_time[0, 0])
    assert np.max(np.abs(value - truth - noise - fit.misfit[:, 0, 0])) < 1e-8 * np.max(np.abs(truth))


def test_no_dead_time_is_found_where_there_is_none() -> None:
    fit = fit_response(W, noisy(3 / (S + 2), 1), order=1, structure=Structure(relative_degree=1, dead_time="auto"))
    (row,) = fit.dead_times
    assert row.deviation is not None
    assert row.seconds < 3 * row.deviation


@pytest.mark.parametrize("kind", ["auto-per-input", "auto-per-output", "auto-per-channel"])
def test_several_dead_times(kind: str) -> None:
    groups, _ = groups_of(kind, 2, 2)
    delays = np.linspace(0.1, 0.7, groups.shape[1])
    total = (groups @ delays).reshape(2, 2)
    channels = np.stack([1 / (S + 1), 2 / ((S + 1) * (S + 3)), (S + 4) / ((S + 1) * (S + 3)), 3 / (S + 3)], axis=1)
    truth = channels.reshape(-1, 2, 2) * np.exp(-S[:, None, None] * total)
    fit = fit_response(W, noisy(truth, 2), order=2, structure=Structure(relative_degree=1, dead_time=kind))
    assert fit.dead_time is not None
    assert np.max(np.abs(fit.dead_time - total)) < 0.02
    assert len(fit.dead_times) == groups.shape[1]


def test_a_sampled_response_has_whole_periods() -> None:
    period = 0.01
    w = np.linspace(0.02, 3.1, 200) / period
    z = np.exp(1j * w * period)
    truth = 0.2 / ((z - 0.8) * (z**2 - 1.2 * z + 0.72)) * z**-5
    structure = Structure(relative_degree=1, dead_time="auto")
    fit = fit_response(w, noisy(truth, 3), period=period, order=3, structure=structure)
    (row,) = fit.dead_times
    assert row.deviation is None
    # the roll-off of three samples more is a dead time as well: zeros may take it, or not
    assert round(row.seconds / period) in (5, 6, 7)
    assert row.seconds / period == pytest.approx(round(row.seconds / period), abs=1e-12)
    assert fit.weighted < 1.5


def test_a_symmetric_response_has_one_dead_time() -> None:
    one = np.stack([1 / (S + 1), 2 / (S + 3), 2 / (S + 3), 1 / (S + 2)], axis=1).reshape(-1, 2, 2)
    data = noisy(one * np.exp(-0.2 * S)[:, None, None], 4)
    fit = fit_response(W, data, order=3, structure=Structure(relative_degree=1, symmetric=True, dead_time="auto"))
    assert np.array_equal(fit.residues, fit.residues.transpose(0, 2, 1))
    assert fit.dead_time is not None
    assert np.max(np.abs(fit.dead_time - 0.2)) < 0.02
    with pytest.raises(UsageError, match="one dead time"):
        fit_response(W, data, order=3, structure=Structure(symmetric=True, dead_time="auto-per-channel"))
