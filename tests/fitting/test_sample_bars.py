"""Error bars of fits to impulse responses."""

from __future__ import annotations

import numpy as np
import pytest

from realize.fitting import fit_samples
from realize.kernels.exponentials import powers, real_slopes

PERIOD = 0.01
Z = np.array([0.97 * np.exp(0.4j), 0.95 * np.exp(1.3j)])
LEFT = np.array([[1.0, 0.4 - 0.3j], [0.5 + 0.2j, -0.8]])
RIGHT = np.array([[1.0 + 0.5j, -0.7], [0.3j, 1.0]])
RESIDUES = LEFT[:, :, None] * RIGHT[:, None, :]


def samples(count: int = 400) -> np.ndarray:
    h: np.ndarray = 2 * np.einsum("kn,npm->kpm", powers(Z, 0, count), RESIDUES).real
    return h


def root_mean_square(values: list[float]) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


@pytest.mark.parametrize("first", [0, 1, 7])
def test_derivatives_by_poles(first: int) -> None:
    z = np.array([0.9, 0.7 * np.exp(0.5j), 0.7 * np.exp(-0.5j), -0.8])
    c = np.array([0.3, 0.1 + 0.2j, 0.1 - 0.2j, 0.05])
    step = 1e-6
    moves = np.array([[1, 0, 0, 0], [0, 1, 1, 0], [0, 1j, -1j, 0], [0, 0, 0, 1]]) * step
    slopes = real_slopes(z, c, first, 12)
    for column, move in zip(slopes.T, moves, strict=True):
        change = (powers(z + move, first, 12) - powers(z - move, first, 12)) @ c
        assert np.allclose(column, change.real / (2 * step), rtol=1e-8, atol=1e-9)


@pytest.mark.parametrize("unit", [1e-150, 1.0, 1e150])
@pytest.mark.parametrize("sampled", [True, False])
def test_one_real_pole_against_the_normal_equations(sampled: bool, unit: float) -> None:
    sigma, count = 1e-3, 80
    k = np.arange(count)
    h = 2 * 0.9**k + sigma * np.random.default_rng(1).normal(size=count)
    if sampled:
        h = np.concatenate([[0.5], h])
    fit = fit_samples(h * unit, PERIOD, sampled=sampled, order=1, deviation=sigma * unit)
    assert fit.bars is not None and fit.bars.basis == "information"
    r = float(fit.residues[0, 0, 0].real) / unit
    z = float(fit.poles[0].real) if sampled else float(np.exp(fit.poles[0].real * PERIOD))
    covariance = sigma**2 * np.linalg.inv(
        np.array(
            [
                [np.sum((r * k * z ** (k - 1.0)) ** 2), np.sum(r * k * z ** (2 * k - 1.0))],
                [np.sum(r * k * z ** (2 * k - 1.0)), np.sum(z ** (2.0 * k))],
            ]
        )
    )
    row = fit.pole_table[0]
    assert row.frequency_deviation == pytest.approx(np.sqrt(covariance[0, 0]) / z / PERIOD, rel=1e-6)
    assert row.damping_deviation == 0 and row.rank == 1
    assert row.strength == pytest.approx(r / np.sqrt(covariance[1, 1]), rel=1e-6)
    assert fit.residue_deviation[0, 0, 0] / unit == pytest.approx(np.sqrt(covariance[1, 1]), rel=1e-6)
    if sampled:
        gain, slope, direct = r / (1 - z) + 0.5, np.array([r / (1 - z) ** 2, 1 / (1 - z)]), sigma
    else:
        rate, direct = np.log(z) / PERIOD, 0.0
        gain, slope = -r / rate, np.array([r / rate**2 / (z * PERIOD), -1 / rate])
    assert fit.gain[0, 0] / unit == pytest.approx(gain, rel=1e-9)
    assert fit.gain_deviation[0, 0] / unit == pytest.approx(
        np.hypot(np.sqrt(slope @ covariance @ slope), direct), rel=1e-6
    )
    assert fit.direct_deviation[0, 0] / unit == pytest.approx(direct, rel=1e-12)
    last = np.array([r * k[-1] * z ** (k[-1] - 1.0), z ** k[-1]])
    assert fit.response_deviation[-1, 0, 0] / unit == pytest.approx(np.sqrt(last @ covariance @ last), rel=1e-6)
    assert np.allclose(fit.deviation / unit, sigma, rtol=1e-12)


