"""Claims about a conversion, from source and result alone (definitions: realize.schema.claims, docs/methods/claims)."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.models import Model
from realize.schema import CLAIMS, Claim, judge
from realize.verification.bands import (
    Interval,
    all_bands,
    channel_band,
    common_zeros,
    finite_at_zero,
    intervals_of,
    light_zeros,
    whole_band,
    zero_channel,
)
from realize.verification.glance import Found
from realize.verification.pair import Pair, frobenius, of_channel
from realize.verification.proof import SMALLEST
from realize.verification.search import LIGHT, Band, axis_intervals, largest, seeds, sharpened, summits
from realize.verification.views import view_of

Array = NDArray[np.float64]
#: A search of the largest error: `glanced_error`, or the careful one.
Search = Callable[..., Found | None]
#: Degree of the inequality (in frequency) up to which a quick look comes first.
GLANCED = 80
#: A proof that leaves more than this share of the value open sends the careful search.
LOOSE = 0.1


def _quotient(
    pair: Pair,
    w: Array,
    sizes: tuple[Array, Array],
    lines: list[float],
    channel: tuple[int, int] | None,
    divisor: float,
) -> Array:
    """Return the error at w relative to the source, light zeros from the edges of their interval, or to a divisor.

    `sizes` are those of the channel, or of all of them.
    """
    above = frobenius(sizes[0])
    if divisor:
        return above / divisor
    below = frobenius(sizes[1])
    for line in lines:
        near = np.abs(w - line) <= LIGHT * line
        if near.any():
            below = np.where(near, pair.edge_gain(line * (1 - LIGHT), line * (1 + LIGHT), channel), below)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        error = above / below
    return np.where(above == 0, 0.0, error)


def glanced_error(
    pair: Pair, band: Band, lines: list[float], channel: tuple[int, int] | None, divisor: float = 0.0
) -> Found | None:
    """Return the largest error of a quick look where a proof can follow, None elsewhere."""
    if not lines and pair.provable(channel) and pair.proof(channel).size <= GLANCED:
        return pair.glance(channel).error(band, divisor)
    return None


def largest_error(
    pair: Pair, band: Band, lines: list[float], channel: tuple[int, int] | None, divisor: float = 0.0
) -> tuple[float, float]:
    """Return the largest error found and its frequency: the search is quick, the value that it finds exact."""
    w, difference, size = pair.grid
    inside = band.contains(w)
    w = w[inside]
    known = of_channel(difference[inside], channel), of_channel(size[inside], channel)
    start = _quotient(pair, w, known, lines, channel, divisor)
    if w.size and pair.provable(channel) and np.isfinite(start).all():
        # the proof finds what the samples miss: near is near enough
        def error(x: float) -> float:
            return _exact_error(pair, x, lines, channel, divisor)

        return sharpened(error, max((error(x), x) for x in summits(w, start, band)), band)
    found, where = largest(
        lambda x: _quotient(pair, x, pair.quick_sizes(x, channel), lines, channel, divisor),
        w,
        band,
        rounds=2,
        values=start,
    )
    if not pair.exact or not np.isfinite(found) or w.size == 0:
        return found, where
    if not pair.provable(channel):
        at = np.array([where])
        return float(_quotient(pair, at, pair.sizes(at, channel), lines, channel, divisor)[0]), where
    return _exact_error(pair, where, lines, channel, divisor), where


def _exact_error(
    pair: Pair, frequency: float, lines: list[float], channel: tuple[int, int] | None, divisor: float
) -> float:
    """Return the error at one frequency from the proof's polynomials."""
    reference = divisor or None
    for line in lines:
        if not divisor and abs(frequency - line) <= LIGHT * line:
            reference = pair.edge_gain(line * (1 - LIGHT), line * (1 + LIGHT), channel)
    return pair.proof(channel).value_at(frequency, reference)


def _note(pair: Pair) -> str:
    return "" if pair.exact else "evaluated in double arithmetic; the rounding of the evaluation is part of the value"


def _claimed(
    name: str,
    pair: Pair,
    value: float,
    where: dict[str, Any],
    limit: float | None,
    intervals: Sequence[Interval],
    channel: tuple[int, int] | None = None,
    near: Sequence[Any] = (),
) -> Claim:
    """Return the claim, proved on the intervals where that is affordable, measured otherwise."""
    if pair.identical:
        return judge(name, 0.0, limit=limit, basis="proved", uncertainty=0.0, where={})
    if np.isfinite(value) and pair.provable(channel):
        proof = pair.proof(channel)
        if proof.identical:
            return judge(name, 0.0, limit=limit, basis="proved", uncertainty=0.0, where={})
        bound = proof.bound(value, intervals, near)
        if bound is not None:
            hidden = float(np.nextafter(max(bound - value, 0.0), np.inf))
            return judge(name, value, limit=limit, basis="proved", uncertainty=hidden, where=where)
    return judge(name, value, limit=limit, where=where, note=_note(pair))


