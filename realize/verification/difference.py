"""Norms of the difference of two models: L-infinity and H2."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.kernels import norms
from realize.kernels.schur_response import SHARE, thinned
from realize.models import Model, StateSpace
from realize.models.state_space import is_identity
from realize.schema import Claim, judge
from realize.schema.records import Basis
from realize.verification.bands import Interval, intervals_of, whole_band
from realize.verification.conversion import at_infinity, largest_error, peak_gain
from realize.verification.curves import LARGEST_DEGREE, MOST_MINORS, Extreme, largest_of, minor_count
from realize.verification.fragility import fragility
from realize.verification.norms import H2_ORDER, h2_of_fractions, h2_of_states
from realize.verification.pair import Pair
from realize.verification.search import Band, axis_intervals, largest, seeds
from realize.verification.views import NO_DYNAMICS, Dynamics, tell, view_of

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

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


def linf_error(
    first: Model, second: Model, *, name: str = "linf-error", limit: float | None = None, confirm: bool = True
) -> Claim:
    """Return the L-infinity norm of the difference, absolute, with the value relative to the first one's largest gain.

    Intervals around poles on the axis are left out; a pole at the origin leaves out what is below the dynamic band.
    From exact fractions where affordable, proved: the largest singular value itself, from the minors of the difference;
    where there are too many of them, its Frobenius norm, unless Hamiltonian eigenvalues of two state models give a
    closer bound. In doubles otherwise; there `confirm` asks for Hamiltonian eigenvalues of a large model, where a bound
    is not known otherwise.
    """
    pair = Pair(view_of(first), view_of(second))
    if pair.identical or (pair.provable(None) and pair.proof(None).identical):
        return judge(name, 0.0, unit="absolute", basis="proved", uncertainty=0.0, limit=limit, relative=0.0)
    band, pieces = _domain(pair)
    basis: Basis
    if pair.exact:
        gain = peak_gain(pair)[0]
        closest = _from_minors(pair, pieces)
        if closest is not None:
            value, where, bound, basis = closest.value, closest.frequency, closest.bound, "proved"
        else:
            value, where, bound, basis = _from_fractions(pair, band, pieces)
        if closest is None and pair.source.model.shape != (1, 1) and not band.left_out and band.zero:
            closer = _confirmed(pair, first, second, value, gain)
            if closer is not None and (bound is None or closer < bound):
                bound, basis = closer, "bounded"
        scale = pair.exponent
        value, gain = _lifted(value, scale), _lifted(gain, scale)
        bound = None if bound is None else _lifted(bound, scale)
        note = ""
    else:
        value, where, bound, gain = _in_doubles(pair, first, second, band, confirm)
        basis, note = "measured" if bound is None else "bounded", "evaluated in double arithmetic"
    hidden = None if bound is None else float(np.nextafter(max(bound - value, 0.0), np.inf))
    return judge(
        name,
        value,
        unit="absolute",
        basis=basis,
        limit=limit,
        uncertainty=hidden,
        where={"frequency": where if np.isfinite(where) else None},
        relative=value / gain if gain > 0 and np.isfinite(gain) else None,
        note=note,
    )


def _lifted(value: float, exponent: int) -> float:
    with np.errstate(over="ignore", under="ignore"):
        return float(np.ldexp(value, exponent))


def _domain(pair: Pair) -> tuple[Band, list[Interval]]:
    """Return the band of the search, and the intervals of the norm (all frequencies, axis poles left out)."""
    axis = _difference_poles(pair) if pair.exact else pair.source.poles.merged(pair.result.poles)
    band = whole_band(pair.source, other=pair.result)
    left_out = axis_intervals(axis)
    at_origin = bool(np.any(axis.s == 0))
    band = Band(band.low, band.high, not at_origin, left_out)
    if at_origin and band.zero:
        band = Band(band.low, band.high, False, left_out)
    full = Band(band.low if at_origin else 0.0, np.inf, False, left_out)
    return band, [(low, high, 1.0) for low, high, _ in intervals_of(pair, full, [], None)]


def _difference_poles(pair: Pair) -> Dynamics:
    """Return the poles of the difference that are on the axis: what both have and cancels is none."""
    from realize.kernels.exact.polynomials import reduce_fraction

    found = NO_DYNAMICS
    if not np.any(pair.source.poles.on_axis) and not np.any(np.abs(pair.result.rough_poles.damping) < 1e-6):
        return found
    for row in _cross(pair):
        for n, d in row:
            part = pair.source.dynamics(reduce_fraction(n, d)[1])
            found = found.merged(Dynamics(part.s[part.on_axis], part.on_axis[part.on_axis]))
    return found


def _from_minors(pair: Pair, pieces: list[Interval]) -> Extreme | None:
    """Return the largest singular value of the difference with a proved bound (in units of 2^exponent), or None."""
    from realize.kernels.exact.graphs import continuous, gain_squares, minors_of

    p, m = pair.source.model.shape
    if not pair.provable(None):
        return None
    assert pair.source.fractions is not None and pair.result.fractions is not None
    degree = max(
        max(n.degree(), d.degree())
        for grid in (pair.source.fractions, pair.result.fractions)
        for row in grid
        for n, d in row
    )
    if minor_count(p, m) * 2 * max(degree, 1) > MOST_MINORS or 2 * degree > LARGEST_DEGREE:
        return None
    cross: Any = _cross(pair)
    minors = minors_of(cross if pair.source.period is None else continuous(cross))
    if minors.poles.degree() < minors.degree:
        return None
    intervals = [(low, high) for low, high, _ in pieces]
    found = largest_of(gain_squares(minors), pair.source.exact_period, [minors.poles], intervals)
    return found if found.bound is not None else None


def _from_fractions(pair: Pair, band: Band, pieces: list[Interval]) -> tuple[float, float, float | None, Basis]:
    """Return largest gain of the difference, its frequency, a bound if one was proved (in units of 2^exponent)."""
    frobenius_peak, where = largest_error(pair, band, [], None, 1.0)
    at_end = at_infinity(pair)[0]
    if at_end > frobenius_peak:
        frobenius_peak, where = at_end, np.inf
    value = frobenius_peak
    if pair.source.model.shape != (1, 1):
        value, where = _largest_singular(pair, band)
        end = _singular_at_infinity(pair)
        if end > value:
            value, where = end, np.inf
    if not np.isfinite(frobenius_peak) or not pair.provable(None):
        return value, where, None, "measured"
    bound = pair.proof(None).bound(frobenius_peak, pieces)
    return value, where, bound, "measured" if bound is None else "proved"


def _cross(pair: Pair) -> list[list[tuple[Any, Any]]]:
    """Numerator and denominator of each channel of the difference."""
    return [
        [(n2 * d1 - n1 * d2, d1 * d2) for (n1, d1), (n2, d2) in zip(one, two, strict=True)]
        for one, two in zip(*pair.scaled, strict=True)
    ]


def _largest_singular(pair: Pair, band: Band) -> tuple[float, float]:
    from realize.kernels.exact.evaluation import evaluate

    p, m = pair.source.model.shape
    cross = _cross(pair)

    def difference(x: Array) -> Array:
        values = np.empty((x.size, p, m), dtype=complex)
        for i in range(p):
            for j in range(m):
                values[:, i, j] = evaluate(*cross[i][j], x, pair.source.exact_period)[0]
        return norms.gains(values)

    return largest(difference, band.keep(pair.grid[0]), band)


def _singular_at_infinity(pair: Pair) -> float:
    """Return the largest singular value of the limit at infinite frequency; 0 for sampled models."""
    if pair.source.period is not None:
        return 0.0
    from realize.kernels.exact.numbers import nearest

    def limit(n: Any, d: Any) -> float:
        if not n or n.degree() < d.degree():
            return 0.0
        return np.inf if n.degree() > d.degree() else nearest(n.leading_coefficient() / d.leading_coefficient())

    matrix = np.array([[limit(n, d) for n, d in row] for row in _cross(pair)])
    return float(norms.gains(matrix[None].astype(complex))[0])


def _confirmed(pair: Pair, first: Model, second: Model, value: float, gain: float) -> float | None:
    """Return the Hamiltonian bound on the difference of two state models in units of 2^exponent, or None."""
    if not both_states(first, second):
        return None
    assert isinstance(first, StateSpace) and isinstance(second, StateSpace)
    peak = norms.peak_gain(
        *difference_states(first, second), sampled=pair.source.period is not None, tolerance=TOLERANCE
    )
    if peak.basis != "bounded" or not np.isfinite(peak.upper):
        return None
    w = pair.grid[0]
    rounding = rounding_of(first, second, gain, w[w > 0][:: max(1, w.size // 40)])
    upper = _lifted(peak.upper, -pair.exponent) + rounding
    # a difference that is all rounding is not bounded by eigenvalues that carry the same rounding
    return upper if value > 100 * rounding and upper >= value else None


def _in_doubles(
    pair: Pair, first: Model, second: Model, band: Band, confirm: bool
) -> tuple[float, float, float | None, float]:
    """Return value, frequency, bound (None where nothing is confirmed) and largest gain of the source."""
    w = seeds(band, pair.source.poles, pair.result.rough_poles)
    confirm &= (first.order or 0) + (second.order or 0) <= norms.CONFIRMED_ORDER
    if not confirm and isinstance(first, StateSpace) and first.large_response() is not None:
        direct = second.D - first.D if isinstance(second, StateSpace) else None
        return _of_large(pair, band, w, direct)
    gain, _ = largest(lambda x: norms.gains(pair.source.response(x)), w, band, rounds=2)
    if confirm and both_states(first, second) and not band.left_out and band.zero:
        assert isinstance(first, StateSpace) and isinstance(second, StateSpace)
        period = first.time.seconds if first.time.sampled else None
        peak = norms.peak_gain(*difference_states(first, second), sampled=period is not None, tolerance=TOLERANCE)
        rounding = rounding_of(first, second, gain, w[:: max(1, w.size // 40)])
        if np.isfinite(peak.value) and peak.value > 100 * rounding:
            where = peak.frequency / period if period is not None else peak.frequency
            return peak.value, where, peak.upper + rounding if peak.basis == "bounded" else None, gain
    value, where = largest(lambda x: norms.gains(pair.result.response(x) - pair.source.response(x)), w, band)
    return value, where, None, gain


def _of_large(pair: Pair, band: Band, w: Array, direct: Array | None) -> tuple[float, float, float | None, float]:
    """The same for a large source: no Hamiltonian, and no two frequencies closer than the response can tell apart."""
    poles: ComplexArray = np.concatenate([view.rough_poles.s for view in (pair.source, pair.result)])
    w = thinned(w, np.asarray(1j * w, dtype=complex), poles, SHARE)
    tell(f"response of {pair.source.model.order} states at {w.size} frequencies")
    source = pair.source.response(w)
    second = pair.result.model

    def apart(x: Array, known: ComplexArray | None = None) -> Array:
        # doubles on both sides: the source has no more digits
        return norms.gains(
            second.rational_part(second.time.points(x)) - (pair.source.response(x) if known is None else known)
        )

    gain, _ = largest(lambda x: norms.gains(pair.source.response(x)), w, band, rounds=2, values=norms.gains(source))
    value, where = largest(apart, w, band, rounds=4, values=apart(w, source))
    end = 0.0 if direct is None else float(norms.gains(direct[None].astype(complex))[0])
    if pair.source.period is None and end > value:
        value, where = end, np.inf
    return value, where, None, gain


def h2_error(first: Model, second: Model) -> Claim | None:
    """Return the H2 norm of the difference, from exact fractions where affordable; None where it takes state models.

    Not available where the difference is not stable; exact: where unstable parts do not cancel.
    """
    pair = Pair(view_of(first), view_of(second))
    if pair.identical:
        return judge("h2-error", 0.0, unit="absolute", basis="proved", uncertainty=0.0)
    sampled = pair.source.period is not None
    if pair.exact:
        cross: Any = _cross(pair)
        if max(max(n.degree(), d.degree()) for row in cross for n, d in row) <= H2_ORDER:
            factor = pair.exponent
            from realize.kernels.exact.numbers import power_of_two

            return h2_of_fractions(
                "h2-error", [[(n * power_of_two(factor), d) for n, d in row] for row in cross], sampled
            )
    if not both_states(first, second):
        return None
    assert isinstance(first, StateSpace) and isinstance(second, StateSpace)
    return h2_of_states("h2-error", *difference_states(first, second), sampled)
