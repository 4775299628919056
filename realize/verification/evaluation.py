"""Error of responses that were evaluated in doubles: measured beside solutions refined with longer residuals."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.models import Model, SecondOrder, StateSpace
from realize.verification.fragility import fragility_at

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Points that are solved again, at least and at most, and the cubed states that they may come to together.
FEWEST, MOST, CUBES = 2, 10, 1.0e9
#: Steps of refinement: each one gains the digits that doubles hold beyond the condition number.
STEPS = 4
#: Last correction, relative, beyond which the refinement has not converged.
CONVERGED = 1e-3
#: Points whose fragility is looked at.
PROBED = 40
#: What evaluation by a polynomial or a sum may lose, over its degree, in units of one rounding of every number.
TERMS = 8.0


def evaluation_error(model: Model, frequency: Array, values: ComplexArray) -> float | None:
    """Return the largest relative error of a response in doubles, as far as it can be measured: infinite where refined
    solutions do not settle, None where there is no frequency to look at.

    For states: at a few frequencies (those where roundings count most, and some between) the equations are solved
    again by iterative refinement with residuals in extended precision (Wilkinson 1963; Higham, Accuracy and Stability
    of Numerical Algorithms, 2002, chapter 12, from memory). The largest ratio of error to fragility there, at least 1,
    times the largest fragility of all frequencies stands for the points between. Other kinds lose at most TERMS times
    their degree times the fragility.

    Parameters
    ----------
    frequency : [k]
        rad/s.
    values : [k][outputs][inputs]
        The response without dead time.
    """
    index = np.flatnonzero(frequency > 0)
    index = index[:: max(1, -(-index.size // PROBED))]
    fragile = fragility_at(model, frequency[index])
    known = np.isfinite(fragile)
    index, fragile = index[known], fragile[known]
    if index.size == 0:
        return None
    worst = float(fragile.max())
    if not isinstance(model, (StateSpace, SecondOrder)):
        return TERMS * ((model.order or 0) + 1) * worst
    pencil = model if isinstance(model, StateSpace) else StateSpace(**model.pencil._asdict())
    n = max(pencil.A.shape[0], 1)
    count = int(np.clip(CUBES / n**3, FEWEST, MOST))
    order = np.argsort(-fragile, kind="stable")
    chosen = np.unique(
        np.concatenate([order[: -(-count // 2)], np.linspace(0, index.size - 1, max(count // 2, 1)).astype(int)])
    )
    ratio = 1.0
    with np.errstate(all="ignore"):
        for k in chosen.tolist():
            error = _error_at(pencil, float(frequency[index[k]]), values[index[k]])
            ratio = max(ratio, error / float(fragile[k])) if np.isfinite(error) else np.inf
    return ratio * worst


def _error_at(model: StateSpace, frequency: float, value: NDArray[Any]) -> float:
    """Return the relative error of a value, by refinement; not finite where that does not converge."""
    import scipy.linalg

    from realize.kernels.response import balanced_states

    A, B, C, E = balanced_states(model.A, model.B, model.C, model.E)
    w = np.longdouble(frequency)
    s = np.exp(1j * w * np.longdouble(model.time.seconds)) if model.time.sampled else 1j * w
    n = A.shape[0]
    whole = s * (np.eye(n) if E is None else E).astype(np.clongdouble) - A
    lu = scipy.linalg.lu_factor(whole.astype(complex), check_finite=False)
    x = np.zeros(B.shape, dtype=np.clongdouble)
    change = np.inf
    # norms in units of the value: their squares must not underflow
    unit = np.longdouble(np.abs(value).max())
    if not unit > 0:
        return np.inf
    c = C.astype(np.clongdouble)
    for _ in range(STEPS):
        step = scipy.linalg.lu_solve(lu, (B - whole @ x).astype(complex), check_finite=False)
        x = x + step
        change = _norm(c @ step, unit)
    right = c @ x + model.D
    size = _norm(right, unit)
    if not change <= CONVERGED * size:
        return np.inf
    # the last correction is of the size of what is still wrong
    error = _norm(right - value, unit) + 4 * change
    return error / size if size > 0 else np.inf


def _norm(matrix: NDArray[Any], unit: Any) -> float:
    return float(np.linalg.norm((matrix / unit).astype(complex)))