def response_error(pair: Pair, limit: float | None = None) -> Claim:
    """Return the claim `response-error`."""
    view = pair.source
    bands = all_bands(view) or [Band(0.1, 10.0, True)]
    band = Band(min(b.low for b in bands), max(b.high for b in bands), finite_at_zero(view), axis_intervals(view.poles))
    zeros = common_zeros(view)
    lines = light_zeros(zeros)
    intervals = intervals_of(pair, band, lines, None) if pair.exact else []

    def claim(found: Found) -> Claim:
        return _claimed(
            "response-error", pair, found.value, {"frequency": found.where}, limit, intervals, near=found.near
        )

    return _looked(claim, lambda search: search(pair, band, lines, None))


def channel_error(pair: Pair, limit: float | None = None) -> Claim:
    """Return the claim `channel-error`: the worst channel, each over its own dynamic band."""
    view = pair.source
    p, m = view.model.shape
    worst: Claim | None = None
    gain = None
    for i in range(p):
        for j in range(m):
            reference = 0.0
            if zero_channel(view, i, j):
                if gain is None:
                    gain = peak_gain(pair)[0] or 1.0
                reference = gain
                band = whole_band(view) if view.poles.s.size else Band(0.1, 10.0)
                lines: list[float] = []
                intervals: list[Interval] = []
                if pair.exact:
                    intervals = [(low, high, gain) for low, high, _ in intervals_of(pair, band, [], (i, j))]
            else:
                band = channel_band(view, i, j)
                lines = light_zeros(view.channel_roots[i][j][0])
                intervals = intervals_of(pair, band, lines, (i, j)) if pair.exact else []

            def claimed(
                found: Found, channel: tuple[int, int] = (i, j), intervals: list[Interval] = intervals
            ) -> Claim:
                place = {"frequency": found.where, "output": channel[0], "input": channel[1]}
                return _claimed("channel-error", pair, found.value, place, limit, intervals, channel, found.near)

            claim = _looked(claimed, partial(_search_channel, pair, band, lines, (i, j), reference))
            if worst is None or _total(claim) > _total(worst):
                worst = claim
    assert worst is not None
    return worst


def _search_channel(
    pair: Pair, band: Band, lines: list[float], channel: tuple[int, int], reference: float, search: Search
) -> Found | None:
    return search(pair, band, lines, channel, reference)


def _carefully(
    pair: Pair, band: Band, lines: list[float], channel: tuple[int, int] | None, divisor: float = 0.0
) -> Found:
    return Found(*largest_error(pair, band, lines, channel, divisor))


def _looked(claim: Callable[[Found], Claim], look: Callable[[Search], Found | None]) -> Claim:
    """Return the claim about what a quick look found, or a careful search where a proof has to go far beyond that."""
    found = look(glanced_error)
    if found is not None:
        made = claim(found)
        if made.basis == "proved" and made.value is not None and made.uncertainty is not None:
            if made.uncertainty <= LOOSE * max(made.value, SMALLEST):
                return made
    found = look(_carefully)
    assert found is not None
    return claim(found)


def _total(claim: Claim) -> float:
    """Return what the claim may be at worst; a claim without a bound counts by its value."""
    if claim.infinite or claim.value is None:
        return np.inf
    return claim.value + (claim.uncertainty or 0.0)


def peak_gain(pair: Pair) -> tuple[float, float]:
    """Return the largest Frobenius gain of the source found, and its frequency; the limit at infinity counts."""
    if pair.provable(None) and pair.proof(None).size <= GLANCED:
        seen = pair.glance(None).gain(whole_band(pair.source))
        if seen is not None and 0 < seen[0] < np.inf:
            limit = at_infinity(pair)[1]
            return (limit, np.inf) if np.isfinite(limit) and limit > seen[0] else seen
    band = pair.band
    w, _, size = pair.grid
    inside = band.contains(w)
    gains = frobenius(size[inside])
    if pair.provable(None) and np.isfinite(gains).all() and gains.size:
        proof = pair.proof(None)
        first = max((proof.gain_at(x), x) for x in summits(w[inside], gains, band))
        gain, where = sharpened(proof.gain_at, first, band)
    else:
        gain, where = largest(lambda x: frobenius(pair.quick_sizes(x)[1]), w[inside], band, rounds=2, values=gains)
    if pair.exact and not pair.provable(None) and np.isfinite(gain):
        gain = float(frobenius(pair.sizes(np.array([where]))[1])[0])
    limit = at_infinity(pair)[1]
    return (limit, np.inf) if np.isfinite(limit) and limit > gain else (gain, where)


