"""Physical states that stay states: the rest is balanced around them and cut, or set to its steady state."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.kernels.balancing import equal_groups
from realize.kernels.residualisation import NoSteadyState, residualised
from realize.reduction.plan import Plan, Request
from realize.reduction.prepare import Prepared
from realize.reduction.result import Projected

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
METHODS = ("balanced-truncation", "singular-perturbation")


@dataclass(frozen=True)
class Coordinates:
    """States in the order kept, unstable, others: new = rows @ x and x = columns @ new.

    Attributes
    ----------
    rows, columns : (n, n) arrays
    kept : int
        Physical states that stay, and combinations of states that carry the unstable part.
    """

    rows: Array
    columns: Array
    kept: int


def coordinates(prepared: Prepared, keep: tuple[int, ...]) -> Coordinates:
    """Return coordinates in which the kept states and the unstable part come first, and the others stay physical.

    The unstable part is a set of combinations L x with L A = A_u L. What of it the kept states do not fix already is
    added to them; as many other states make room, those that carry most of it.
    """
    n, stable = prepared.scaled.A.shape[0], prepared.stable_order
    rest = np.array([k for k in range(n) if k not in set(keep)], dtype=int)
    selected = np.eye(n)[list(keep)]
    unstable = prepared.split.left[stable:]
    unstable = unstable / np.maximum(np.linalg.norm(unstable, axis=1, keepdims=True), 1e-300)
    added = np.zeros((0, n))
    if unstable.size and rest.size:
        U, size, _ = np.linalg.svd(unstable[:, rest], full_matrices=False)
        # what is left of the unstable part once the kept states are known
        added = U[:, size > np.sqrt(n) * 64 * EPS].T @ unstable
        pivots = scipy.linalg.qr(added[:, rest], mode="r", pivoting=True)[1][: added.shape[0]]
        rest = np.delete(rest, pivots)
    rows = np.vstack([selected, added, np.eye(n)[rest]])
    columns = np.linalg.solve(rows, np.eye(n)).astype(float)
    return Coordinates(rows, columns, selected.shape[0] + added.shape[0])


def plan(prepared: Prepared, request: Request, method: str) -> Plan:
    """Return the orders that keep the states asked for.

    With P and Q the Gramians of the model, the blocks of the other states are balanced against each other and the weak
    ones cut [1]_ or set to their steady state [2]_. No bound is known; the error is measured.

    Parameters
    ----------
    prepared : Prepared
    request : Request
    method : str
        "balanced-truncation" or "singular-perturbation".

    References
    ----------
    .. [1] A. Vandendorpe, P. Van Dooren, Model reduction of interconnected systems, in: Model Order Reduction: Theory,
           Research Aspects and Applications, Springer (2008) 305-321.
    .. [2] R. J. Guyan, Reduction of stiffness and mass matrices, AIAA J. 3 (1965) 380.
    """
    if method not in METHODS:
        raise UsageError(f"states can be kept by {' and '.join(METHODS)}, not by {method}")
    scaled, n = prepared.scaled, prepared.scaled.A.shape[0]
    made = coordinates(prepared, request.keep_states)
    kept = made.kept
    A = made.rows @ scaled.A @ made.columns
    B, C = made.rows @ scaled.B, scaled.C @ made.columns
    roots, split, stable = prepared.factors.roots, prepared.split, prepared.stable_order
    L = made.rows[kept:] @ (split.right[:, :stable] @ roots.L)
    R = (roots.R @ split.left[:stable]) @ made.columns[:, kept:]
    if stable and n > kept:
        U, values, Zt = np.linalg.svd(R @ L)
    else:
        U, values, Zt = np.zeros((0, 0)), np.zeros(0), np.zeros((0, 0))
    # the product has as many rows as there are stable states, and no more than n - kept values that mean anything
    values = values[: n - kept]
    most = int(np.count_nonzero(values > n * EPS * values[0])) if values.size and values[0] > 0 else 0
    groups = equal_groups(values)
    allowed = np.zeros(kept + most + 1, dtype=bool)
    allowed[[kept, kept + most]] = True
    for k in range(1, most):
        allowed[kept + k] = groups[k] != groups[k - 1]
    none = np.zeros(prepared.D.shape)

    @lru_cache(maxsize=64)
    def project(order: int) -> Projected:
        extra = order - kept
        full_v, _ = np.linalg.qr(L @ Zt.T[:, :extra], mode="complete") if extra else (np.eye(n - kept), None)
        full_w, _ = np.linalg.qr(R.T @ U[:, :extra], mode="complete") if extra else (np.eye(n - kept), None)
        right, left = full_v[:, :extra], full_w[:, :extra]
        left = np.linalg.solve(left.T @ right, left.T).T.astype(float) if extra else left
        # the other states in steady state: their directions see nothing of the rows that stay
        behind, across = full_w[:, extra:], full_v[:, extra:]
        across = np.linalg.solve(across.T @ behind, across.T).T.astype(float)
        W = np.hstack([left, across]) if method == "singular-perturbation" else left
        V = np.hstack([right, behind]) if method == "singular-perturbation" else right
        inner = (
            np.block([[A[:kept, :kept], A[:kept, kept:] @ V], [W.T @ A[kept:, :kept], W.T @ A[kept:, kept:] @ V]]),
            np.vstack([B[:kept], W.T @ B[kept:]]),
            np.hstack([C[:, :kept], C[:, kept:] @ V]),
        )
        try:
            small = residualised(*inner, none, order, sampled=prepared.sampled)
        except NoSteadyState:
            raise Refused(
                "the states that are not kept have no steady state (a pole at zero frequency); keep the states that "
                "integrate too, or use --method balanced-truncation"
            ) from None
        rows = np.vstack([made.rows[:kept], left.T @ made.rows[kept:]])
        columns = np.hstack([made.columns[:, :kept], made.columns[:, kept:] @ right])
        return Projected(*small, rows.T, columns)

    def objection(order: int, part: Projected) -> str:
        poles = np.linalg.eigvals(part.A).astype(complex) if part.A.size else np.zeros(0, dtype=complex)
        for pole in split.kept_poles:
            if poles.size:
                poles = np.delete(poles, np.argmin(np.abs(poles - pole)))
        stays = np.all(np.abs(poles) < 1) if prepared.sampled else np.all(poles.real < 0)
        return "" if stays else "the result has an unstable pole that the source does not have"

    return Plan(
        available=kept + most,
        allowed=allowed,
        tails=None,
        project=project,
        rounding=lambda order, part: 0.0,
        whole="a group of equal singular values",
        algorithm=lambda order: (
            "kept states first, the others balanced against each other by their blocks of both Gramians and "
            + ("set to their steady state" if method == "singular-perturbation" else "cut")
        ),
        least=kept,
        objection=objection,
        values=values,
        whole_model=True,
    )
