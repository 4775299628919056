"""Fitting methods against examples and theorems of the literature, and against a program of others."""

from __future__ import annotations

import json
import warnings
from pathlib import Path

import numpy as np
import pytest

from realize.fitting import fit_samples
from realize.kernels import barycentric, frequency_subspace, loewner, markov

PAPERS = Path(__file__).parents[3] / "shared" / "data" / "papers"


def test_ho_kalman_of_the_fibonacci_numbers() -> None:
    """In the setting of Ho & Kalman, Regelungstechnik 14, 1966: sum h_k z^-k = z/(z^2 - z - 1), order 2, exactly."""
    path = PAPERS / "hokalman_fibonacci.json"
    if not path.exists():
        pytest.skip("the shared data are absent")
    record = json.loads(path.read_text())
    h = np.array(record["markov"], dtype=float)[:, None, None]
    hankel = markov.decomposed(h, 5, 5, 4)
    assert hankel.values[2] < 1e-14 * hankel.values[0] < 1e-2 * hankel.values[1] * 100
    for poles in (markov.shifted_poles(hankel, 2), markov.shift_invariant_poles(hankel, 2)):
        assert np.sort(poles.real) == pytest.approx(sorted(record["expected"]["poles"]), rel=1e-12)
    a, b, c = markov.realized(hankel, 2)
    assert np.poly(a) == pytest.approx(record["expected"]["tf_den"], abs=1e-12)
    again = [(c @ np.linalg.matrix_power(a, k) @ b).item() for k in range(h.size)]
    assert again == pytest.approx(record["markov"], rel=1e-12)


def test_ho_kalman_has_the_degree_of_a_transfer_matrix_that_is_not_that_of_its_entries() -> None:
    """[[1/(z-a), 1/(z-a)], [1/(z-a), 1/(z-b)]]: McMillan degree 3, poles a twice and b (Gilbert 1963; from memory)."""
    a, b = 0.5, -0.25
    k = np.arange(12)
    h = np.array([[a**k, a**k], [a**k, b**k]]).transpose(2, 0, 1)
    hankel = markov.decomposed(h, 6, 6, 5)
    assert hankel.values[3] < 1e-14 * hankel.values[0] < 1e3 * hankel.values[2]
    poles = markov.shifted_poles(hankel, 3)
    assert np.sort(poles.real) == pytest.approx([b, a, a], abs=1e-7)


def test_eigensystem_realization_of_a_free_decay() -> None:
    """A damped oscillator sampled: exp(-zeta w T) exp(+-j w T sqrt(1 - zeta^2)) (Juang & Pappa 1985, principle)."""
    w, zeta, T = 2 * np.pi * 3.0, 0.01, 0.02
    t = T * np.arange(400)
    wd = w * np.sqrt(1 - zeta**2)
    h = np.exp(-zeta * w * t) * np.sin(wd * t) / wd
    fit = fit_samples(h, T, sampled=False)
    assert fit.order == 2
    assert fit.pole_table[0].frequency == pytest.approx(w, rel=1e-12)
    assert fit.pole_table[0].damping == pytest.approx(zeta, rel=1e-10)


def test_aaa_of_the_tangent() -> None:
    """tan has its poles at odd multiples of pi/2: Nakatsukasa, Sete & Trefethen 2018, section 3 uses tan(pi z/2).

    Along the imaginary axis tanh(pi s/2) stands for it: poles +-j(2 k + 1), real on real s.
    """
    x = np.linspace(0, 0.95, 200)
    H = np.tanh(np.pi * 1j * x / 2)[:, None]
    *_, last = barycentric.approximations(x, H, np.ones(H.shape), 13)
    assert last.error < 1e-12
    poles = barycentric.poles_of_barycentric(last)
    assert np.min(np.abs(poles - 1j)) < 1e-11
    assert np.min(np.abs(poles + 1j)) < 1e-11
    assert np.min(np.abs(poles - 3j)) < 1e-3
    s = np.array([0.2 + 0.1j, -0.3, 0.5j])
    assert np.max(np.abs(barycentric.evaluated(last, s)[:, 0] - np.tanh(np.pi * s / 2))) < 1e-11


