"""Error bars against formulas in closed form and against scipy.stats.

S. M. Kay, Fundamentals of Statistical Signal Processing: Estimation Theory, 1993, section 3.7: the bound is the inverse
of the Fisher information (from memory); for one real pole every sum has a closed form on a dense grid.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.special
import scipy.stats

from realize.files import read
from realize.fitting import fit_response
from realize.fitting.solution import solved
from realize.kernels.information import channel_factor, channel_slopes

FOLDER = Path(__file__).resolve().parents[3] / "shared" / "data" / "measured"


def test_the_bound_of_one_real_pole_in_closed_form() -> None:
    """G = r/(s + a), lines at spacing d over the whole axis, noise of mean square q at each.

    Sums become integrals: sum |1/(jw + a)|^2 = pi/(2 a d), sum |1/(jw + a)^2|^2 = pi/(4 a^3 d), and the real part of
    the cross sum is pi/(4 a^2 d). The information of (pole, r) is 2/(q d) times [[r^2 pi/(4 a^3), r pi/(4 a^2)],
    [r pi/(4 a^2), pi/(2 a)]], whose inverse has the pole's variance q d 4 a^3/(pi r^2).
    """
    a, r, q, d = 2.0, 3.0, 1e-4, 0.01
    w = d * (np.arange(400_000) + 0.5)
    slopes = channel_slopes(1j * w, np.array([-a + 0j]), np.array([r + 0j]), False, np.inf)
    factor = channel_factor(slopes, np.full(w.size, q**-0.5), np.zeros(w.size, complex), w == 0)
    covariance = np.linalg.inv(2 * factor.triangle.T @ factor.triangle)
    assert covariance[0, 0] == pytest.approx(q * d * 4 * a**3 / (np.pi * r**2), rel=1e-3)
    assert covariance[1, 1] == pytest.approx(q * d * 2 * a / np.pi, rel=1e-3)


def test_the_bound_of_a_lightly_damped_mode_in_closed_form() -> None:
    """One resonance r/(s - p) far from its mirror image: the integrals over w of a Lorentzian.

    Information of (Re p, Im p) with a free complex residue: 2/q |r|^2 (I2 - |I12|^2/I1), I1 = pi/(alpha d),
    I2 = pi/(2 alpha^3 d), I12 = pi/(2 alpha^2 d): both variances are q d 2 alpha^3/(pi |r|^2).
    """
    alpha, centre, r, q, d = 1.0, 4000.0, 1.5 - 0.5j, 1e-4, 0.05
    w = np.arange(3700.0, 4300.0, d)
    poles = np.array([-alpha + 1j * centre, -alpha - 1j * centre])
    size = np.sqrt(q)
    H = r / (1j * w - poles[0]) + np.conj(r) / (1j * w - poles[1])
    rng = np.random.default_rng(1)
    noise = size * (rng.normal(size=w.size) + 1j * rng.normal(size=w.size)) / np.sqrt(2)
    fit = fit_response(w, H + noise, order=2, deviation=np.full(w.size, size))
    expected = np.sqrt(q * d * 2 * alpha**3 / (np.pi * abs(r) ** 2))
    row = fit.pole_table[0]
    assert row.frequency_deviation == pytest.approx(expected, rel=0.02)
    assert row.damping_deviation * centre == pytest.approx(expected, rel=0.02)
    # alone, the residue of one mode has the variance q d 2 alpha/pi with the pole known, twice that with it fitted
    assert fit.residue_deviation[0, 0, 0] == pytest.approx(np.sqrt(2 * q * d * alpha / np.pi), rel=0.02)


@pytest.mark.parametrize("freedom", [2, 8, 18, 30])
@pytest.mark.parametrize("chance", [1e-3, 5e-4, 1e-5])
def test_the_quantiles_of_chi_square(freedom: int, chance: float) -> None:
    assert scipy.special.chdtri(freedom, chance) == pytest.approx(scipy.stats.chi2.isf(chance, freedom), rel=1e-9)


def test_the_distance_of_residues_from_rank_one_is_chi_square() -> None:
    """2 x 2, one mode: two degrees of freedom; 200 distances against scipy.stats by the test of Kolmogorov, Smirnov."""
    from realize.fitting.problem import Problem
    from realize.kernels.low_rank_residues import nearest_in_metric, shape_of

    pole = -0.05 + 1j
    w = np.linspace(0.3, 2, 120)
    R = np.outer([1.0, 0.5], [1.0, -0.7]) * 0.1j
    H = R / (1j * w - pole)[:, None, None] + R.conj() / (1j * w - pole.conjugate())[:, None, None]
    rng = np.random.default_rng(3)
    distances = []
    for _ in range(200):
        noise = 0.02 * (rng.normal(size=H.shape) + 1j * rng.normal(size=H.shape)) / np.sqrt(2)
        problem = Problem(1j * w, (H + noise).reshape(-1, 4), np.full((120, 4), 50.0), True, False, False, np.inf)
        poles, _ = problem.polished(np.array([pole, pole.conjugate()]), 10, 1e-6)
        estimate = solved(problem, poles, np.zeros((4, 1), dtype=int), 1.0)
        metric = estimate.covariance.residue_metric(0, True)
        assert metric is not None
        residue = estimate.residues[0].reshape(2, 2)
        distances.append(nearest_in_metric(residue, metric, shape_of(residue, 1, 0, True), 20)[1])
    assert scipy.stats.kstest(distances, scipy.stats.chi2(2).cdf).pvalue > 1e-3


@pytest.mark.skipif(not FOLDER.is_dir(), reason=f"measured data are not at {FOLDER}")
def test_a_measured_microwave_resonator_with_its_bar() -> None:
    """A. Gregory, National Physical Laboratory Report MAT 58 (2021): loaded Q 7454, 3.987848 GHz."""
    data = read(FOLDER / "NPL_MAT58_Figure6b.txt", columns=["frequency_ghz", "real", "imaginary"])
    fit = fit_response(data.radians, data.response)
    row = max((row for row in fit.pole_table if row.pair), key=lambda row: row.dominance)
    assert fit.bars is not None
    hertz, spread = row.frequency / (2 * np.pi), row.frequency_deviation / (2 * np.pi)
    assert 10 < spread < 2e4
    # the report's own digits: half a unit of the last place
    assert abs(hertz - 3.987848e9) < 500 + 4 * spread
    quality = 1 / (2 * row.damping)
    assert abs(quality - 7454) < 0.5 + 4 * quality * row.damping_deviation / row.damping + 40
