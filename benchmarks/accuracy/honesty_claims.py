"""What each claim should have been: the exact error found by a dense search, beside what the claim says."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from flint import acb, arb, fmpq, fmpq_mat
from honesty_oracle import (
    EDGE,
    INFINITE,
    LIGHT,
    Side,
    Spot,
    Truth,
    bits,
    level,
    norm,
    quotient,
    rational,
    singular,
    spots,
)

from realize.models import FrequencyResponse, Model
from realize.schema import Claim

#: What the search for the largest gain of the source may miss of it.
SLACK = 1e-9
PER_DECADE = 6


@dataclass(frozen=True)
class Finding:
    """One claim held against the truth."""

    step: str
    name: str
    basis: str
    #: log10 of (value + uncertainty) / truth; None where truth is 0 or the claim infinite.
    ratio: float | None
    false: bool
    says: str


class Judge:
    """Holds claims about a source and a result against exact values."""

    def __init__(self, source: Side, result: Side) -> None:
        self.source, self.result = source, result
        self.truth = Truth(source, result)

    # frequencies

    @cached_property
    def frequencies(self) -> np.ndarray:
        band = self.source.band() or self.result.band() or (0.1, min(10.0, self.source.top))
        other = self.result.band() or band
        low = max(min(band[0], other[0]) / 100, 1e-290)
        high = min(max(band[1], other[1]) * 100, self.source.top, 1e290)
        count = int(np.clip(PER_DECADE * math.log10(high / low), 20, 240))
        parts = [np.geomspace(low, high, count), np.array([band[0], band[1], low, high, 0.0])]
        bands = [self.source.band(k) for k in range(len(self.source.flat))]
        parts += [np.array(edges) * np.array([1 + EDGE, 1 - EDGE]) for edges in [band, *bands] if edges]
        chosen = [spot for row in self.source.poles + self.source.zeros + self.result.poles for spot in row]
        for spot in {(round(math.log(s.size), 12), s.damping, s.on_axis): s for s in chosen if s.size > 0}.values():
            width = min(max(spot.damping, 1e-15), 0.3)
            center = spot.natural or spot.size
            parts.append(center * (1 + width * np.array([-3.0, -1.0, -0.3, 0.0, 0.3, 1.0, 3.0])))
            parts.append(np.array([spot.size]))
            if spot.damping < 2 * LIGHT:
                steps = LIGHT * np.array([-1 - 1e-7, -1 + 1e-7, -0.5, 0.5, 1 - 1e-7, 1 + 1e-7])
                parts += [center * (1 + steps), spot.size * (1 + steps)]
                if spot.on_axis:
                    for margin in (EDGE, -EDGE):
                        parts.append(np.array(self.around_axis([spot], margin)[0]))
        w = np.unique(np.concatenate(parts))
        return w[(w >= 0) & (w <= self.source.top)]

    @staticmethod
    def outside(spans: Sequence[tuple[float, float]]) -> Callable[[float], bool]:
        return lambda w: not any(low < w < high for low, high in spans)

    @staticmethod
    def around_axis(spots: Sequence[Spot], margin: float = EDGE) -> list[tuple[float, float]]:
        """Return what is left out around poles on the axis: a trifle more for errors, less (-EDGE) for gains."""
        return [
            (s.natural * (1 - LIGHT) * (1 - margin), s.natural * (1 + LIGHT) * (1 + margin))
            for s in spots
            if s.on_axis and s.natural > 0
        ]

    def largest(
        self,
        error: Callable[[float], Any],
        inside: Callable[[float], bool],
        extra: Sequence[float] = (),
        turns: int = 14,
    ) -> tuple[Any, float | None]:
        """Return the largest value found and where: all frequencies, then golden sections around the highest three."""
        ws = [w for w in np.unique(np.concatenate([self.frequencies, np.array(extra)])).tolist() if inside(w)]
        best, where = arb(0), None
        found = [(level(error(w)), w) for w in ws]
        if not found:
            return best, where
        heights = [height for height, _ in found]
        order = [
            k
            for k in range(len(found))
            if heights[k] >= max(heights[max(k - 1, 0)], heights[min(k + 1, len(found) - 1)])
        ]
        order.sort(key=lambda k: -heights[k])
        top, where = max((height, w) for height, w in found)
        if math.isfinite(top):
            for k in order[:3]:
                if heights[k] < top - 3:
                    continue
                low, high = ws[max(k - 1, 0)], ws[min(k + 1, len(ws) - 1)]
                if math.isinf(high):
                    continue
                a, b = low, high
                for _ in range(turns):
                    x, y = b - 0.6180339887 * (b - a), a + 0.6180339887 * (b - a)
                    here, there = (level(error(v)) if inside(v) else -math.inf for v in (x, y))
                    for height, v in ((here, x), (there, y)):
                        if height > top:
                            top, where = height, v
                    a, b = (a, y) if here > there else (x, b)
        return error(where), where

    # truths of the claims about a conversion

    def gain(self, low: float = 0.0, high: float = math.inf, zero: bool = True, extra: Sequence[float] = ()) -> Any:
        """Return the largest gain of the source between two frequencies, axis poles left out; found once a source."""
        key = low, high, zero
        if key not in self.source.gains:
            clear = self.outside(self.around_axis(self.source.all_poles, -EDGE))
            self.source.gains[key] = self.largest(
                lambda w: norm(self.truth.at(w)[1]),
                lambda w: clear(w) and (low <= w <= high or (zero and w == 0)),
                extra,
                turns=40,
            )[0]
        return self.source.gains[key]

    def divided(self, zeros: Sequence[Spot], channel: int | None) -> Callable[[float], Any]:
        """Return |dG|/|G|, near light zeros over the larger |G| at the edges of their interval."""
        lines = sorted({s.size for s in zeros if s.damping < LIGHT * 1.0001 and s.size > 0})

        def chosen(values: Sequence[Any]) -> Any:
            return norm(values) if channel is None else norm([values[channel]])

        def error(w: float) -> Any:
            difference, gain = self.truth.at(w)
            below = [chosen(gain)]
            for line in lines:
                if abs(w - line) <= LIGHT * line * (1 + EDGE):
                    edges = [chosen(self.truth.at(line * (1 + sign * LIGHT))[1]) for sign in (-1, 1)]
                    below += edges
            return quotient(chosen(difference), max(below, key=level))

        return error

    def absolute(self, k: int, gain: Any) -> Callable[[float], Any]:
        """Return |dG| of one channel over a gain."""
        return lambda w: quotient(norm([self.truth.at(w)[0][k]]), gain)

    def within(self, band: tuple[float, float] | None, zero: bool, poles: Sequence[Spot]) -> Callable[[float], bool]:
        low, high = band or (1.0, 1.0)
        clear = self.outside(self.around_axis(poles))
        return lambda w: (low * (1 + 1e-12) <= w <= high * (1 - 1e-12) or (zero and w == 0)) and clear(w)

    def finite_at_zero(self, k: int) -> bool:
        n, d = self.source.flat[k]
        return d(self.source.origin) != 0 and n(self.source.origin) != 0

    def response_error(self) -> tuple[Any, Any]:
        band = self.source.band()
        zero = not self.source.pole_at_origin and any(self.finite_at_zero(k) for k in range(len(self.source.flat)))
        inside = self.within(band, zero, self.source.all_poles)
        return self.largest(self.divided(self.source.common_zeros, None), inside, () if band else (1.0,))

    def channel_error(self) -> tuple[Any, Any]:
        worst, where = arb(0), None
        gain = None
        for k, (n, _) in enumerate(self.source.flat):
            if n.degree() < 0:
                if gain is None:
                    gain = self.gain(zero=not self.source.pole_at_origin, extra=(math.inf,))
                inside = self.within(self.source.band(), False, self.source.all_poles)
                found, at = self.largest(self.absolute(k, gain), inside)
            else:
                inside = self.within(self.source.band(k), self.finite_at_zero(k), self.source.poles[k])
                found, at = self.largest(self.divided(self.source.zeros[k], k), inside)
            if level(found) > level(worst):
                worst, where = found, (at, k)
        return worst, where

    @property
    def improper(self) -> bool:
        return any(n.degree() > d.degree() for n, d in self.source.flat) and self.source.period is None

    def peak_error(self) -> tuple[Any, Any]:
        clear = self.outside(self.around_axis(self.source.all_poles))
        band = self.source.band()
        start = band[0] if self.source.pole_at_origin and band else 1.0 if self.source.pole_at_origin else 0.0
        if self.improper:
            low, high = band or (0.1, 10.0)
            inside = self.within(band, not self.source.pole_at_origin, self.source.all_poles)
            ends = low * (1 - EDGE), high * (1 + EDGE)
            gain = self.gain(*ends, not self.source.pole_at_origin, ends)
            found, where = self.largest(lambda w: norm(self.truth.at(w)[0]), inside)
            return quotient(found, gain), where
        end = [math.inf] if self.source.period is None else []
        lower = start * (1 - EDGE)
        gain = self.gain(lower, zero=not self.source.pole_at_origin, extra=[*end, lower])
        # what lies below the band does not count where there is a pole at the origin
        upper = start * (1 + 1e-12)
        found, where = self.largest(lambda w: norm(self.truth.at(w)[0]), lambda w: clear(w) and w >= upper, end)
        return quotient(found, gain), where

    def end_behaviour(self) -> tuple[Any, Any]:
        worst, where = arb(0), None
        origin = self.source.origin
        for k, ((n1, d1), (n2, d2)) in enumerate(zip(self.source.flat, self.result.flat, strict=True)):
            value: Any
            if n1.degree() < 0 or n2.degree() < 0:
                value = arb(0) if n1.degree() == n2.degree() else INFINITE
            elif n1.degree() - d1.degree() != n2.degree() - d2.degree() or any(
                _multiplicity(a, origin) != _multiplicity(b, origin) for a, b in ((n1, n2), (d1, d2))
            ):
                value = INFINITE
            else:
                lead = [p[p.degree()] for p in (n1, d1, n2, d2)]
                value = arb(abs(lead[2] * lead[1] / (lead[0] * lead[3]) - 1))
                if self.source.period is None:
                    before, after = (
                        sorted(s.natural for s in side.poles[k] if s.on_axis) for side in (self.source, self.result)
                    )
                    if len(before) != len(after) or any(
                        abs(a - b) > 2.5 * np.spacing(a) for a, b in zip(before, after, strict=True)
                    ):
                        value = INFINITE
            if level(value) > level(worst):
                worst, where = value, k
        return worst, where

    # truths of the claims about a reduction and a comparison

    def linf_error(self) -> tuple[Any, Any]:
        axis = self.around_axis(self.source.all_poles + self.result.all_poles)
        clear = self.outside(axis)
        start = 0.0
        if self.source.pole_at_origin or self.result.pole_at_origin:
            band = self.source.band() or self.result.band() or (1.0, 1.0)
            start = band[0] * (1 + 1e-12)
        end = [math.inf] if self.source.period is None else []
        return self.largest(
            lambda w: singular(self.truth.at(w)[0], self.truth.shape), lambda w: clear(w) and w >= start, end
        )

    def steady_state_error(self) -> tuple[Any, Any]:
        if self.source.pole_at_origin:
            return None, None
        if self.result.pole_at_origin:
            return INFINITE, 0.0
        difference, gain = self.truth.at(0.0)
        return quotient(norm(difference), norm(gain)), 0.0

    def nu_gap(self) -> tuple[Any, Any]:
        """Return the largest chordal distance of two single channels: the nu-gap, or less where that is 1."""
        if self.truth.shape != (1, 1):
            return None, None
        (n1, d1), (n2, d2) = self.source.flat[0], self.result.flat[0]

        def distance(w: float) -> Any:
            z, exact = self.truth.point(w)
            sides = self.source, self.source, self.result, self.result
            with bits(128):
                a, b, c, d = (
                    side.value(p, z, exact) if p.degree() >= 0 else acb(0)
                    for side, p in zip(sides, (n1, d1, n2, d2), strict=True)
                )
                cross = self.truth.cross[0]
                top = self.result.value(cross, z, exact) if cross.degree() >= 0 else acb(0)
                return quotient(abs(top), norm([a, b]) * norm([c, d]))

        return self.largest(distance, lambda w: True)

    def h2_error(self) -> tuple[Any, Any]:
        """Return the H2 norm of the difference: X(s) D(-s) + X(-s) D(s) = M(s) M(-s) solved for each channel."""
        total = fmpq(0)
        for (_, d1), (_, d2), cross in zip(self.source.flat, self.result.flat, self.truth.cross, strict=True):
            if cross.degree() < 0:
                continue
            d = d1 * d2
            common = cross.gcd(d)
            square = _square_norm(cross // common, d // common, self.source.period)
            if square is None:
                return None, None
            total += square
        with bits(128):
            return (arb(total).sqrt() if total else arb(0)), None

    def stability(self) -> bool:
        return self.result.stable


def _square_norm(above: Any, below: Any, period: fmpq | None) -> fmpq | None:
    """Return the squared H2 norm of a rational function, None where it is not finite or no solution is unique."""
    if not all(spot.inside for spot in spots(below, period)):
        return None
    n = below.degree()
    if period is None:
        if above.degree() >= n:
            return None

        def other(p: Any) -> Any:
            return type(p)([c if k % 2 == 0 else -c for k, c in enumerate(p.coeffs())])

        unknowns, step = n, 2
    else:
        if above.degree() > n:
            return None

        def other(p: Any) -> Any:
            return type(p)([p[n - k] for k in range(n + 1)])

        unknowns, step = n + 1, 1
    right = above * other(above)
    columns = []
    for k in range(unknowns):
        x = type(above)([0] * k + [1])
        columns.append(x * other(below) + other(x) * below)
    # even powers in continuous time; in sampled time the coefficients are symmetric
    rows = [[column[step * k] for column in columns] for k in range(unknowns)]
    try:
        solution = fmpq_mat(rows).solve(fmpq_mat([[right[step * k]] for k in range(unknowns)]))
    except ZeroDivisionError:
        return None
    lead = solution[unknowns - 1, 0] / below[n]
    return lead if period is None else 2 * lead


def _multiplicity(polynomial: Any, point: int) -> int:
    count = 0
    while polynomial.degree() >= 0 and polynomial(point) == 0:
        polynomial = polynomial // type(polynomial)([-point, 1])
        count += 1
    return count


def misfits(data: FrequencyResponse, result: Side, model: Model) -> dict[str, tuple[Any, Any]]:
    """Return the exact misfits at the data's lines, dead time included."""
    p, m = data.shape
    w = data.radians
    total = np.zeros((p, m)) if model.dead_time is None else model.dead_time.total
    error = np.empty((w.size, p, m))
    with bits(256):
        for k, frequency in enumerate(w.tolist()):
            jw = acb(0, arb(rational(frequency)))
            period = None if result.period is None else arb(result.period)

            def point(jw: Any = jw, period: Any = period) -> Any:
                return jw if period is None else (jw * period).exp()

            for index, (n, d) in enumerate(result.flat):
                i, j = divmod(index, m)
                value = result.value(n, point, None) / result.value(d, point, None) if n.degree() >= 0 else acb(0)
                value *= (-jw * arb(float(total[i, j]))).exp()
                measured = complex(data.response[k, i, j])
                error[k, i, j] = float(abs(value - acb(measured.real, measured.imag)).mid())
    size = np.abs(data.response)
    top = float(size.max())
    found: dict[str, tuple[Any, Any]] = {}
    if top > 0:
        ratio = math.sqrt(math.fsum(((error / top) ** 2).ravel()) / math.fsum(((size / top) ** 2).ravel()))
        found["rms-misfit"] = arb(ratio), None
        peak = size.max(axis=0)
        found["worst-misfit"] = arb(float((error / np.where(peak > 0, peak, top)).max())), None
    if data.deviation is not None and np.any(data.deviation > 0):
        usable = data.deviation > 0
        terms = ((error[usable] / data.deviation[usable]) ** 2).ravel()
        found["weighted-misfit"] = arb(math.sqrt(math.fsum(terms) / terms.size)), None
    return found


