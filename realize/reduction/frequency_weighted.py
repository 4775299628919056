"""Frequency-weighted balanced truncation with the weights of the closed loop, of a plant or of its controller."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from realize.errors import Refused, UsageError
from realize.kernels.balancing import equal_groups
from realize.kernels.closed_loop import IllPosed, LoopStates, Matrices, loop_states
from realize.kernels.lyapunov import NotStable, gramian_factors
from realize.kernels.unit_scaling import scale_model
from realize.reduction.plan import Loop, Plan, Request
from realize.reduction.prepare import Prepared
from realize.reduction.registry import Method, register
from realize.reduction.result import Projected

Array = NDArray[np.float64]

EPS = float(np.finfo(float).eps)
UNSTABLE_LOOP = "the loop u = -K y of the full model is not stable, so that it gives no weights; use another method"


def partner_states(prepared: Prepared, loop: Loop) -> Matrices:
    """Return the other half of the loop in the scaled units of the model: the product of the two stays what it was."""
    time, gain = (0 if prepared.sampled else prepared.scaled.time), prepared.scaled.gain
    own = scale_model(np.ldexp(loop.A, -time), np.ldexp(loop.B, -time), loop.C, sampled=True)
    # all of the gain goes where there is room: half to the inputs, half to the outputs
    power = own.input + own.output + gain
    with np.errstate(over="ignore", under="ignore"):
        made = (
            own.A,
            np.ldexp(own.B, power // 2),
            np.ldexp(own.C, power - power // 2),
            np.ldexp(loop.D, gain),
        )
    if not all(np.isfinite(matrix).all() for matrix in made):
        raise Refused("the gains of the two halves of the loop do not fit into doubles together; use other units")
    return made


def closed_loop(prepared: Prepared, model: Matrices, loop: Loop) -> LoopStates:
    """Return the loop of a model in scaled units with its partner.

    Raises
    ------
    Refused
        If the loop is not well posed.
    """
    other = partner_states(prepared, loop)
    try:
        return loop_states(model, other) if loop.controller else loop_states(other, model)
    except IllPosed as reason:
        raise Refused(str(reason)) from None


def loop_poles_stable(prepared: Prepared, made: LoopStates) -> bool:
    """Say whether all eigenvalues of a closed loop are inside the region of stability."""
    poles = np.linalg.eigvals(made.A) if made.A.size else np.zeros(0)
    return bool(np.all(np.abs(poles) < 1) if prepared.sampled else np.all(poles.real < 0))


def weighted_factors(
    prepared: Prepared, loop: Loop, *, inputs: bool = True, outputs: bool = True
) -> tuple[Array, Array]:
    """Return factors (L, R) of the weighted Gramians L L' and R'R of the stable part.

    The state of the model inside the loop, driven by a disturbance at the model's input, has the Gramian of the model
    behind the weight (I + K P)^-1; what is seen of it at the partner's output has that of the weight K (I + P K)^-1
    (for a controller: (I + P K)^-1 and P (I + K P)^-1). So both are blocks of Gramians of the closed loop [1]_, [2]_.

    Parameters
    ----------
    prepared : Prepared
    loop : Loop
    inputs, outputs : bool
        False leaves the weight on that side out.

    Returns
    -------
    L, R : (n, n) arrays

    Raises
    ------
    Refused
        If the loop is not stable.

    References
    ----------
    .. [1] B. D. O. Anderson, Y. Liu, Controller reduction: concepts and approaches, IEEE Trans. Automatic Control 34
           (1989) 802-812.
    .. [2] P. M. M. Wortelboer, Frequency-weighted balanced reduction of closed-loop mechanical servo-systems, thesis,
           Delft University of Technology (1994), from memory.
    """
    scaled, split = prepared.scaled, prepared.split
    direct = np.ldexp(prepared.D, -scaled.gain)
    made = closed_loop(prepared, (scaled.A, scaled.B, scaled.C, direct), loop)
    n, stable = scaled.A.shape[0], prepared.stable_order
    m, p = scaled.B.shape[1], scaled.C.shape[0]
    size = made.A.shape[0]
    if loop.controller:
        own, drive = slice(0, n), made.B[:, :m]
        # the controller's output is r - u
        see = -made.C[p:]
    else:
        # inputs of the controller are the plant's outputs: n is the last of both
        own, drive = slice(size - n, size), made.B[:, made.B.shape[1] - m :]
        see = made.C[: made.C.shape[0] - p]
    try:
        L, R = gramian_factors(made.A, drive, see, sampled=prepared.sampled)
    except NotStable:
        raise Refused(UNSTABLE_LOOP) from None
    left = split.left[:stable] @ L[own]
    right = R[:, own] @ split.right[:, :stable]
    if not inputs:
        left = prepared.factors.roots.L
    if not outputs:
        right = prepared.factors.roots.R
    # to square factors: L L' = (Q L')'(Q L')
    return np.asarray(np.linalg.qr(left.T, mode="r")).T, np.asarray(np.linalg.qr(right, mode="r"))


def plan(prepared: Prepared, request: Request) -> Plan:
    """Return the orders of closed-loop weighted reduction."""
    if request.loop is None:
        raise UsageError("frequency-weighted takes its weights from a loop: give a controller, or a plant for one")
    loop = request.loop
    T, B, C = prepared.split.stable
    L, R = weighted_factors(prepared, loop)
    U, values, Zt = scipy.linalg.svd(R @ L, check_finite=False) if L.size else (L, np.zeros(0), L)
    count = int(np.count_nonzero(values > values.size * EPS * values[0])) if values.size and values[0] > 0 else 0
    groups = equal_groups(values)
    allowed = np.ones(count + 1, dtype=bool)
    allowed[1:count] = groups[1:count] != groups[: max(count - 1, 0)]
    none = np.zeros(prepared.D.shape)

    @lru_cache(maxsize=64)
    def project(order: int) -> Projected:
        V = np.linalg.qr(L @ Zt.T[:, :order])[0]
        W = np.linalg.qr(R.T @ U[:, :order])[0]
        W = np.linalg.solve(W.T @ V, W.T).T.astype(float)
        return Projected(W.T @ T @ V, W.T @ B, C @ V, none, W, V)

    def objection(order: int, part: Projected) -> str:
        poles = np.linalg.eigvals(part.A) if part.A.size else np.zeros(0)
        if not (np.all(np.abs(poles) < 1) if prepared.sampled else np.all(poles.real < 0)):
            return "the reduced stable part is unstable"
        kept = prepared.split.kept
        small = (
            scipy.linalg.block_diag(part.A, kept[0]),
            np.vstack([part.B, kept[1]]),
            np.hstack([part.C, kept[2]]),
            np.ldexp(prepared.D, -prepared.scaled.gain) + part.D_change,
        )
        size = part.A.shape[0] + kept[0].shape[0]
        made = closed_loop(prepared, (small[0].reshape(size, size), *small[1:]), loop)
        return "" if loop_poles_stable(prepared, made) else "the loop with the reduced model is unstable"

    return Plan(
        available=count,
        allowed=allowed,
        tails=None,
        project=project,
        rounding=lambda order, part: 0.0,
        whole="a group of equal weighted Hankel singular values",
        algorithm=lambda order: "balancing-free square-root on Gramians of the closed loop",
        objection=objection,
        values=values,
    )


METHOD = register(
    Method(
        name="frequency-weighted",
        says="Keeps what counts in a closed loop: balanced truncation weighted by the loop's own sensitivities.",
        source=(
            "D. F. Enns, Model reduction with balanced realizations, Proc. 23rd IEEE CDC (1984) 127-132 (weights)",
            "B. D. O. Anderson, Y. Liu, Controller reduction: concepts and approaches, IEEE Trans. Automatic Control "
            "34 (1989) 802-812 (weights of a loop)",
            "P. M. M. Wortelboer, Frequency-weighted balanced reduction of closed-loop mechanical servo-systems, "
            "thesis, Delft University of Technology (1994), from memory (Gramians of the loop)",
        ),
        claim="",
        keeps_steady_state=False,
        plan=plan,
    )
)