def at_infinity(pair: Pair) -> tuple[float, float]:
    """Return the limits of ||dG|| and ||G|| at infinite frequency; (0, 0) where only samples are known, or sampled."""
    if not pair.exact or pair.source.period is not None:
        return 0.0, 0.0
    from realize.kernels.exact.numbers import nearest

    def limit(n: Any, d: Any) -> float:
        if not n or n.degree() < d.degree():
            return 0.0
        if n.degree() > d.degree():
            return np.inf
        return abs(nearest(n.leading_coefficient() / d.leading_coefficient()))

    pairs = [(a, b) for one, two in zip(*pair.scaled, strict=True) for a, b in zip(one, two, strict=True)]
    difference = [limit(b[0] * a[1] - a[0] * b[1], a[1] * b[1]) for a, b in pairs]
    return _norm(difference), _norm([limit(*a) for a, _ in pairs])


def _norm(values: list[float]) -> float:
    """Return the root of the sum of squares, safe against overflow."""
    top = max(values, default=0.0)
    return top * float(np.linalg.norm(np.array(values) / top)) if 0 < top < np.inf else top


def peak_error(pair: Pair, limit: float | None = None) -> Claim:
    """Return the claim `peak-error`: over all frequencies, those of the result's own poles included.

    A source whose gain grows without limit (more zeros than poles) is judged over its dynamic band; one with a pole at
    the origin from the lower end of that band on.
    """
    gain, _ = peak_gain(pair)
    end_difference, end_gain = at_infinity(pair)
    improper = not np.isfinite(end_gain)
    band = whole_band(pair.source, 1.0) if improper else whole_band(pair.source)
    if improper:
        gain, _ = largest(lambda x: frobenius(pair.sizes(x)[1]), seeds(band, pair.source.poles), band)
    if improper or gain == 0:
        intervals = [(low, high, gain * (1 - 2.0**-30)) for low, high, _ in intervals_of(pair, band, [], None)]
    else:
        # a pole at the origin leaves out what is below the dynamic band
        start = band.low if np.any(pair.source.poles.s == 0) else 0.0
        full = Band(start, np.inf, False, band.left_out)
        intervals = [(low, high, gain * (1 - 2.0**-30)) for low, high, _ in intervals_of(pair, full, [], None)]
    if not np.isfinite(gain):
        intervals = []
    if not (pair.exact and gain > 0):
        intervals = [(0.0, 0.0, 1.0)]

    def claim(found: Found) -> Claim:
        value = found.value
        place: dict[str, Any] = {"frequency": found.where}
        if not improper and end_difference > value:
            value, place = end_difference, {"frequency": None}
        error = value / gain if gain > 0 else (0.0 if value == 0 else np.inf)
        return _claimed("peak-error", pair, error, place, limit, intervals, near=found.near)

    def look(search: Search) -> Found | None:
        # a careful search looks beside the result's own poles too
        return search(pair, band if improper or search is glanced_error else pair.band, [], None, 1.0)

    return _looked(claim, look)


def end_behaviour(pair: Pair, limit: float | None = None) -> Claim | None:
    """Return the claim `end-behaviour`, or None where exact fractions are not affordable."""
    if not pair.exact:
        return None
    from realize.kernels.exact.numbers import nearest

    assert pair.source.fractions is not None and pair.result.fractions is not None
    worst, note, place = 0.0, "", {}
    origin = 0 if pair.source.period is None else 1
    for i, (one, two) in enumerate(zip(pair.source.fractions, pair.result.fractions, strict=True)):
        for j, ((n1, d1), (n2, d2)) in enumerate(zip(one, two, strict=True)):
            value, said = 0.0, ""
            if n1.degree() < 0 or n2.degree() < 0:
                if n1.degree() != n2.degree():
                    value, said = np.inf, "a channel that is identically zero on one side is not on the other"
            elif n1.degree() - d1.degree() != n2.degree() - d2.degree():
                value = np.inf
                said = f"relative degree {d1.degree() - n1.degree()} became {d2.degree() - n2.degree()}"
            elif _multiplicity(n1, origin) != _multiplicity(n2, origin) or _multiplicity(d1, origin) != _multiplicity(
                d2, origin
            ):
                value, said = (
                    np.inf,
                    f"the multiplicity of poles or zeros at {'z = 1' if origin else 'the origin'} changed",
                )
            else:
                ratio = (n2.leading_coefficient() * d1.leading_coefficient()) / (
                    n1.leading_coefficient() * d2.leading_coefficient()
                )
                value = abs(nearest(ratio - 1))
                moved = _axis_moved(pair, i, j)
                if moved:
                    value, said = np.inf, moved
            if value > worst or (value == worst and said and not note):
                worst, note, place = value, said, {"output": i, "input": j}
    return judge("end-behaviour", worst, limit=limit, basis="proved", uncertainty=0.0, note=note, where=place)


