"""Hankel singular values of a state model, for a drawing."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.models import Model, StateSpace
from realize.models.state_space import is_identity

#: State models beyond this order are drawn without Hankel singular values unless these are given.
UP_TO = 500


def hankel_values(model: Model) -> NDArray[np.float64] | None:
    """Return the Hankel singular values of a stable state model, decreasing, or None where there are none to draw.

    None for other kinds, descriptor models, orders 0 and beyond 500, and models with a pole outside the stability
    region or on its boundary.
    """
    if not isinstance(model, StateSpace) or not is_identity(model.E) or not 0 < model.A.shape[0] <= UP_TO:
        return None
    if not all(np.all(np.isfinite(matrix)) for matrix in (model.A, model.B, model.C)):
        return None
    import scipy.linalg

    from realize.kernels.balancing import hankel_factors
    from realize.kernels.lyapunov import NotStable
    from realize.kernels.unit_scaling import scale_model

    sampled = model.time.sampled
    poles = np.linalg.eigvals(model.A)
    if not (np.all(np.abs(poles) < 1) if sampled else np.all(poles.real < 0)):
        return None
    scaled = scale_model(model.A, model.B, model.C, sampled=sampled)
    T, Q = scipy.linalg.schur(scaled.A, output="real")
    try:
        factors = hankel_factors(T, Q.T @ scaled.B, scaled.C @ Q, sampled=sampled)
    except NotStable:
        return None
    with np.errstate(over="ignore", under="ignore"):
        values = np.ldexp(factors.values, scaled.gain)
    return values if np.all(np.isfinite(values)) else None
