"""Balanced truncation by square roots of the Gramians."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from realize.kernels.balancing import balanced_part, balancing_free_projection
from realize.reduction.plan import Plan, Request
from realize.reduction.prepare import Prepared
from realize.reduction.registry import Method, register
from realize.reduction.result import Projected
from realize.reduction.rounding import balanced_effect, cut_rounding, effect, product_errors

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
#: Balancing transforms of a larger condition number lose more than half of the digits on the way to the states.
ILL_CONDITIONED = 1 / math.sqrt(EPS)
#: Up to so many states the whole balanced model is made once and cut for every order that is looked at.
SKETCHED = 300


def transform_condition(W: Array, V: Array) -> float:
    """Return |W| |V| in the 2-norm: the condition number of the projection onto the balanced states."""
    return float(np.linalg.norm(W, 2) * np.linalg.norm(V, 2)) if V.size else 1.0


@dataclass(frozen=True)
class Choice:
    """Which square-root algorithm: the part in its coordinates, what rounding may do to it, and why, in words.

    `rounding` is in the scaled unit.
    """

    part: Projected
    rounding: float
    words: str


def choose_coordinates(prepared: Prepared, order: int) -> Choice:
    """Return the first states in balanced coordinates, or balancing-free in coordinates with an orthonormal V.

    The rule: balanced, unless the balancing transform has a condition number above 1 / sqrt(eps) and the estimated
    rounding of the balancing-free products is the smaller one. (The balanced matrices are not projected here: with well
    scaled factors they are accurate also where the transform is not.)

    Parameters
    ----------
    prepared : Prepared
    order : int
        Stable states to keep.

    Returns
    -------
    Choice
    """
    part = balanced(prepared, order)
    if order == 0:
        return Choice(part, 0.0, "square-root")
    condition = transform_condition(part.W, part.V)
    rounding = balanced_effect(prepared, part, order)
    words = f"square-root: the balancing transform has condition number {condition:.1e}"
    if condition <= ILL_CONDITIONED:
        return Choice(part, rounding, words)
    T, B, C = prepared.split.stable
    W, V = balancing_free_projection(prepared.factors, order)
    free = Projected(W.T @ T @ V, W.T @ B, C @ V, part.D_change, W, V)
    other = effect(free, product_errors(T, B, C, W, V), sampled=prepared.sampled)
    compared = f"rounding {other:.1e} there, {rounding:.1e} balanced"
    if not other < rounding:
        return Choice(part, rounding, f"{words}, but balancing-free coordinates are no better ({compared})")
    return Choice(free, other, f"balancing-free square-root: {words.partition(': ')[2]} ({compared})")


def balanced(prepared: Prepared, order: int) -> Projected:
    """Return the first `order` balanced states: W'A V, W'B, C V with W'V = I."""
    part = balanced_part(prepared.factors, order)
    return Projected(part.A, part.B, part.C, np.zeros((part.C.shape[0], part.B.shape[1])), part.W, part.V)


def hankel_cuts(prepared: Prepared) -> NDArray[np.bool_]:
    """Return for each number of states whether a cut there leaves equal Hankel singular values together."""
    return np.array([prepared.cut_allowed(k) for k in range(prepared.available + 1)])


def plan(prepared: Prepared, request: Request) -> Plan:
    """Return the orders of balanced truncation."""
    count = prepared.available

    @lru_cache(maxsize=1)
    def whole() -> Projected:
        return balanced(prepared, count)

    @lru_cache(maxsize=4)
    def chosen(order: int) -> Choice:
        return choose_coordinates(prepared, order)

    def sketch(order: int) -> Projected:
        full = whole()
        W, V = full.W[:, :order], full.V[:, :order]
        return Projected(full.A[:order, :order], full.B[:order], full.C[:, :order], full.D_change, W, V)

    return Plan(
        available=count,
        allowed=hankel_cuts(prepared),
        tails=prepared.tails[: count + 1],
        project=lambda order: chosen(order).part,
        rounding=lambda order, part: prepared.in_gain(cut_rounding(prepared, order) + chosen(order).rounding),
        whole="a group of equal Hankel singular values",
        algorithm=lambda order: chosen(order).words,
        sketch=sketch if count <= SKETCHED else None,
    )


METHOD = register(
    Method(
        name="balanced-truncation",
        says="Keeps the states that are both easy to reach and easy to see; guaranteed error, stable result.",
        source=(
            "B. C. Moore, Principal component analysis in linear systems, IEEE Trans. Automatic Control 26 "
            "(1981) 17-32",
            "M. S. Tombs, I. Postlethwaite, Truncated balanced realization of a stable non-minimal state-space system, "
            "Int. J. Control 46 (1987) 1319-1330",
            "A. Varga, Efficient minimal realization procedure based on balancing, Proc. IMACS/IFAC Symp. Modelling "
            "and Control of Technological Systems (1991) 42-47 (balancing-free)",
            "D. F. Enns, Model reduction with balanced realizations, Proc. 23rd IEEE CDC (1984) 127-132; K. Glover, "
            "All optimal Hankel-norm approximations, Int. J. Control 39 (1984) 1115-1193 (bound)",
            "U. M. Al-Saggaf, G. F. Franklin, An error bound for a discrete reduced order model, IEEE Trans. Automatic "
            "Control 32 (1987) 815-819; D. Hinrichsen, A. J. Pritchard, An improved error estimate for reduced-order "
            "models of discrete-time systems, IEEE Trans. Automatic Control 35 (1990) 317-320 (bound, sampled)",
        ),
        claim="2 * sum of the distinct Hankel singular values that are cut",
        keeps_steady_state=False,
        plan=plan,
    )
)
