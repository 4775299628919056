"""The bases that a reduction hands to those who look at its errors."""

from __future__ import annotations

import numpy as np
import pytest

import realize
from realize.kernels.schur_response import SchurResponse
from realize.models import StateSpace, TimeBase
from realize.reduction import reduce_states
from realize.steps.reduce import with_bases
from realize.steps.reduction_loop import weights_of


def plant(n: int, sampled: bool = False, unstable: bool = False, shape: tuple[int, int] = (2, 2)) -> StateSpace:
    """Return independent entries, slowest pole at -0.1 (0.95 sampled), in units that differ."""
    rng = np.random.default_rng(n)
    A = rng.standard_normal((n, n)) / np.sqrt(n)
    A -= (np.linalg.eigvals(A).real.max() + 0.1) * np.eye(n)
    if unstable:
        A += 0.3 * np.eye(n)
    if sampled:
        A = 0.95 / np.abs(np.linalg.eigvals(A)).max() * A
    units = np.ldexp(1.0, rng.integers(-8, 9, n))
    B, C = rng.standard_normal((n, shape[1])), rng.standard_normal((shape[0], n))
    base = TimeBase("sampled", 0.1) if sampled else TimeBase("continuous")
    return StateSpace(
        A=64 * (units[:, None] * A / units) if not sampled else units[:, None] * A / units,
        B=8 * units[:, None] * B,
        C=C / units,
        time=base,
    )


@pytest.mark.parametrize(
    ("n", "options"),
    [
        (150, {}),
        (150, {"sampled": True}),
        (150, {"unstable": True}),
        (150, {"shape": (1, 3)}),
        (600, {"shape": (2, 1)}),
        (600, {"shape": (1, 2), "sampled": True}),
    ],
)
def test_the_response_by_the_basis_is_that_of_the_model(n, options):
    model = plant(n, **options)
    found = reduce_states(
        model.A, model.B, model.C, model.D, sampled=model.time.sampled, order=20, method="balanced-truncation"
    )
    basis = found.basis()
    assert basis is not None
    made = SchurResponse.of_basis(model.A, model.B, model.C, basis)
    assert made is not None
    w = np.geomspace(1e-2, 30.0, 7)
    points = model.time.points(w)
    exact = np.array([model.C @ np.linalg.solve(s * np.eye(n) - model.A, model.B) for s in points])
    assert np.abs(made.values(points) - exact).max() <= 1e-11 * np.abs(exact).max()


def test_models_handed_to_the_claims_are_copies_and_agree_with_their_originals():
    model = plant(150)
    weights = weights_of(model, [2.0, 0.3], [0.7, 5.0])
    weighted = weights.applied(model)
    found = reduce_states(weighted.A, weighted.B, weighted.C, weighted.D, sampled=False, order=10)
    source, plain, other = with_bases(model, model, weighted, found, weights)
    assert source is plain and plain is not model and other is not weighted
    assert all("large response" in copy.__dict__["_memory"] for copy in (plain, other))
    assert model.__dict__.get("_memory", {}).get("large response") is None
    w = np.geomspace(0.1, 100, 5)
    for copy, original in ((plain, model), (other, weighted)):
        one, two = (part.rational_part(1j * w) for part in (copy, original))
        assert np.abs(one - two).max() <= 1e-11 * np.abs(two).max()


def test_a_small_model_is_left_as_it_is():
    model = StateSpace(A=[[-1.0, 0], [0, -2]], B=[[1.0], [1]], C=[[1.0, 1]])
    found = reduce_states(model.A, model.B, model.C, model.D, sampled=False, order=1)
    assert with_bases(model, model, model, found, weights_of(model, None, None)) == (model, model, model)


@pytest.mark.parametrize("options", [{}, {"sampled": True}, {"unstable": True}])
def test_the_error_of_the_receipt_is_the_true_one(options):
    model = plant(140, **options)
    made = realize.reduce(model, order=40 if options.get("unstable") else 8)
    claims = {claim.name: claim for claim in made.receipt.claims}
    error = claims["reduction-error"]
    top = np.pi / model.time.seconds if model.time.sampled else 1e4
    w = np.concatenate([[0.0], np.geomspace(1e-3, top, 1500)])
    points = model.time.points(w)
    values = [
        np.linalg.norm(
            model.C @ np.linalg.solve(s * np.eye(140) - model.A, model.B)
            - made.model.C @ np.linalg.solve(s * np.eye(made.model.order) - made.model.A, made.model.B),
            2,
        )
        for s in points
    ]
    assert error.value >= 0.99 * max(values)
    assert error.value + error.uncertainty >= max(values)
    assert claims["reduction-bound"].value >= error.value
