"""Order and stability of a result."""

from __future__ import annotations

import numpy as np

from realize.models import Model, StateSpace
from realize.schema import Claim, judge
from realize.verification.views import double_poles, exact_fractions, view_of


def order_claim(result: Model, limit: float | None = None) -> Claim:
    """Return the claim `order`."""
    return judge("order", float(result.order or 0), unit="states", basis="proved", uncertainty=0.0, limit=limit)


def stability_claim(result: Model) -> Claim:
    """Return the claim `stability`: proved by exact counts of the poles inside, or measured from eigenvalues."""
    view = view_of(result)
    sampled = view.period is not None
    if view.fractions is not None:
        from realize.kernels.exact.roots import inside_left_half_plane, inside_unit_circle

        inside = inside_unit_circle if sampled else inside_left_half_plane
        if isinstance(result, StateSpace):
            polynomials = [exact_fractions(result, cancel=False)[0][0][1]]
        else:
            polynomials = [d for row in view.fractions for _, d in row]
        stable = all(d.degree() < 1 or inside(d) == d.degree() for d in polynomials)
        return judge("stability", float(stable), unit="1", basis="proved", uncertainty=0.0)
    poles = double_poles(result)
    if sampled:
        margin = float(1 - np.abs(poles).max()) if poles.size else 1.0
    else:
        margin = float(-(poles.real / np.maximum(np.abs(poles), 1e-300)).max()) if poles.size else 1.0
    note = f"smallest margin {margin:.1e} ({'1 - |z|' if sampled else 'damping ratio'}), from eigenvalues in doubles"
    return judge("stability", float(margin > 0), unit="1", note=note)