def _multiplicity(polynomial: Any, point: int) -> int:
    """Return how often the polynomial vanishes at the integer point."""
    count = 0
    while polynomial.degree() >= 0 and polynomial(point) == 0:
        polynomial = polynomial // type(polynomial)([-point, 1])
        count += 1
    return count


def _axis_moved(pair: Pair, i: int, j: int) -> str:
    """Return words if a pole on the axis is further than a unit in the last place from every pole of the result."""
    first = pair.source.channel_roots[i][j][1]
    where = first.s[first.on_axis]
    if where.size == 0:
        return ""
    second = pair.result.channel_roots[i][j][1]
    counted = sum(1 for s in where.tolist() if s.imag >= 0)
    if pair.source.period is None:
        theirs = second.s[second.on_axis]
        if theirs.size != where.size:
            return f"{counted} poles or pairs on the axis became {sum(1 for s in theirs.tolist() if s.imag >= 0)}"
        gap = np.abs(np.sort(np.abs(where.imag)) - np.sort(np.abs(theirs.imag)))
        moved = bool(np.any(gap > 2 * np.spacing(np.sort(np.abs(where.imag)))))
    else:
        # the doubles of a pole on the unit circle are beside it: two units in the last place of z
        nearest_one = np.abs(where[:, None] - second.s[None, :]).min(axis=1, initial=np.inf)
        moved = bool(np.any(nearest_one * pair.source.period > 4 * np.finfo(float).eps))
    return "a pole on the axis moved by more than one unit in the last place" if moved else ""


def dead_time_difference(source: Model, result: Model) -> float:
    """Return the largest difference of the channels' dead times, s."""
    first, second = (
        np.zeros(model.shape) if model.dead_time is None else model.dead_time.total for model in (source, result)
    )
    return float(np.abs(first - second).max())


def _small(pair: Pair, response_limit: float | None, peak_limit: float | None) -> list[Claim]:
    """Return response and peak error where the short way for small plants serves, nothing elsewhere."""
    from realize.verification.small import small_claims

    return list(small_claims(pair, response_limit, peak_limit) or ())


def conversion_claims(
    source: Model, result: Model, structured: bool, limits: dict[str, float] | None = None
) -> list[Claim]:
    """Return the claims of a conversion.

    Parameters
    ----------
    source, result : Model
        Parametric models of the same shape and time base.
    structured : bool
        True for results whose coordinates keep every channel accurate everywhere: judged by response error and end
        behaviour too.
    limits : dict, optional
        Limits that replace the defaults, by claim name.
    """
    given = limits or {}

    def limit(name: str) -> float | None:
        if name in given:
            return given[name]
        defaults = CLAIMS[name].limits
        return defaults.get("convert", defaults.get("convert:structured") if structured else None)

    pair = Pair(view_of(source), view_of(result))
    late = dead_time_difference(source, result)
    same_clock = source.time.sampled == result.time.sampled and (
        not source.time.sampled or source.time.exact_period == result.time.exact_period
    )
    if late > 0 or not same_clock:
        note = f"the dead times differ by up to {late:.3g} s" if same_clock else "the time bases differ"
        return [
            judge(name, np.inf, limit=limit(name), basis="bounded", note=note)
            for name in ("response-error", "peak-error", "end-behaviour")
        ]
    if pair.identical:
        names = [
            "response-error",
            *(["channel-error"] if source.shape != (1, 1) else []),
            "peak-error",
            "end-behaviour",
        ]
        same = [
            judge(name, 0.0, limit=limit(name), basis="proved", uncertainty=0.0, note="left as it was")
            for name in names
        ]
        return [*same, judge("order", float(result.order or 0), unit="states", basis="proved", uncertainty=0.0)]
    claims = _small(pair, limit("response-error"), limit("peak-error"))
    if not claims:
        claims = [response_error(pair, limit("response-error"))]
        if source.shape != (1, 1):
            claims.append(channel_error(pair, limit("channel-error")))
        claims.append(peak_error(pair, limit("peak-error")))
    end = end_behaviour(pair, limit("end-behaviour"))
    if end is not None:
        claims.append(end)
    claims.append(
        judge(
            "order", float(result.order or 0), unit="states", basis="proved", uncertainty=0.0, limit=given.get("order")
        )
    )
    return claims
