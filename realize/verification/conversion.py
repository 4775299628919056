"""Claims about a conversion, from source and result alone (definitions: realize.schema.claims, docs/methods/claims)."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.models import Model
from realize.schema import CLAIMS, Claim, judge
from realize.verification.proof import LARGEST_DEGREE, Proof
from realize.verification.search import LIGHT, Band, axis_intervals, dynamic_band, largest, seeds
from realize.verification.views import NO_DYNAMICS, Dynamics, View, view_of

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Pair:
    """Source and result, with their difference evaluated where needed."""

    source: View
    result: View
    _proofs: dict[Any, Proof] = field(default_factory=dict, repr=False, compare=False)

    def proof(self, channel: tuple[int, int] | None) -> Proof:
        """Return the exact polynomials of all channels together, or of one."""
        if self.source.model.shape == (1, 1):
            channel = None
        if channel not in self._proofs:
            self._proofs[channel] = Proof(*self.scaled, self.source.exact_period, channel)
        return self._proofs[channel]

    @property
    def exact(self) -> bool:
        """True where both are compared in exact arithmetic."""
        return self.source.fractions is not None and self.result.fractions is not None

    @cached_property
    def exponent(self) -> int:
        """Power of two near the source's gain: sizes are counted in it, so that none leaves the range of doubles."""
        if not self.exact:
            return 0
        from realize.kernels.exact.numbers import binary_exponent

        assert self.source.fractions is not None
        found = []
        for row in self.source.fractions:
            for n, d in row:
                if n:
                    # the gain at a point of the size of the dynamics, from coefficients alone
                    e = binary_exponent(self._unit)
                    top = max(binary_exponent(c) + k * e for k, c in enumerate(n.coeffs()) if c)
                    bottom = max(binary_exponent(c) + k * e for k, c in enumerate(d.coeffs()) if c)
                    found.append(top - bottom)
        return max(found, default=0)

    @cached_property
    def _unit(self) -> Any:
        from realize.kernels.exact.numbers import fraction

        if self.source.period is not None:
            return fraction(1)
        sizes = self.source.poles.frequency
        sizes = sizes[(sizes > 0) & np.isfinite(sizes)]
        middle = float(np.exp(np.mean(np.log(sizes)))) if sizes.size else 1.0
        return fraction(middle.as_integer_ratio())

    @cached_property
    def scaled(self) -> tuple[list[list[Any]], list[list[Any]]]:
        """The exact fractions of both, numerators divided by 2^exponent."""
        from realize.kernels.exact.numbers import power_of_two

        assert self.source.fractions is not None and self.result.fractions is not None
        factor = power_of_two(-self.exponent)
        first, second = (
            [[(n * factor, d) for n, d in row] for row in grid]
            for grid in (self.source.fractions, self.result.fractions)
        )
        return first, second

    def sizes(self, w: Array) -> tuple[Array, Array]:
        """Return |dG| and |G_source| of each channel, in units of 2^exponent: two arrays [k][p][m]."""
        p, m = self.source.model.shape
        if self.exact:
            difference, size = np.empty((w.size, p, m)), np.empty((w.size, p, m))
            from realize.kernels.exact.evaluation import difference as exact_difference

            first, second = self.scaled
            for i in range(p):
                for j in range(m):
                    found = exact_difference(*first[i][j], *second[i][j], w, self.source.exact_period)
                    value, reference = found.value, found.reference
                    # where both leave the range of doubles, their quotient is still known
                    lost = (reference < _LOW) & (found.relative > 0) & np.isfinite(found.relative)
                    reference = np.where(lost, _LOW, reference)
                    value = np.where(lost, np.minimum(found.relative * _LOW, 1e300), value)
                    difference[:, i, j], size[:, i, j] = value, reference
            return difference, size
        first, second = self.source.response(w), self.result.response(w)
        return np.abs(first - second), np.abs(first)

    @property
    def identical(self) -> bool:
        """True where both are one model."""
        return self.source is self.result


#: Sizes below this, in units of the source's gain, are replaced by their quotient.
_LOW = 1e-280


