"""Singular perturbation approximation: the weak balanced states are set to their steady state instead of cut."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from realize.kernels.residualisation import residual_solution, residualised
from realize.reduction.balanced_truncation import balanced, hankel_cuts
from realize.reduction.plan import Plan, Request
from realize.reduction.prepare import Prepared
from realize.reduction.registry import Method, register
from realize.reduction.result import Projected
from realize.reduction.rounding import Errors, balanced_errors, cut_rounding, effect

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)


@dataclass(frozen=True)
class _Whole:
    """The balanced minimal part, with the errors of its entries."""

    part: Projected
    errors: tuple[Errors, Errors]


def _whole(prepared: Prepared) -> _Whole:
    part = balanced(prepared, prepared.available)
    return _Whole(part, balanced_errors(prepared, part, prepared.available))


def project(prepared: Prepared, part: Projected, order: int) -> Projected:
    """Keep the first `order` balanced states and set the others to their steady state.

    A11 - A12 A22^-1 A21 and so on; sampled A11 + A12 (I - A22)^-1 A21. The balanced model comes from the factors of the
    Gramians without a projection, so that the condition of the balancing transform does not enter.
    """
    small = residualised(part.A, part.B, part.C, part.D_change, order, sampled=prepared.sampled)
    return Projected(*small, part.W[:, :order], part.V[:, :order])


def rounding_term(prepared: Prepared, whole: _Whole, count: int) -> float:
    """Return what rounding may add to the bound: errors of all entries, carried through the steady state."""
    cut = cut_rounding(prepared, count)
    part = whole.part
    if part.A.shape[0] == 0:
        return prepared.in_gain(cut)
    X, Y = (np.abs(m) for m in residual_solution(part.A, part.B, count, sampled=prepared.sampled))
    dual = residual_solution(part.A.T, part.C.T, count, sampled=prepared.sampled)
    left, out = np.abs(dual[0]).T, np.abs(dual[1]).T
    small = Projected(
        *residualised(part.A, part.B, part.C, np.zeros(part.D_change.shape), count, sampled=prepared.sampled),
        part.W,
        part.V,
    )

    def carried(errors: Errors) -> float:
        change_a, change_b, change_c = errors
        inner, above, below = change_a[count:, count:], change_a[:count, count:], change_a[count:, :count]
        rows, columns, lengths = change_b[count:], change_c[count:], np.linalg.norm(Y, axis=1)
        reach = np.linalg.norm(out, axis=0)
        own = (
            change_a[:count, :count] + above @ X + left @ below + left @ inner @ X,
            change_b[:count] + above @ lengths + left @ rows + left @ inner @ lengths,
            change_c[:count] + columns @ X + reach @ (below + inner @ X),
        )
        direct = float(columns @ lengths + reach @ (rows + inner @ lengths))
        return effect(small, own, sampled=prepared.sampled) + direct

    products, values = whole.errors
    solving = products[0].copy()
    # the solution of the inner equations is rounded too: a backward error of eps times the size of A22
    solving[count:, count:] += EPS * np.abs(part.A[count:, count:])
    doubt = min(carried(values), prepared.factors.response_error)
    return prepared.in_gain(cut + carried((solving, *products[1:])) + doubt)


def plan(prepared: Prepared, request: Request) -> Plan:
    """Return the orders of the singular perturbation approximation."""

    @lru_cache(maxsize=1)
    def whole() -> _Whole:
        return _whole(prepared)

    count = prepared.available
    return Plan(
        available=count,
        allowed=hankel_cuts(prepared),
        tails=prepared.tails[: count + 1],
        project=lambda order: project(prepared, whole().part, order),
        rounding=lambda order, part: rounding_term(prepared, whole(), order),
        whole="a group of equal Hankel singular values",
        algorithm=lambda order: "square-root, then the weak states at rest",
    )


METHOD = register(
    Method(
        name="singular-perturbation",
        says="Sets the weak balanced states to their steady state: exact at zero frequency, guaranteed error, stable.",
        source=(
            "Y. Liu, B. D. O. Anderson, Singular perturbation approximation of balanced systems, Int. J. Control 50 "
            "(1989) 1379-1405",
            "R. J. Guyan, Reduction of stiffness and mass matrices, AIAA J. 3 (1965) 380 (states that are kept)",
        ),
        claim="2 * sum of the distinct Hankel singular values that are cut",
        keeps_steady_state=True,
        plan=plan,
    )
)
