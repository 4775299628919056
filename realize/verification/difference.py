"""Norms of the difference of two models: L-infinity and H2."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.kernels import norms
from realize.kernels.lyapunov import NotStable
from realize.models import Model, StateSpace
from realize.models.state_space import is_identity
from realize.schema import Claim, judge
from realize.verification.bands import whole_band
from realize.verification.fragility import fragility
from realize.verification.pair import Pair
from realize.verification.search import largest, seeds
from realize.verification.views import view_of

Array = NDArray[np.float64]

#: Relative tolerance of the peak search; the interval it leaves is part of the uncertainty.
TOLERANCE = 1e-9


def difference_states(first: StateSpace, second: StateSpace) -> tuple[Array, Array, Array, Array]:
    """Return A, B, C, D of second minus first."""
    n, k = first.A.shape[0], second.A.shape[0]
    A = np.zeros((n + k, n + k))
    A[:n, :n], A[n:, n:] = first.A, second.A
    return A, np.vstack([first.B, second.B]), np.hstack([-first.C, second.C]), second.D - first.D


def both_states(first: Model, second: Model) -> bool:
    """True for two ordinary state models."""
    return all(isinstance(model, StateSpace) and is_identity(model.E) for model in (first, second))


def rounding_of(first: Model, second: Model, gain: float, frequency: Array) -> float:
    """Return what rounding in the evaluation of both models can add to a difference, to first order (absolute)."""
    total = 0.0
    for model in (first, second):
        value = fragility(model, frequency)
        total += (value if value is not None else 0.0) * gain
    return 16 * total


def linf_error(first: Model, second: Model, *, name: str = "linf-error", limit: float | None = None) -> Claim:
    """Return the L-infinity norm of the difference, absolute, with the value relative to the first one's largest gain.

    Two state models whose difference is well above rounding: confirmed by Hamiltonian eigenvalues ("bounded"). Else the
    largest value found, from exact fractions where affordable ("measured").
    """
    pair = Pair(view_of(first), view_of(second))
    band = whole_band(pair.source)
    w = seeds(band, pair.source.poles, pair.result.poles)
    gain, _ = largest(lambda x: norms.gains(pair.source.response(x)), w, band)
    if both_states(first, second):
        assert isinstance(first, StateSpace) and isinstance(second, StateSpace)
        period = first.time.seconds if first.time.sampled else None
        peak = norms.peak_gain(*difference_states(first, second), sampled=period is not None, tolerance=TOLERANCE)
        rounding = rounding_of(first, second, gain, w[:: max(1, w.size // 40)])
        if not np.isfinite(peak.value) or peak.value > 100 * rounding:
            where = peak.frequency / period if period is not None else peak.frequency
            place = {"frequency": where} if np.isfinite(where) else {"frequency": None, "note": "at infinite frequency"}
            uncertainty = peak.upper - peak.value + rounding if peak.basis == "bounded" else None
            return judge(
                name,
                peak.value,
                unit="absolute",
                basis=peak.basis,
                limit=limit,
                uncertainty=uncertainty,
                where=place,
                relative=peak.value / gain if gain > 0 else None,
            )
    value, where = _searched(pair, w, band)
    return judge(
        name,
        value,
        unit="absolute",
        limit=limit,
        where={"frequency": where},
        relative=value / gain if gain > 0 else None,
        note="" if pair.exact else "evaluated in double arithmetic",
    )


def _searched(pair: Pair, w: Array, band: object) -> tuple[float, float]:
    if pair.source.model.shape == (1, 1) or not pair.exact:
        if pair.source.model.shape == (1, 1):
            return largest(lambda x: pair.sizes(x)[0][:, 0, 0], w, band)  # type: ignore[arg-type]
        return largest(lambda x: norms.gains(pair.result.response(x) - pair.source.response(x)), w, band)  # type: ignore[arg-type]
    from realize.kernels.exact.evaluation import evaluate

    assert pair.source.fractions is not None and pair.result.fractions is not None
    p, m = pair.source.model.shape
    cross = [
        [
            (n2 * d1 - n1 * d2, d1 * d2)
            for (n1, d1), (n2, d2) in zip(pair.source.fractions[i], pair.result.fractions[i], strict=True)
        ]
        for i in range(p)
    ]

    def difference(x: Array) -> Array:
        values = np.empty((x.size, p, m), dtype=complex)
        for i in range(p):
            for j in range(m):
                values[:, i, j] = evaluate(*cross[i][j], x, pair.source.exact_period)[0]
        return norms.gains(values)

    return largest(difference, w, band)  # type: ignore[arg-type]


def h2_error(first: StateSpace, second: StateSpace) -> Claim:
    """Return the H2 norm of the difference of two state models; None where one of them is not stable."""
    period = first.time.seconds if first.time.sampled else None
    A, B, C, D = difference_states(first, second)
    try:
        value: float | None = norms.squared_norm(A, B, C, D, sampled=period is not None)
        note = "rounding of the Gramian not included"
    except NotStable:
        value, note = None, "one of the models is not stable"
    return judge("h2-error", value, unit="absolute", note=note)