def _frobenius(values: Array) -> Array:
    """Return the Frobenius norm over the channels, safe against overflow."""
    largest_entry = values.max(axis=(1, 2), keepdims=True)
    scale = np.where((largest_entry > 0) & np.isfinite(largest_entry), largest_entry, 1.0)
    return np.sqrt(np.sum((values / scale) ** 2, axis=(1, 2))) * scale[:, 0, 0]


def _finite_at_zero(view: View) -> bool:
    """True where every channel is finite at zero frequency and some channel is not zero there."""
    poles = view.poles
    if poles.s.size and np.any(poles.s == 0):
        return False
    if view.fractions is None:
        return bool(np.any(view.response(np.zeros(1)) != 0))
    point = 0 if view.period is None else 1
    return any(n(point) != 0 for row in view.fractions for n, _ in row)


def _channel_band(view: View, i: int, j: int) -> Band:
    zeros, poles = view.channel_roots[i][j]
    at_origin = bool(np.any(poles.s == 0))
    if view.fractions is not None:
        finite = not at_origin and view.fractions[i][j][0](0 if view.period is None else 1) != 0
    else:
        finite = not at_origin and bool(view.response(np.zeros(1))[0, i, j] != 0)
    return dynamic_band(zeros, poles, view.period, finite)


def _light_zeros(zeros: Dynamics) -> list[float]:
    light = (zeros.damping < LIGHT) & (zeros.frequency > 0)
    return sorted(set(zeros.frequency[light].tolist()))


def _common_zeros(view: View) -> Dynamics:
    """Zeros shared by every channel that is not identically zero."""
    p, m = view.model.shape
    lists = [view.channel_roots[i][j][0] for i in range(p) for j in range(m) if not zero_channel(view, i, j)]
    if not lists:
        return NO_DYNAMICS
    if len(lists) == 1:
        return lists[0]
    shared = set(lists[0].s.tolist()).intersection(*(set(zeros.s.tolist()) for zeros in lists[1:]))
    keep = np.array([value in shared for value in lists[0].s.tolist()], dtype=bool)
    return Dynamics(lists[0].s[keep], lists[0].on_axis[keep])


def zero_channel(view: View, i: int, j: int) -> bool:
    """True where a channel is identically zero (exactly, or at every seed in doubles)."""
    if view.fractions is not None:
        return view.fractions[i][j][0].degree() < 0
    return not np.any(view.response(10.0 ** np.linspace(-3, 3, 7) * 1.0375)[:, i, j])


def _relative(pair: Pair, w: Array, lines: list[float], channel: tuple[int, int] | None, peak: float) -> Array:
    """Return the relative error at w with the divisor of light zeros taken from the edges of their interval."""
    difference, size = pair.sizes(w)
    if channel is None:
        above, below = _frobenius(difference), _frobenius(size)
    else:
        above, below = difference[:, channel[0], channel[1]], size[:, channel[0], channel[1]]
    for line in lines:
        near = np.abs(w - line) <= LIGHT * line
        if near.any():
            edges = pair.sizes(np.array([line * (1 - LIGHT), line * (1 + LIGHT)]))[1]
            edge = _frobenius(edges) if channel is None else edges[:, channel[0], channel[1]]
            below = np.where(near, edge.max(), below)
    if peak:
        below = np.full(above.shape, peak)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        error = above / below
    return np.where(above == 0, 0.0, error)


def _note(pair: Pair) -> str:
    return "" if pair.exact else "evaluated in double arithmetic; the rounding of the evaluation is part of the value"


def _claimed(
    name: str,
    pair: Pair,
    value: float,
    where: dict[str, Any],
    limit: float | None,
    intervals: list[tuple[float, float, float | None]],
    channel: tuple[int, int] | None = None,
) -> Claim:
    """Return the claim, proved on the intervals where that is affordable, measured otherwise."""
    if pair.identical:
        return judge(name, 0.0, limit=limit, basis="proved", uncertainty=0.0, where={})
    if pair.exact and np.isfinite(value):
        proof = pair.proof(channel)
        if proof.identical:
            return judge(name, 0.0, limit=limit, basis="proved", uncertainty=0.0, where={})
        if proof.size <= LARGEST_DEGREE:
            bound = proof.bound(value, intervals)
            if bound is not None:
                hidden = float(np.nextafter(max(bound - value, 0.0), np.inf))
                return judge(name, value, limit=limit, basis="proved", uncertainty=hidden, where=where)
    return judge(name, value, limit=limit, where=where, note=_note(pair))


