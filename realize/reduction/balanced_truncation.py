"""Balanced truncation by square roots of the Gramians."""

from __future__ import annotations

import numpy as np

from realize.kernels.balancing import balanced_part
from realize.reduction.prepare import Prepared
from realize.reduction.registry import Method, register
from realize.reduction.result import Projected


def project(prepared: Prepared, order: int) -> Projected:
    """Keep the `order` states with the largest Hankel singular values: W'A V, W'B, C V with W'V = I.

    Parameters
    ----------
    prepared : Prepared
    order : int
        Stable states to keep.

    Returns
    -------
    Projected

    References
    ----------
    See `METHOD.source`.
    """
    part = balanced_part(prepared.factors, order)
    no_change = np.zeros((part.C.shape[0], part.B.shape[1]))
    return Projected(part.A, part.B, part.C, no_change, part.W, part.V)


METHOD = register(
    Method(
        name="balanced-truncation",
        says="Keeps the states that are both easy to reach and easy to see; guaranteed error, stable result.",
        source=(
            "B. C. Moore, Principal component analysis in linear systems, IEEE Trans. Automatic Control 26 "
            "(1981) 17-32",
            "M. S. Tombs, I. Postlethwaite, Truncated balanced realization of a stable non-minimal state-space system, "
            "Int. J. Control 46 (1987) 1319-1330",
            "D. F. Enns, Model reduction with balanced realizations, Proc. 23rd IEEE CDC (1984) 127-132; K. Glover, "
            "All optimal Hankel-norm approximations, Int. J. Control 39 (1984) 1115-1193 (bound)",
            "U. M. Al-Saggaf, G. F. Franklin, An error bound for a discrete reduced order model, IEEE Trans. Automatic "
            "Control 32 (1987) 815-819; D. Hinrichsen, A. J. Pritchard, An improved error estimate for reduced-order "
            "models of discrete-time systems, IEEE Trans. Automatic Control 35 (1990) 317-320 (bound, sampled)",
        ),
        claim="2 * sum of the distinct Hankel singular values that are cut",
        keeps_steady_state=False,
        project=project,
    )
)
