"""Responses of sampled systems: z = exp(jwT)."""

from __future__ import annotations

import numpy as np
import pytest

from realize.fitting import fit_response
from realize.fitting.sampled import mapped_back

POLES = np.array([0.9, 0.7 * np.exp(0.5j), 0.7 * np.exp(-0.5j), -0.8])
RESIDUES = np.array([0.3, 0.1 + 0.2j, 0.1 - 0.2j, 0.05])


@pytest.mark.parametrize("period", [1e-9, 0.1, 1.0, 1e6])
@pytest.mark.parametrize("direct", [0.2, 0.0])
@pytest.mark.parametrize("last", [1.0, 0.8])
def test_poles_residues_and_direct_term(period: float, direct: float, last: float) -> None:
    w = np.linspace(0, last * np.pi / period, 150)
    z = np.exp(1j * w * period)
    H = (1 / (z[:, None] - POLES)) @ RESIDUES + direct
    fit = fit_response(w, H, period=period, direct="auto" if direct == 0 else True)
    assert fit.order == 4
    assert fit.rms < 1e-11
    for pole, residue in zip(POLES, RESIDUES, strict=True):
        j = int(np.argmin(np.abs(fit.poles - pole)))
        assert abs(fit.poles[j] - pole) < 1e-9
        assert abs(fit.residues[j, 0, 0] - residue) < 1e-8
    assert fit.direct[0, 0] == (0 if direct == 0 else pytest.approx(0.2))
    assert any("z = -1" in text for text in fit.cautions) == (last == 1.0)
    slow = [row for row in fit.pole_table if not row.pair and fit.poles[row.index].real > 0]
    assert slow[0].frequency == pytest.approx(-np.log(0.9) / period)


def test_noisy_poles_stay_inside_the_circle() -> None:
    w = np.linspace(0.01, np.pi * 0.99, 200)
    rng = np.random.default_rng(1)
    z = np.exp(1j * w)
    pole = 0.9999 * np.exp(1j)
    H = 1 / (z - pole) + 1 / (z - pole.conjugate()) + 1 / (z - 1.00001)
    fit = fit_response(w, H * (1 + 0.03 * rng.normal(size=200)), period=1.0, order=5)
    assert np.all(np.abs(fit.poles) < 1)
    assert np.all(np.isfinite(fit.residues))


def test_the_map_back_is_exact_at_any_point() -> None:
    poles = np.array([-0.3 + 2j, -0.3 - 2j, -1e-17])
    residues = np.array([[1 + 1j], [1 - 1j], [0.5]])
    direct = np.array([0.7])
    image, scaled, constant = mapped_back(poles, residues, direct, 4.0)
    assert np.all(np.abs(image) < 1)
    z = np.exp(1j * np.linspace(0.1, 3, 7))
    s = 4 * (z - 1) / (z + 1)
    one = (1 / (s[:, None] - poles)) @ residues + direct
    two = (1 / (z[:, None] - image)) @ scaled + constant
    assert np.max(np.abs(one - two)) < 1e-13


def test_only_the_last_line_is_no_data() -> None:
    from realize.errors import InputError

    with pytest.raises(InputError, match="half the sampling rate"):
        fit_response([np.pi], [1.0], period=1.0)
