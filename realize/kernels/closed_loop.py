"""A plant and a controller in a loop u = -K y, in states."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Matrices = tuple[Array, Array, Array, Array]


class IllPosed(ValueError):
    """I + Dk D is singular: the loop has no solution at infinite frequency."""


@dataclass(frozen=True)
class LoopStates:
    """The closed loop with a disturbance r at the plant's input and n at the controller's: u = r - K (y + n), y = P u.

    Attributes
    ----------
    A : (n + k, n + k) array
        States of the plant, then those of the controller.
    B : (n + k, m + p) array
        Inputs r, then n.
    C : (p + m, n + k) array
        Outputs y, then u.
    D : (p + m, m + p) array
    """

    A: Array
    B: Array
    C: Array
    D: Array


def loop_states(plant: Matrices, controller: Matrices) -> LoopStates:
    """Return the closed loop of a plant and a controller.

    Parameters
    ----------
    plant : (A, B, C, D), p outputs and m inputs
    controller : (A, B, C, D), m outputs and p inputs

    Returns
    -------
    LoopStates
        Its response is [P; I] (I + K P)^-1 [I, -K], whose largest gain is 1 / b(P, K).

    Raises
    ------
    IllPosed
    """
    A, B, C, D = plant
    Ak, Bk, Ck, Dk = controller
    n, k, m, p = A.shape[0], Ak.shape[0], B.shape[1], C.shape[0]
    inner = np.eye(m) + Dk @ D
    try:
        # u = inner^-1 (r - Dk n - Dk C x - Ck xk)
        solved = np.linalg.solve(inner, np.hstack([-Dk @ C, -Ck, np.eye(m), -Dk])).astype(float)
    except np.linalg.LinAlgError:
        solved = np.full((m, n + k + m + p), np.inf)
    if not np.all(np.isfinite(solved)):
        raise IllPosed("I + Dk D is singular: the loop is not well posed")
    Cu, Du = solved[:, : n + k], solved[:, n + k :]
    Cy, Dy = np.hstack([C, np.zeros((p, k))]) + D @ Cu, D @ Du
    noise = np.hstack([np.zeros((p, m)), np.eye(p)])
    closed = np.vstack([B @ Cu, Bk @ Cy])
    closed[:n, :n] += A
    closed[n:, n:] += Ak
    return LoopStates(closed, np.vstack([B @ Du, Bk @ (Dy + noise)]), np.vstack([Cy, Cu]), np.vstack([Dy, Du]))
