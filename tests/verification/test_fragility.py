"""Fragility of descriptors: factored at each of a few frequencies, by one QZ decomposition for many."""

from __future__ import annotations

import numpy as np

from realize.models import StateSpace
from realize.verification.fragility import FACTORED, SCHUR_FROM, fragility_at


def test_both_ways_through_a_descriptor_agree() -> None:
    rng = np.random.default_rng(3)
    n = SCHUR_FROM + 4
    A = np.diag(-np.geomspace(0.1, 100.0, n)) + 0.01 * rng.standard_normal((n, n))
    E = np.eye(n) + 0.1 * rng.standard_normal((n, n)) / np.sqrt(n)
    E[:, -1] = E[-1] = 0.0
    model = StateSpace(A=A, B=rng.standard_normal((n, 2)), C=rng.standard_normal((2, n)), E=E)
    few = np.geomspace(0.01, 1e3, 5)
    many = np.concatenate([few, np.geomspace(0.02, 500.0, FACTORED)])
    assert few.size <= FACTORED < many.size
    factored, decomposed = fragility_at(model, few), fragility_at(model, many)[: few.size]
    # each is a sum of moduli: nothing cancels, and both bases are well conditioned
    assert np.all(factored > 1e-17) and np.allclose(factored, decomposed, rtol=1e-8)
    pole = StateSpace(A=np.diag(np.r_[0.0, -np.ones(n)]), B=np.ones((n + 1, 1)), C=np.ones((1, n + 1)), E=np.eye(n + 1))
    assert not np.isfinite(fragility_at(pole.with_(E=2 * np.eye(n + 1)), np.array([0.0]))[0])
