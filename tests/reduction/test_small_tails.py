"""Tails far below the first Hankel singular value: the error, exactly, is never above the bound."""

from __future__ import annotations

import numpy as np
import pytest

import realize
from realize.models import StateSpace
from realize.reduction import reduce_states
from realize.verification.difference import linf_error


def ladder(n):
    """n resistors and capacitors in a row, voltage in and voltage of the last capacitor out."""
    A = -2 * np.eye(n) + np.eye(n, k=1) + np.eye(n, k=-1)
    A[-1, -1] = -1
    B, C = np.zeros((n, 1)), np.zeros((1, n))
    B[0], C[0, -1] = 1, 1
    return A, B, C


def companion(seed, n=12):
    rng = np.random.default_rng(seed)
    poles = -rng.uniform(0.5, 3, n)
    if seed % 2:
        half = -rng.uniform(0.05, 1, n // 2) + 1j * rng.uniform(0.2, 4, n // 2)
        poles = np.concatenate([half, half.conj()])
    A = np.vstack([-np.poly(poles).real[1:], np.eye(n)[:-1]])
    B = np.zeros((n, 1))
    B[0] = 1
    return A, B, rng.standard_normal((1, n))


@pytest.mark.parametrize(
    ("A", "B", "C"), [ladder(10), ladder(24), *(companion(seed) for seed in range(12)), companion(24), companion(46)]
)
def test_error_never_above_the_bound(A, B, C):
    D = np.zeros((1, 1))
    n = A.shape[0]
    source = StateSpace(A=A, B=B, C=C, D=D)
    for order in {2, n // 2, n - 4, n - 1, n}:
        small = reduce_states(A, B, C, D, sampled=False, order=order)
        error = linf_error(source, StateSpace(A=small.A, B=small.B, C=small.C, D=small.D))
        assert error.basis == "proved"
        assert error.value <= small.bound
        # the part that is no theorem stays a matter of rounding
        assert small.rounding <= 1e-6 * small.hankel_singular_values[0]
        assert small.order == order or (small.order < order and any("rounding" in note for note in small.notes))


def test_receipt_of_a_ladder_says_why_the_order_is_smaller():
    A, B, C = ladder(24)
    found = realize.reduce(StateSpace(A=A, B=B, C=C, D=np.zeros((1, 1))), order=23)
    claims = {claim.name: claim for claim in found.receipt.claims}
    assert found.model.order < 23 and any("rounding" in caution for caution in found.receipt.cautions)
    assert claims["reduction-error"].value <= claims["reduction-bound"].value


def test_progress_is_told():
    from realize.verification.views import telling

    said = []
    A, B, C = ladder(5)
    with telling(said.append):
        reduce_states(A, B, C, np.zeros((1, 1)), sampled=False, order=2)
    assert any("Schur form" in line for line in said) and all("5 states" in line for line in said)
