"""Fits made passive: passive in exact arithmetic, by the smallest change, checked against a general solver."""

from __future__ import annotations

import numpy as np
import pytest

from realize.errors import Refused, UsageError
from realize.fitting import Fit, Structure, fit_response
from realize.fitting.passive import made_passive, passive_with_room
from realize.kernels.least_distance import shortest
from realize.models import PoleResidue, TimeBase
from realize.verification.passivity import passivity

W = np.geomspace(0.05, 50, 120)
S = 1j * W


def claimed(fit: Fit, kind: str, period: float | None = None) -> float:
    time = TimeBase() if period is None else TimeBase(domain="sampled", period=period)
    model = PoleResidue(poles=fit.poles, residues=fit.residues, powers=fit.powers, direct=fit.direct, time=time)
    claim = passivity(model, kind)
    assert claim.basis == "proved"
    assert claim.value is not None
    assert claim.uncertainty is not None
    return claim.value + claim.uncertainty


def value(fit: Fit, w: np.ndarray) -> np.ndarray:
    return np.einsum("kn,npm->kpm", 1 / (1j * w[:, None] - fit.poles), fit.residues) + fit.direct


def test_the_shortest_vector_on_a_plane_and_in_a_corner() -> None:
    found = shortest(np.array([[3.0, 4.0]]), np.array([10.0]))
    assert found is not None
    assert found == pytest.approx([1.2, 1.6])
    found = shortest(np.array([[1.0, 0.0], [0.0, 1.0], [1.0, 1.0]]), np.array([1e-7, 2e-7, -1.0]))
    assert found is not None
    assert found == pytest.approx([1e-7, 2e-7])
    assert shortest(np.array([[1.0, 0.0], [-1.0, 0.0]]), np.array([1.0, 1.0])) is None
    assert shortest(np.array([[1.0, 0.0]]), np.array([-1.0])) == pytest.approx([0.0, 0.0])


def test_one_port_against_a_general_solver() -> None:
    """Re Z of d + r/(s + 1) + q/(s + 10) at a grid, by sequential quadratic programming: the same minimum."""
    from scipy.optimize import minimize

    Z = 0.05 + 1 / (S + 1) - 2.0 / (S + 10)
    fit = fit_response(W, Z, order=2, deviation=np.full(W.size, 0.01))
    assert claimed(fit, "positive-real") > 0
    better, change = made_passive(fit, W, "positive-real", period=None, symmetric=False, pinned=False)
    assert claimed(better, "positive-real") == 0
    assert change.after < 0 < change.before
    columns = np.stack([np.ones(W.size), 1 / (S + 1), 1 / (S + 10)], axis=1)
    grid = np.concatenate([[0.0], np.geomspace(1e-2, 1e4, 400)])
    real = np.stack([np.ones(grid.size), 1 / (1 + grid**2), 10 / (100 + grid**2)], axis=1)
    start = np.array([0.05, 1.0, -2.0])

    def cost(x: np.ndarray) -> float:
        return float(np.sum(np.abs(columns @ (x - start)) ** 2))

    rule = {"type": "ineq", "fun": lambda x: real @ x}
    found = minimize(cost, np.array([0.3, 1.0, -1.0]), constraints=[rule], method="SLSQP", options={"ftol": 1e-14})
    ours = float(np.sum(np.abs(value(better, W)[:, 0, 0] - Z) ** 2))
    assert ours == pytest.approx(found.fun, rel=2e-3)


def test_a_passive_fit_stays_as_it_is() -> None:
    fit = fit_response(W, 1 + 1 / (S + 1), order=1, deviation=np.full(W.size, 0.01))
    better, change = made_passive(fit, W, "positive-real", period=None, symmetric=False, pinned=False)
    assert better is fit
    assert change.rms == 0


@pytest.mark.parametrize("symmetric", [True, False])
@pytest.mark.parametrize("kind", ["positive-real", "bounded-real"])
def test_two_ports(kind: str, symmetric: bool) -> None:
    mode = 1 / (S**2 + 0.2 * S + 4)
    shape = np.array([[1.0, -0.7], [-0.7, 0.6]])
    data = (0.4 * S * mode)[:, None, None] * shape + 0.02 * np.eye(2) - (0.1 / (S + 3))[:, None, None] * shape
    if kind == "bounded-real":
        data = 0.6 * np.eye(2) + 0.25 * data * np.array([[1.0, 1.1], [1.1, -1.0]])
    fit = fit_response(W, data, order=3, deviation=np.full(data.shape, 0.01), structure=Structure(symmetric=symmetric))
    assert claimed(fit, kind) > 0
    better, change = made_passive(fit, W, kind, period=None, symmetric=symmetric, pinned=False)
    assert claimed(better, kind) == 0
    assert change.rms < 0.3
    assert np.max(np.abs(better.misfit - (value(better, W) - data))) < 1e-9
    if symmetric:
        assert np.array_equal(better.residues, better.residues.transpose(0, 2, 1))