@pytest.mark.parametrize("sampled", [True, False])
def test_errors_are_as_large_as_their_bars(sampled: bool) -> None:
    clean = samples()
    if sampled:
        clean = np.concatenate([np.ones((1, 2, 2)), clean])
    sigma = 0.01 * float(np.sqrt(np.mean(clean**2)))
    s = np.log(Z) / PERIOD
    weight = 1 / (1 - Z) if sampled else -1 / s
    gain = 2 * np.sum(RESIDUES * weight[:, None, None], axis=0).real + (1.0 if sampled else 0.0)
    poles, residues, gains, response = [], [], [], []
    for seed in range(60):
        h = clean + sigma * np.random.default_rng(seed).normal(size=clean.shape)
        fit = fit_samples(h, PERIOD, sampled=sampled, order=4, deviation=sigma if seed % 2 else None)
        assert [row.rank for row in fit.pole_table] == [1, 1]
        for row, true, residue in zip(fit.pole_table, s, RESIDUES, strict=True):
            poles.append((row.frequency - abs(true)) / row.frequency_deviation)
            poles.append((row.damping + true.real / abs(true)) / row.damping_deviation)
            residues.extend((np.abs(fit.residues[row.index] - residue) / fit.residue_deviation[row.index]).flat)
        gains.extend(((fit.gain - gain) / fit.gain_deviation).flat)
        response.extend(((fit.misfit + h - clean) / fit.response_deviation)[:100].flat)
    for values in (poles, residues, gains, response):
        assert 0.85 < root_mean_square(values) < 1.15


def test_differences_of_noise_make_the_bars_near_half_the_rate_larger() -> None:
    z = 0.97 * np.exp(2.9j)
    h = 2 * np.real(powers(np.array([z]), 0, 600)[:, 0])
    errors = []
    for seed in range(40):
        noise = np.diff(np.random.default_rng(seed).normal(size=601)) * 0.02
        fit = fit_samples(h + noise, 1.0, sampled=False, order=2)
        assert fit.bars is not None and not fit.bars.white and fit.bars.basis == "sandwich"
        assert fit.bars.growth == pytest.approx(np.sqrt(2), rel=0.1)
        row = fit.pole_table[0]
        errors.append((row.frequency - abs(np.log(z))) / row.frequency_deviation)
    assert 0.75 < root_mean_square(errors) < 1.25


def test_what_is_not_determined_has_no_bar() -> None:
    fit = fit_samples([1.0, 0.5, 0.25], 1.0, order=1)
    assert fit.bars is not None and fit.bars.level is None
    assert np.isinf(fit.pole_table[0].frequency_deviation) and np.isinf(fit.gain_deviation[0, 0])
    nothing = fit_samples(np.zeros((5, 2, 2)), 1.0)
    assert nothing.order == 0 and not np.any(nothing.gain) and not np.any(nothing.gain_deviation)
    assert fit_samples([3.0], 1.0).gain[0, 0] == 3


def test_a_channel_that_is_zero_stays_zero() -> None:
    h = samples(200)
    h[:, 1, 0] = 0
    fit = fit_samples(h + 0.0, PERIOD, sampled=False)
    assert fit.worst.value < 1e-12
    assert not np.any(fit.residues[:, 1, 0]) and not np.any(fit.gain_deviation[1, 0])
    assert np.all(np.isfinite(fit.residue_deviation))
