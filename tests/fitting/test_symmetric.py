"""Reciprocal responses: symmetric to the last bit, and the same minimum as of both channels together."""

from __future__ import annotations

import numpy as np
import pytest

from realize.errors import UsageError
from realize.fitting import Structure, fit_response

W = np.geomspace(0.1, 30, 150)
S = 1j * W


def measured(seed: int) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    one = 1 / (S**2 + 0.2 * S + 4)
    truth = np.stack([one + 1 / (S + 1), -0.4 * one, -0.4 * one, one + 2 / (S + 9)], axis=1).reshape(-1, 2, 2)
    deviation = 0.01 * np.abs(truth) * np.array([[1.0, 3.0], [0.5, 1.0]])
    noise = (rng.normal(size=truth.shape) + 1j * rng.normal(size=truth.shape)) / np.sqrt(2)
    return truth + deviation * noise, deviation


def test_symmetric_to_the_last_bit_and_no_better_symmetric_fit() -> None:
    data, deviation = measured(0)
    fit = fit_response(W, data, deviation=deviation, order=4, structure=Structure(symmetric=True))
    assert np.array_equal(fit.residues, fit.residues.transpose(0, 2, 1))
    assert np.array_equal(fit.direct, fit.direct.T)
    free = fit_response(W, data, deviation=deviation, order=4)
    cost = np.sum(np.abs(fit.misfit / deviation) ** 2)
    least = np.sum(np.abs(free.misfit / deviation) ** 2)
    # five equations more: the cost rises by about as much
    assert least <= cost < least + 20
    # no symmetric change of the residues lowers the cost
    swap = np.array([[0.0, 1.0], [1.0, 0.0]])
    for pole in fit.poles[fit.poles.imag >= 0]:
        one, other = 1 / (S - pole), 1 / (S - pole.conjugate())
        for shape in [one + other, 1j * (one - other)] if pole.imag else [one]:
            change = swap * shape[:, None, None]
            slope = np.sum((change.conj() * fit.misfit / deviation**2).real)
            assert abs(slope) < 1e-9 * np.sqrt(np.sum(np.abs(change / deviation) ** 2) * cost)


def test_a_deviation_of_zero_leaves_the_other_channel_of_the_pair() -> None:
    data, deviation = measured(1)
    deviation[:, 0, 1] = 0.0
    fit = fit_response(W, data, deviation=deviation, order=4, structure=Structure(symmetric=True))
    assert np.array_equal(fit.residues, fit.residues.transpose(0, 2, 1))
    assert fit.rms < 0.02


def test_with_relative_degree_and_steady_state_gain() -> None:
    data, deviation = measured(2)
    gain = np.array([[1.25, -0.1], [-0.1, 0.4722]])
    structure = Structure(symmetric=True, relative_degree=1, steady_state_gain=gain)
    fit = fit_response(W, data, deviation=deviation, order=4, structure=structure)
    value = np.sum(fit.residues / -fit.poles[:, None, None], axis=0).real
    assert np.max(np.abs(value - gain)) < 1e-13
    with pytest.raises(UsageError, match="not symmetric"):
        fit_response(
            W,
            data,
            structure=Structure(symmetric=True, steady_state_gain=np.array([[1.0, 2.0], [3.0, 4.0]])),
        )