def _intervals(
    pair: Pair, band: Band, lines: list[float], channel: tuple[int, int] | None
) -> list[tuple[float, float, float | None]]:
    """Return the pieces of a band between what is left out, with the divisor of light zeros from their edges."""
    pieces: list[tuple[float, float, float | None]] = [(0.0, 0.0, None)] if band.zero else []
    cuts = sorted(
        (max(low, band.low), min(high, band.high)) for low, high in band.left_out if high > band.low and low < band.high
    )
    start = band.low
    spans = []
    for low, high in cuts:
        if low > start:
            spans.append((start, low))
        start = max(start, high)
    if start < band.high:
        spans.append((start, band.high))
    for low, high in spans:
        begin = low
        for line in lines:
            left, right = line * (1 - LIGHT), line * (1 + LIGHT)
            if right <= begin or left >= high:
                continue
            if left > begin:
                pieces.append((begin, left, None))
            edges = pair.sizes(np.array([left, right]))[1]
            edge = _frobenius(edges) if channel is None else edges[:, channel[0], channel[1]]
            pieces.append((max(left, begin), min(right, high), float(edge.max()) * (1 - 2.0**-30)))
            begin = right
        if begin < high:
            pieces.append((begin, high, None))
    return pieces


def response_error(pair: Pair, limit: float | None = None) -> Claim:
    """Return the claim `response-error`."""
    view = pair.source
    p, m = view.model.shape
    bands = [_channel_band(view, i, j) for i in range(p) for j in range(m) if not zero_channel(view, i, j)]
    if not bands:
        bands = [Band(0.1, 10.0, True)]
    band = Band(
        min(b.low for b in bands), max(b.high for b in bands), _finite_at_zero(view), axis_intervals(view.poles)
    )
    zeros = _common_zeros(view)
    lines = _light_zeros(zeros)
    w = seeds(band, zeros, view.poles, pair.result.poles, *_channel_zeros(view))
    value, where = largest(lambda x: _relative(pair, x, lines, None, 0.0), w, band)
    intervals = _intervals(pair, band, lines, None) if pair.exact else []
    return _claimed("response-error", pair, value, {"frequency": where}, limit, intervals)


def _channel_zeros(view: View) -> list[Dynamics]:
    return [zeros for row in view.channel_roots for zeros, _ in row]


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
                w = seeds(band, view.poles, pair.result.poles)
                intervals = (
                    [(low, high, gain) for low, high, _ in _intervals(pair, band, [], (i, j))] if pair.exact else []
                )
            else:
                band = _channel_band(view, i, j)
                zeros, poles = view.channel_roots[i][j]
                lines = _light_zeros(zeros)
                w = seeds(band, zeros, poles, pair.result.channel_roots[i][j][1])
                intervals = _intervals(pair, band, lines, (i, j)) if pair.exact else []
            value, where = largest(
                lambda x, c=(i, j), z=lines, r=reference: _relative(pair, x, z, c, r),
                w,
                band,  # type: ignore[misc]
            )
            place = {"frequency": where, "output": i, "input": j}
            claim = _claimed("channel-error", pair, value, place, limit, intervals, (i, j))
            if worst is None or _total(claim) > _total(worst):
                worst = claim
    assert worst is not None
    return worst


def _total(claim: Claim) -> float:
    """Return what the claim may be at worst; a claim without a bound counts by its value."""
    if claim.infinite or claim.value is None:
        return np.inf
    return claim.value + (claim.uncertainty or 0.0)