def held(step: str, claim: Claim, truth: Any, where: Any, slack: float = 0.0) -> Finding | None:
    """Return a claim beside the truth; None where it says nothing that could be false."""
    if truth is None or (claim.value is None and not claim.infinite):
        return None
    says = (
        f"{claim.name} {claim.value} + {claim.uncertainty} ({claim.basis}, limit {claim.limit}, holds {claim.holds}); "
        f"truth {'infinite' if truth is INFINITE else truth.mid().str(17, radius=False)} at {where}"
    )
    if claim.infinite:
        return Finding(step, claim.name, claim.basis, None, claim.holds is True, says)
    bound = rational(claim.value) + (rational(claim.uncertainty) if claim.uncertainty is not None else fmpq(0))
    bounded = claim.uncertainty is not None or claim.basis != "measured"
    if truth is INFINITE:
        return Finding(step, claim.name, claim.basis, None, bounded or claim.holds is True, says)
    with bits(128):
        false = bounded and bool(arb(bound) * (1 + slack) < truth)
        if claim.holds is True and claim.limit is not None:
            false = false or bool(arb(rational(claim.limit)) * (1 + slack) < truth)
        ratio = None
        if truth > 0 and bound > 0:
            ratio = float((arb(bound) / truth).log().mid()) / math.log(10)
    return Finding(step, claim.name, claim.basis if bounded else "measured, open", ratio, false, says)
