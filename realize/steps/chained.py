"""State models of fits whose channels share a factor: that factor first, or last, so that its structure stays exact."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.conversions import Task, convert_model, plan_route
from realize.models import Model, PoleResidue, StateSpace, ZeroPoleGain


def chained_states(chain: Any, shape: tuple[int, int], common: dict[str, Any]) -> StateSpace:
    """Return H(s) R(s) as states: H as a cascade for each input (or output, where they are fewer), R by residues.

    A cascade keeps the relative degree of H as zeros of its matrices, and R only ever sees its output: C A^k B is zero
    in every entry as often as it has to be.
    """
    p, m = shape
    time = {"time": common["time"]}
    factor = ZeroPoleGain(zeros=chain.zeros, poles=chain.outer, gain=1.0, **time)
    rest = PoleResidue(
        poles=chain.poles,
        residues=chain.residues.reshape(-1, p, m),
        powers=chain.powers,
        direct=chain.direct.reshape(p, m),
        **time,
    )
    H, R = _states(factor), _states(rest)
    unit = np.eye(m if m <= p else p)
    a, b, c, d = (np.kron(part, unit) for part in (H.A, H.B, H.C, H.D))
    first, second = ((a, b, c, d), (R.A, R.B, R.C, R.D)) if m <= p else ((R.A, R.B, R.C, R.D), (a, b, c, d))
    none = np.zeros((first[0].shape[0], second[0].shape[0]))
    return StateSpace(
        A=np.block([[first[0], none], [second[1] @ first[2], second[0]]]),
        B=np.vstack([first[1], second[1] @ first[3]]),
        C=np.hstack([second[3] @ first[2], second[2]]),
        D=second[3] @ first[3],
        **common,
    )


def _states(model: Model) -> StateSpace:
    task = Task(model, "state-space")
    result = convert_model(task, plan_route(task))
    assert isinstance(result, StateSpace)
    return result
