"""Stated deviations against the errors made, on invented systems; ranks of residues; what the bars rest on."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from realize.fitting import Fit, Structure, fit_response
from realize.fitting.dead_time import widened

POLES = np.array([-0.05 + 2j, -0.15 + 5j])
W = np.linspace(0.05, 8, 240)


def modal(shape: tuple[int, int], seed: int, rank: int = 1) -> tuple[np.ndarray, np.ndarray]:
    """Return residues [2][p][m] of a rank, and the response with a direct term."""
    rng = np.random.default_rng(seed)
    left = rng.normal(size=(2, shape[0], rank)) + 0.5j * rng.normal(size=(2, shape[0], rank))
    right = rng.normal(size=(2, rank, shape[1])) + 0j
    R = left @ right * np.array([0.3, 0.8])[:, None, None]
    s = 1j * W
    H = np.einsum("kn,npm->kpm", 1 / (s[:, None] - POLES), R)
    H += np.einsum("kn,npm->kpm", 1 / (s[:, None] - POLES.conj()), R.conj())
    return R, H + 0.2


def errors_over_bars(fits: list[Fit]) -> np.ndarray:
    rows = []
    for fit in fits:
        for row, pole in zip(fit.pole_table, POLES, strict=True):
            zeta = -pole.real / abs(pole)
            rows.append((row.frequency - abs(pole)) / row.frequency_deviation)
            rows.append((row.damping - zeta) / row.damping_deviation)
    return np.array(rows)


def rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(np.abs(values) ** 2)))


def near_one(values: np.ndarray) -> bool:
    """Return whether the RMS of real numbers (complex ones count twice) is 1 within 3 of its deviations."""
    return abs(rms(values) - 1) < 3 / np.sqrt(2 * values.size * (2 if np.iscomplexobj(values) else 1))


@pytest.mark.parametrize("kind", ["given", "estimated", "proportional"])
@pytest.mark.parametrize("shape", [(1, 1), (2, 2)])
def test_errors_are_as_large_as_stated(complex_noise: Callable, shape: tuple[int, int], kind: str) -> None:
    """RMS of error over deviation of n intervals has the deviation 1/sqrt(2 n)."""
    fits, response, gain = [], [], []
    R, H = modal(shape, 3)
    size = 0.02 * (np.abs(H) if kind == "proportional" else np.full(H.shape, np.sqrt(np.mean(np.abs(H) ** 2))))
    for seed in range(24 if shape == (1, 1) else 6):
        data = H + size * complex_noise(H.shape, seed)
        fit = fit_response(W, data, order=4, deviation=size if kind == "given" else None)
        fits.append(fit)
        response.append((fit.misfit + data - H) / fit.response_deviation)
        exact = 0.2 - 2 * np.sum((R / POLES[:, None, None]).real, axis=0)
        gain.append((fit.gain - exact) / fit.gain_deviation)
    assert near_one(errors_over_bars(fits))
    # most lines lie between the modes and share the error of the direct term: one number for a channel and fit
    assert abs(rms(np.array(response)) - 1) < 3 / np.sqrt(2 * H[0].size * len(fits))
    assert near_one(np.array(gain))
    assert all(fit.bars.white and fit.bars.independent for fit in fits)
    assert all(row.rank == 1 for fit in fits for row in fit.pole_table)


def test_residues_and_shapes_are_as_far_off_as_stated(complex_noise: Callable) -> None:
    R, H = modal((3, 2), 5)
    size = np.full(H.shape, 0.02 * np.sqrt(np.mean(np.abs(H) ** 2)))
    residue, shapes = [], []
    for seed in range(6):
        fit = fit_response(W, H + size * complex_noise(H.shape, seed), order=4, deviation=size)
        for row, true in zip(fit.pole_table, R, strict=True):
            residue.append((fit.residues[row.index] - true) / fit.residue_deviation[row.index])
            top = int(np.argmax(row.output_shape == 1))
            column = int(np.argmax(row.input_shape == 1))
            exact = true[:, column] / true[top, column]
            keep = np.arange(3) != top
            shapes.append(((row.output_shape - exact) / np.maximum(row.output_shape_deviation, 1e-300))[keep])
            assert row.output_shape_deviation[top] == 0
    assert near_one(np.array(residue))
    assert near_one(np.concatenate(shapes))


def test_errors_of_neighbouring_lines_alike_enlarge_the_bars(complex_noise: Callable) -> None:
    """A running mean over three lines triples the variance of anything smooth."""
    _, H = modal((1, 1), 3)
    size = 0.02 * np.sqrt(np.mean(np.abs(H) ** 2))
    fits = []
    for seed in range(16):
        e = complex_noise((W.size + 2, 1, 1), seed)
        e = (e[2:] + e[1:-1] + e[:-2]) / np.sqrt(3)
        fits.append(fit_response(W, H + size * e, order=4, deviation=np.full(H.shape, size)))
    assert all(not fit.bars.white and fit.bars.basis == "sandwich" for fit in fits)
    assert all(1.4 < fit.bars.growth < 2.2 for fit in fits)
    assert near_one(errors_over_bars(fits))


def test_channels_that_err_together_enlarge_the_bars(complex_noise: Callable) -> None:
    _, H = modal((3, 1), 3)
    H = H[:, :1] * np.ones((1, 3, 1))
    size = 0.02 * np.sqrt(np.mean(np.abs(H) ** 2))
    fits = [
        fit_response(W, H + size * complex_noise((W.size, 1, 1), seed), order=4, deviation=np.full(H.shape, size))
        for seed in range(12)
    ]
    assert not any(fit.bars.independent for fit in fits)
    assert near_one(errors_over_bars(fits))


def test_a_misfit_beyond_the_deviations_given_enlarges_the_bars(complex_noise: Callable) -> None:
    _, H = modal((1, 1), 3)
    size = np.full(H.shape, 0.02)
    data = H + size * complex_noise(H.shape, 1)
    right, small = (fit_response(W, data, order=4, deviation=size * f) for f in (1.0, 0.25))
    assert not right.bars.enlarged
    assert small.bars.enlarged
    for one, two in zip(right.pole_table, small.pole_table, strict=True):
        assert two.damping_deviation == pytest.approx(one.damping_deviation, rel=0.1)


def test_ranks_are_told_from_noise(complex_noise: Callable) -> None:
    for rank in (1, 2, 3):
        _, H = modal((3, 3), 8, rank)
        fit = fit_response(W, H + 1e-3 * complex_noise(H.shape, rank), order=4)
        assert [row.rank for row in fit.pole_table] == [rank, rank]
        for row in fit.pole_table:
            d = np.linalg.svd(fit.residues[row.index], compute_uv=False)
            assert np.sum(d > 1e-12 * d[0]) == rank
        assert fit.weighted == pytest.approx(1, abs=0.1)


def test_ranks_do_not_depend_on_the_units_of_single_channels_signals(complex_noise: Callable) -> None:
    _, H = modal((2, 2), 8)
    H = H + 1e-3 * complex_noise(H.shape, 1)
    units = np.array([[1e6], [3e-9]]) * np.array([7.0, 1e-4])
    one, two = fit_response(W, H, order=4), fit_response(W, H * units, order=4)
    for a, b in zip(one.pole_table, two.pole_table, strict=True):
        assert a.rank == b.rank == 1
        assert b.damping_deviation == pytest.approx(a.damping_deviation, rel=1e-3)
    assert np.allclose(two.gain_deviation, one.gain_deviation * units, rtol=1e-3)


def test_exact_data_keep_their_rank_and_have_bars_of_rounding() -> None:
    _, H = modal((2, 2), 4)
    fit = fit_response(W, H)
    assert [row.rank for row in fit.pole_table] == [1, 1]
    assert fit.rms < 1e-11
    assert all(row.damping_deviation < 1e-8 for row in fit.pole_table)


def test_no_degrees_of_freedom_no_bars() -> None:
    w = np.array([1.0, 2.0, 3.0])
    fit = fit_response(w, 1 / (1j * w + 1) + 0.3j, order=2)
    assert fit.bars.level is None
    assert all(np.isinf(row.frequency_deviation) for row in fit.pole_table)
    assert np.all(np.isinf(fit.response_deviation))


@pytest.mark.parametrize("period", [1e-9, 0.25])
def test_sampled_data(complex_noise: Callable, period: float) -> None:
    """Deviations of ln(z)/period, of residues in z, and of the direct term at z = infinity."""
    pole = 0.95 * np.exp(0.6j)
    w = np.linspace(0.01, 3.1, 300) / period
    z = np.exp(1j * w * period)
    H = (0.1j / (z - pole) - 0.1j / (z - pole.conjugate()) + 0.5)[:, None, None]
    s = np.log(pole) / period
    frequency, damping, residue, direct = [], [], [], []
    for seed in range(24):
        fit = fit_response(w, H + 0.02 * complex_noise(H.shape, seed), order=2, period=period)
        row = fit.pole_table[0]
        frequency.append((row.frequency - abs(s)) / row.frequency_deviation)
        damping.append((row.damping + s.real / abs(s)) / row.damping_deviation)
        residue.append((fit.residues[0, 0, 0] - 0.1j) / fit.residue_deviation[0, 0, 0])
        direct.append((fit.direct[0, 0] - 0.5) / fit.direct_deviation[0, 0])
    for values in (frequency, damping, residue, direct):
        assert near_one(np.array(values))


def test_an_unneeded_mode_is_said_to_cancel(complex_noise: Callable) -> None:
    _, H = modal((1, 1), 3)
    fit = fit_response(W, H + 0.01 * complex_noise(H.shape, 2), order=6)
    strong = [row for row in fit.pole_table if not row.cancelling]
    assert {round(row.frequency) for row in strong} >= {2, 5}
    assert fit.order == 6
    weakest = min(fit.pole_table, key=lambda row: row.strength)
    assert weakest.strength < 10
    assert all(row.strength > 100 for row in fit.pole_table if round(row.frequency, 1) in (2.0, 5.0))


STRUCTURES = {
    "integrator": Structure(integrators=1),
    "fixed pole": Structure(fixed_poles=(POLES[0], POLES[0].conjugate())),
    "gain": Structure(steady_state_gain=np.array([[0.45]])),
    "relative degree": Structure(relative_degree=2),
    "fixed zero": Structure(fixed_zeros=(0.0,)),
}


@pytest.mark.parametrize("name", list(STRUCTURES))
def test_bars_of_fits_that_keep_a_structure(complex_noise: Callable, name: str) -> None:
    """The truth keeps the structure: one mode at POLES[1] beside what is fixed."""
    s = 1j * W[:, None, None]
    w = abs(POLES[1])
    section = s**2 - 2 * POLES[1].real * s + w**2
    fixed = s**2 - 2 * POLES[0].real * s + abs(POLES[0]) ** 2
    H = {
        "integrator": 0.3 / s + 2 / section + 0.1,
        "fixed pole": 0.5 / fixed + 2 * s / section,
        "gain": (0.25 + 0.02 * s) * w**2 / section + 0.2,
        "relative degree": 8 / section,
        "fixed zero": 2 * s / section,
    }[name]
    size = 0.02 * np.sqrt(np.mean(np.abs(H) ** 2))
    order = {"integrator": 3, "fixed pole": 4}.get(name, 2)
    errors, response, residues = [], [], []
    for seed in range(10):
        data = H + size * complex_noise(H.shape, seed)
        fit = fit_response(W, data, order=order, structure=STRUCTURES[name], deviation=np.full(H.shape, size))
        row = max(fit.pole_table, key=lambda row: row.frequency)
        errors.append((row.frequency - w) / row.frequency_deviation)
        errors.append((row.damping + POLES[1].real / w) / row.damping_deviation)
        response.append((fit.misfit + data - H) / fit.response_deviation)
        exact = {"relative degree": 8 / (2j * POLES[1].imag)}.get(name)
        if exact is not None:
            residues.append((fit.residues[row.index, 0, 0] - exact) / fit.residue_deviation[row.index, 0, 0])
        fixed_rows = [row for row in fit.pole_table if row.frequency < 4]
        assert all(row.frequency_deviation == 0 for row in fixed_rows)
        if name == "gain":
            assert fit.gain_deviation[0, 0] < 1e-12
    assert near_one(np.array(errors))
    assert abs(rms(np.array(response)) - 1) < 3 / np.sqrt(2 * 10)
    if residues:
        assert near_one(np.array(residues))


def test_bars_hold_the_error_of_a_dead_time_that_is_estimated(complex_noise: Callable) -> None:
    """A mode of 40 % damping: its damping and the dead time explain some of the same phase."""
    pole = 3 * (-0.4 + 1j * np.sqrt(1 - 0.16))
    s = 1j * W[:, None, None]
    H = 9 / (s**2 - 2 * pole.real * s + 9) * np.exp(-0.1 * s)
    size = 0.01 * np.sqrt(np.mean(np.abs(H) ** 2))
    errors, grown, response = [], [], []
    for seed in range(8):
        data = H + size * complex_noise(H.shape, seed)
        deviation = np.full(H.shape, size)
        fit = fit_response(W, data, order=2, deviation=deviation, structure=Structure(dead_time="auto"))
        known = fit_response(W, data * np.exp(0.1 * s), order=2, deviation=deviation)
        row = fit.pole_table[0]
        errors += [(row.frequency - 3) / row.frequency_deviation, (row.damping - 0.4) / row.damping_deviation]
        grown.append(row.damping_deviation / known.pole_table[0].damping_deviation)
        response.append((fit.misfit + data - H) / fit.response_deviation)
    assert near_one(np.array(errors))
    assert min(grown) > 1
    assert abs(rms(np.array(response)) - 1) < 3 / np.sqrt(2 * 8)


def test_what_a_dead_time_does_to_a_fit_is_added_in_squares(complex_noise: Callable) -> None:
    _, H = modal((1, 1), 3)
    one, two = (fit_response(W, H + 0.02 * complex_noise(H.shape, seed), order=4) for seed in (1, 2))
    wide = widened(one, two, np.full(H.shape, 3.0 + 4.0j))
    for row, there, after in zip(one.pole_table, two.pole_table, wide.pole_table, strict=True):
        difference = there.damping - row.damping
        assert after.damping_deviation == pytest.approx(np.hypot(row.damping_deviation, difference))
        assert after.frequency_deviation > row.frequency_deviation
        change = abs(two.residues[there.index, 0, 0] - one.residues[row.index, 0, 0])
        expected = np.hypot(one.residue_deviation[row.index, 0, 0], change)
        assert wide.residue_deviation[row.index, 0, 0] == pytest.approx(expected)
    assert np.allclose(wide.response_deviation, np.hypot(one.response_deviation, 5))
    assert np.allclose(wide.gain_deviation, np.hypot(one.gain_deviation, two.gain - one.gain))