def test_aaa_agrees_with_the_one_of_scipy() -> None:
    """On lines and their conjugates, two implementations approximate the same function to the same accuracy."""
    from scipy.interpolate import AAA

    x = np.geomspace(0.05, 20, 150)
    s = 1j * x
    H = np.exp(-0.1 * s) / (s**2 + 0.2 * s + 1) + 0.3 * np.sqrt(s + 1)
    ours = list(barycentric.approximations(x, H[:, None], np.ones((x.size, 1)), 15))[-1]
    points, values = np.concatenate([s, s.conj()]), np.concatenate([H, H.conj()])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # it stops at the degree that is asked for
        other = AAA(points, values, max_terms=16, rtol=1e-15, clean_up=False)
    theirs = float(np.max(np.abs(other(s) - H)))
    assert ours.degree == 15
    assert ours.error < 30 * theirs
    near = 1j * np.geomspace(0.06, 18, 77)
    exact = np.exp(-0.1 * near) / (near**2 + 0.2 * near + 1) + 0.3 * np.sqrt(near + 1)
    assert np.max(np.abs(barycentric.evaluated(ours, near)[:, 0] - exact)) < 100 * max(theirs, 1e-14)


@pytest.mark.parametrize("shape", [(1, 1), (2, 3), (3, 2)])
def test_loewner_recovers_the_degree_and_the_poles(shape: tuple[int, int]) -> None:
    """Mayo & Antoulas 2007: enough tangential samples: rank [L, M] is the degree + rank D, rank L the degree."""
    rng = np.random.default_rng(4)
    p, m = shape
    poles = np.array([-0.1 + 1j, -0.1 - 1j, -0.5, -0.3 + 4j, -0.3 - 4j])
    left, right = rng.normal(size=(5, p)) + 0j, rng.normal(size=(5, m)) + 0j
    for k in (0, 3):
        left[k] += 1j * rng.normal(size=p)
        left[k + 1], right[k + 1] = left[k].conj(), right[k].conj()
    D = rng.normal(size=(p, 1)) @ rng.normal(size=(1, m))

    def response(x: np.ndarray) -> np.ndarray:
        return np.einsum("kn,np,nm->kpm", 1 / (1j * x[:, None] - poles), left, right) + D

    mu, lam = np.linspace(0, 6, 9), np.linspace(0.35, 6.5, 9)
    a = rng.normal(size=(9, p)) + 1j * rng.normal(size=(9, p)) * (mu > 0)[:, None]
    b = rng.normal(size=(9, m)) + 1j * rng.normal(size=(9, m))
    v = np.einsum("kp,kpm->km", a, response(mu))
    w = np.einsum("kpm,km->kp", response(lam), b)
    found = loewner.pencil(1j * mu, a, v, 1j * lam, b, w, 1.0)
    assert found.values[6] < 1e-12 * found.values[0] < 1e-8 * found.values[5]
    own = np.linalg.svd(found.loewner, compute_uv=False)
    assert own[5] < 1e-12 * own[0] < 1e-8 * own[4]
    again = loewner.pencil_poles(found, 6, 1.0)
    assert max(np.min(np.abs(again - pole)) for pole in poles) < 1e-9


def test_subspace_needs_no_more_lines_than_unknowns_and_no_uniform_grid() -> None:
    """McKelvey, Akcay & Ljung 1996: exact after q + n lines anywhere (here random), q more than n shifts."""
    rng = np.random.default_rng(2)
    poles = np.array([-0.02 + 1j, -0.02 - 1j, -0.1 + 2.2j, -0.1 - 2.2j])
    residues = np.array([1 - 1j, 1 + 1j, 0.3j, -0.3j])
    x = np.sort(rng.uniform(0.3, 4, 10))
    H = ((1 / (1j * x[:, None] - poles)) @ residues)[:, None] + 0.1
    space = frequency_subspace.observable_space(x, H, np.ones(H.shape), 6, 1.0)
    assert space.values[4] < 1e-12 * space.values[0] < 1e-6 * space.values[3]
    again = frequency_subspace.subspace_poles(space, 4)
    assert max(np.min(np.abs(again - pole)) for pole in poles) < 1e-10