def test_with_an_integrator_and_with_a_pinned_gain() -> None:
    Z = 2 / S + 0.01 + 0.5 / (S + 1) - 1.5 / (S + 10)
    fit = fit_response(W, Z, order=3, deviation=0.01 * np.abs(Z), structure=Structure(integrators=1))
    better, _ = made_passive(fit, W, "positive-real", period=None, symmetric=False, pinned=False)
    assert claimed(better, "positive-real") == 0
    assert np.sum(better.poles == 0) == 1
    flat = 0.05 + 1 / (S + 1) - 2.0 / (S + 10)
    gain = np.array([[0.9]])
    fit = fit_response(W, flat, order=2, deviation=np.full(W.size, 0.01), structure=Structure(steady_state_gain=gain))
    better, _ = made_passive(fit, W, "positive-real", period=None, symmetric=False, pinned=True)
    assert claimed(better, "positive-real") == 0
    assert value(better, np.zeros(1))[0, 0, 0] == pytest.approx(0.9, rel=1e-13)


def test_without_feed_through_the_roll_off_is_passive_too() -> None:
    """r/(s + 1) + q/(s + 10): -(sum of r p) has to be positive, far above all lines."""
    Z = 1 / (S + 1) - 0.3 / (S + 10)
    structure = Structure(relative_degree=1)
    fit = fit_response(W, Z, order=2, deviation=np.full(W.size, 0.01), structure=structure)
    assert claimed(fit, "positive-real") > 0
    better, _ = made_passive(fit, W, "positive-real", period=None, symmetric=False, pinned=False)
    assert claimed(better, "positive-real") == 0
    assert not np.any(better.direct)


@pytest.mark.parametrize("kind", ["positive-real", "bounded-real"])
def test_sampled(kind: str) -> None:
    period = 0.1
    w = np.linspace(0.01, 0.98, 100) * np.pi / period
    z = np.exp(1j * w * period)
    data = (0.05 + 0.5 / (z - 0.6) - 0.4 / (z + 0.3)) * (1.2 if kind == "bounded-real" else 1.0)
    fit = fit_response(w, data, order=2, period=period, deviation=np.full(w.size, 0.01))
    assert claimed(fit, kind, period) > 0
    better, _ = made_passive(fit, w, kind, period=period, symmetric=False, pinned=False)
    assert claimed(better, kind, period) == 0


def test_poles_outside_the_band_spare_the_response() -> None:
    """A reflection that is above 1 only outside of the lines."""
    w = np.linspace(8, 12, 80)
    s = 1j * w
    data = 0.9 * np.exp(-0.6j * (w - 10)) * (1 - 0.5 / (s + 0.5 - 10j))
    fit = fit_response(w, data, order=3, deviation=np.full(w.size, 0.01))
    # an integrator stands in below the band, and the reflection is far above 1 there
    assert claimed(fit, "bounded-real") > 10
    better, change, added = passive_with_room(fit, w, "bounded-real", period=None, symmetric=False, pinned=False)
    assert claimed(better, "bounded-real") == 0
    assert added in (2, 4)
    assert better.rms < 1.2 * fit.rms
    assert change.rms < 1.2 * fit.rms
    assert better.order == fit.order + added == better.poles.size == len(better.powers)


def test_what_cannot_be_made_passive() -> None:
    options = {"period": None, "symmetric": False, "pinned": False}
    fit = fit_response(W, 1 / S, order=1, structure=Structure(integrators=1))
    with pytest.raises(UsageError, match="integrators"):
        made_passive(fit, W, "bounded-real", **options)
    fit = fit_response(W, 1 / (S * S + S + 1) / (S + 3), order=3, structure=Structure(relative_degree=3))
    with pytest.raises(UsageError, match="relative degree above 1"):
        made_passive(fit, W, "positive-real", **options)
    fit = fit_response(W, 3 / (S + 1), order=1, structure=Structure(steady_state_gain=np.array([[3.0]])))
    with pytest.raises(Refused, match="no bounded-real model"):
        made_passive(fit, W, "bounded-real", period=None, symmetric=False, pinned=True)
    two = np.stack([1 / (S + 1), 0.1 / (S + 2), 0.2 / (S + 2), 1 / (S + 3)], axis=1).reshape(-1, 2, 2)
    fit = fit_response(W, two, order=3, structure=Structure(relative_degree=1))
    with pytest.raises(UsageError, match="symmetric"):
        made_passive(fit, W, "positive-real", **options)
    wide = fit_response(W, two[:, :1], order=3)
    with pytest.raises(UsageError, match="square"):
        made_passive(wide, W, "positive-real", **options)


@pytest.mark.parametrize("constant", [0.0, 2.0, -1.0])
def test_constants_and_nothing(constant: float) -> None:
    fit = fit_response(W, np.full((W.size, 1, 1), constant + 0j), order=0)
    better, _ = made_passive(fit, W, "positive-real", period=None, symmetric=False, pinned=False)
    assert claimed(better, "positive-real") == 0
    # the nearest resistance that is not negative
    assert better.direct[0, 0] == pytest.approx(max(constant, 0.0), abs=1e-6)