def whole_band(view: View, margin: float = 1e2, other: View | None = None) -> Band:
    """Return the dynamic band of all channels together, widened by a factor; zero included, axis poles left out.

    Parameters
    ----------
    other : View, optional
        The band covers the poles and zeros of this model too.
    """
    zeros, poles = NO_DYNAMICS, view.poles
    for part in _channel_zeros(view):
        zeros = zeros.merged(part)
    at_origin = bool(np.any(poles.s == 0))
    band = dynamic_band(zeros, poles, view.period, not at_origin)
    low, high = band.low, band.high
    if other is not None:
        extra = dynamic_band(NO_DYNAMICS, other.poles, view.period, True)
        if np.any(other.poles.frequency > 0):
            low, high = min(low, extra.low), max(high, extra.high)
    top = np.pi / view.period if view.period is not None else np.inf
    low = low / margin if not at_origin else low
    return Band(max(low, 1e-300), min(high * margin, top, 1e300), not at_origin, band.left_out)


def peak_gain(pair: Pair) -> tuple[float, float]:
    """Return the largest Frobenius gain of the source found, and its frequency; the limit at infinity counts."""
    band = whole_band(pair.source)
    w = seeds(band, pair.source.poles, *_channel_zeros(pair.source))
    gain, where = largest(lambda x: _frobenius(pair.sizes(x)[1]), w, band)
    limit = _at_infinity(pair)[1]
    return (limit, np.inf) if np.isfinite(limit) and limit > gain else (gain, where)


def _at_infinity(pair: Pair) -> tuple[float, float]:
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
    return float(np.linalg.norm(difference)), float(np.linalg.norm([limit(*a) for a, _ in pairs]))


def peak_error(pair: Pair, limit: float | None = None) -> Claim:
    """Return the claim `peak-error`: over all frequencies, those of the result's own poles included.

    A source whose gain grows without limit (more zeros than poles) is judged over its dynamic band; one with a pole at
    the origin from the lower end of that band on.
    """
    gain, _ = peak_gain(pair)
    end_difference, end_gain = _at_infinity(pair)
    improper = not np.isfinite(end_gain)
    band = whole_band(pair.source, 1.0) if improper else whole_band(pair.source, other=pair.result)
    if improper:
        w = seeds(band, pair.source.poles)
        gain, _ = largest(lambda x: _frobenius(pair.sizes(x)[1]), w, band)
    w = seeds(band, pair.source.poles, pair.result.poles)
    value, where = largest(lambda x: _frobenius(pair.sizes(x)[0]), w, band)
    place: dict[str, Any] = {"frequency": where}
    if not improper and end_difference > value:
        value, place = end_difference, {"frequency": None}
    error = value / gain if gain > 0 else (0.0 if value == 0 else np.inf)
    if improper or gain == 0:
        intervals = [(low, high, gain * (1 - 2.0**-30)) for low, high, _ in _intervals(pair, band, [], None)]
    else:
        # a pole at the origin leaves out what is below the dynamic band
        start = band.low if np.any(pair.source.poles.s == 0) else 0.0
        full = Band(start, np.inf, False, band.left_out)
        intervals = [(low, high, gain * (1 - 2.0**-30)) for low, high, _ in _intervals(pair, full, [], None)]
    if not np.isfinite(gain):
        intervals = []
    return _claimed(
        "peak-error", pair, error, place, limit, intervals if pair.exact and gain > 0 else [(0.0, 0.0, 1.0)]
    )


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
    """Return words if a pole on the axis left it, or moved by more than one unit in the last place; else ''."""
    first, second = pair.source.channel_roots[i][j][1], pair.result.channel_roots[i][j][1]
    a = np.sort(np.abs(first.s[first.on_axis].imag))
    if a.size == 0:
        return ""
    b = np.sort(np.abs(second.s[second.on_axis].imag))
    if a.size != b.size:
        return f"{a.size} poles on the axis became {b.size}"
    if np.any(np.abs(a - b) > 2 * np.spacing(a)):
        return "a pole on the axis moved by more than one unit in the last place"
    return ""


def dead_time_difference(source: Model, result: Model) -> float:
    """Return the largest difference of the channels' dead times, s."""
    first, second = (
        np.zeros(model.shape) if model.dead_time is None else model.dead_time.total for model in (source, result)
    )
    return float(np.abs(first - second).max())


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
    if late > 0:
        note = f"the dead times differ by up to {late:.3g} s"
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
