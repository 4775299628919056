"""Response and peak error of a small continuous single channel in one go.

The definitions, the search and the proof are those of `realize.verification.conversion`; here the polynomials are whole
numbers all along, both claims share one grid, and nothing is done for cases that small plants seldom are. Wherever one
of those shows (dynamics on the axis, a light zero, more zeros than poles, a bound that does not come near), the answer
is None, and the general way is taken.

With G1 = N1/D1, G2 = N2/D2 over the integers, M = N2 D1 - N1 D2 and |P|^2 a polynomial in x = w^2 ::

    |dG| <= e |G1|   where   e^2 |N1|^2 |D2|^2 - |M|^2 > 0
    |dG| <= e c      where   e^2 c^2 |D1|^2 |D2|^2 - |M|^2 > 0
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from flint import fmpq, fmpq_poly, fmpz_poly
from numpy.typing import NDArray

from realize.kernels.exact.numbers import binary_exponent, power_of_two
from realize.kernels.exact.positivity import positive_whole, square_modulus
from realize.schema import Claim, judge
from realize.verification.bands import all_bands, finite_at_zero, thin_grid
from realize.verification.glance import rounded, short
from realize.verification.pair import Pair
from realize.verification.proof import SMALLEST, STEPS, shortened, square_root
from realize.verification.quick import against_largest
from realize.verification.search import LIGHT, vertex

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: Poles of source and result together, at most.
LARGEST = 16
#: So many of the proof's factors are tried; past them the general way does better.
_TRIED = 4
#: Binary exponents of values and powers of x beyond which no doubles are used.
_RANGE = 900
#: Bits of the ends of a band, and of places where it is split: short numbers make short proofs.
_END_BITS, _SPLIT_BITS = 20, 24
DIP, APART = 1.1, 0.1
#: Share of the largest value above which other maxima are places to split at, and how many.
_HIGH, _MOST = 0.9, 3
#: Bits of a square gain in an inequality.
_GAIN_BITS = 64


def small_claims(pair: Pair, response_limit: float | None, peak_limit: float | None) -> tuple[Claim, Claim] | None:
    """Return the claims `response-error` and `peak-error`, or None where the general way has to be taken.

    Parameters
    ----------
    pair : Pair
    response_limit, peak_limit : float or None
    """
    view = pair.source
    if view.model.shape != (1, 1) or view.period is not None or not pair.exact:
        return None
    assert view.fractions is not None and pair.result.fractions is not None
    (n1, d1), (n2, d2) = view.fractions[0][0], pair.result.fractions[0][0]
    if not (0 < d1.degree() and d1.degree() + d2.degree() <= LARGEST and 0 <= n1.degree() <= d1.degree()):
        return None
    if not (d2.degree() > 0 and 0 <= n2.degree() <= d2.degree() and d1[0]):
        return None
    zeros, poles = view.channel_roots[0][0]
    if poles.on_axis.any() or (zeros.s.size and float(zeros.damping.min()) < LIGHT):
        return None
    squares = _Squares(n1, d1, n2, d2)
    if not squares.M:
        return None
    band, at_zero = all_bands(view)[0], finite_at_zero(view)
    grid = np.concatenate([thin_grid(view), [band.low, band.high]])
    grid.sort()
    grid = grid[np.append(True, grid[1:] > grid[:-1])]
    least = grid[1] if grid[0] == 0 else grid[0]
    reach = max(abs(math.log2(w) - squares.unit) for w in (float(least), float(grid[-1])))
    if 2 * reach * (d1.degree() + d2.degree()) > _RANGE:
        return None
    look = squares.look(np.ldexp(grid, -squares.unit), band.low, band.high, at_zero)
    if look is None:
        return None
    relative, absolute, top = look
    response = _root(squares.M, squares.relative, relative[0])
    gain = max(_ratio(squares.n1, squares.d1, top[0]), _ratio(squares.n1, squares.d1, None))
    if not gain:
        return None
    end = _root(squares.M, squares.absolute, None)
    found = _root(squares.M, squares.absolute, absolute[0])
    largest = square_root(gain)
    if not 0 < largest < math.inf or not max(found, end) < math.inf:
        return None
    peak, where = max((found / largest, squares.frequency(absolute[0])), (end / largest, None), key=lambda one: one[0])
    low, high = (squares.end(w, up) for w, up in ((band.low, False), (band.high, True)))
    # the lower end is moved to zero where the source is finite there: one interval instead of two
    dips = [squares.dips(poles.s), squares.dips(zeros.s)]
    first = _bound(
        squares.relative, squares.M, response, fmpq(0) if at_zero else low, high, relative, dips[0] + dips[1]
    )
    if first is None:
        return None
    short_gain, exponent = _cut(gain)
    above, below = squares.absolute * short_gain, squares.M
    above, below = (above * (1 << exponent), below) if exponent >= 0 else (above, below * (1 << -exponent))
    second = _bound(above, below, peak, fmpq(0), None, absolute, dips[0])
    if second is None:
        return None
    return (
        _claim("response-error", response, first, response_limit, squares.frequency(relative[0])),
        _claim("peak-error", peak, second, peak_limit, where),
    )


def _claim(name: str, value: float, bound: float, limit: float | None, where: float | None) -> Claim:
    hidden = math.nextafter(max(bound - value, 0.0), math.inf)
    return judge(name, value, limit=limit, basis="proved", uncertainty=hidden, where={"frequency": where})


class _Squares:
    """Squared moduli of the parts of two fractions, whole polynomials in x = (w / 2^unit)^2."""

    def __init__(self, n1: fmpq_poly, d1: fmpq_poly, n2: fmpq_poly, d2: fmpq_poly) -> None:
        c = d1.coeffs()
        self.unit = (binary_exponent(c[0]) - binary_exponent(c[-1])) // d1.degree()
        N1, D1 = _whole(n1, d1, self.unit)
        N2, D2 = _whole(n2, d2, self.unit)
        self.M = square_modulus(N2 * D1 - N1 * D2)
        self.n1, self.d1, self.d2 = square_modulus(N1), square_modulus(D1), square_modulus(D2)
        self.relative, self.absolute = self.n1 * self.d2, self.d1 * self.d2

    def units(self, w: float) -> float:
        return math.ldexp(w, -self.unit)

    def frequency(self, v: float) -> float:
        return math.ldexp(v, self.unit)

    def end(self, w: float, up: bool) -> fmpq:
        """Return x of an end of a band, moved outwards to a short number."""
        v = self.units(w)
        mantissa, exponent = math.frexp(v * v)
        whole = math.ldexp(mantissa, _END_BITS)
        # v * v is rounded: one unit of the short number is far more
        return fmpq(math.ceil(whole) + 1 if up else math.floor(whole) - 1) * power_of_two(exponent - _END_BITS)

    def dips(self, roots: ComplexArray) -> list[float]:
        """Return where, in x, the squared modulus of a polynomial dips beside its lightly damped roots: the real part
        of the roots of |s - p|^2 |s - p*|^2, which lie near the line there."""
        places = []
        for root in roots.tolist():
            if root.imag > DIP * abs(root.real):
                a, b = self.units(root.real), self.units(root.imag)
                places.append((b - a) * (b + a))
        return places

    def look(self, v: Array, low: float, high: float, at_zero: bool) -> list[list[float]] | None:
        """Return where error over source (within the band), error, and source are large, largest first, in units."""
        low, high = self.units(low), self.units(high)
        table = [against_largest(p.coeffs()) for p in (self.M, self.n1, self.d1, self.d2)]
        degree = max(len(c) for c in table) - 1
        columns = np.array([c + [0.0] * (degree + 1 - len(c)) for c in table]).T[::-1, :, None]

        def quotients(x: Array) -> Array:
            total = np.zeros((4, x.size))
            for column in columns:
                total = total * x + column
            M, N1, D1, D2 = total
            return np.sqrt(np.abs((M / (N1 * D2), M / (D1 * D2), N1 / D1)))

        with np.errstate(all="ignore"):
            sizes = quotients(v * v)
            sizes[0, ~self._inside(v, low, high, at_zero)] = 0.0
            if not np.isfinite(sizes).all():
                return None
            places = _summits(v, sizes)
            places[0] = [min(max(place, low), high) if place else place for place in places[0]]
            again = quotients(np.square([each for found in places for each in found]))
        result, start = [], 0
        for found, size in zip(places, again, strict=True):
            part = size[start : start + len(found)].tolist()
            start += len(found)
            ordered = [short(v) for _, v in sorted(zip(part, found, strict=True), reverse=True)]
            result.append([v for k, v in enumerate(ordered) if all(abs(v - u) > APART * v for u in ordered[:k])])
        return result

    @staticmethod
    def _inside(v: Array, low: float, high: float, at_zero: bool) -> NDArray[np.bool_]:
        inside = (v >= low) & (v <= high)
        if at_zero:
            inside[0] = True
        return inside


def _whole(n: fmpq_poly, d: fmpq_poly, unit: int) -> tuple[fmpz_poly, fmpz_poly]:
    """Return whole polynomials of v = s / 2^unit whose quotient is n / d."""
    degree = d.degree()
    parts = []
    for p, scale in ((n, d.denom()), (d, n.denom())):
        shifts = ((unit * k if unit >= 0 else -unit * (degree - k)) for k in range(degree + 1))
        parts.append(fmpz_poly([(c * scale) << shift for c, shift in zip(p.numer().coeffs(), shifts, strict=False)]))
    return parts[0], parts[1]


def _summits(v: Array, values: Array) -> list[list[float]]:
    """Return places near the highest maxima of each row of samples: vertices of parabolas through three of them."""
    floor = _HIGH * values.max(axis=1, keepdims=True)
    inner = values[:, 1:-1]
    rows, columns = ((inner > floor) & (inner >= values[:, :-2]) & (inner > values[:, 2:])).nonzero()
    found: list[list[float]] = [
        [float(v[k]) for k in (0, -1) if row[k] > least]
        for row, least in zip(values, floor[:, 0].tolist(), strict=True)
    ]
    for row, k in zip(rows.tolist(), columns.tolist(), strict=True):
        if len(found[row]) < _MOST:
            place = vertex(v[k : k + 3].tolist(), values[row, k : k + 3].tolist()) if v[k] > 0 else None
            found[row].append(float(v[k + 1]) if place is None else place)
    # the largest sample itself too: beside an end of the band there is no parabola
    return [[*one, place] for one, place in zip(found, v[values.argmax(axis=1)].tolist(), strict=True)]


def _at(p: fmpz_poly, v: float) -> Any:
    x = fmpq(*v.as_integer_ratio())
    return p(x * x)


def _ratio(above: fmpz_poly, below: fmpz_poly, v: float | None) -> fmpq:
    """Return above / below at x = v^2, at infinity for None."""
    if v is None:
        degree = max(above.degree(), below.degree())
        return fmpq(above[degree], below[degree])
    return _at(above, v) / _at(below, v)


def _root(above: fmpz_poly, below: fmpz_poly, v: float | None) -> float:
    return square_root(_ratio(above, below, v))


def _cut(value: fmpq) -> tuple[int, int]:
    """Return m and e with m 2^e just below a positive rational."""
    p, q = int(value.p), int(value.q)
    e = p.bit_length() - q.bit_length() - _GAIN_BITS
    return (p // (q << e), e) if e >= 0 else ((p << -e) // q, e)


def _bound(
    above: fmpz_poly, below: fmpz_poly, value: float, low: fmpq, high: fmpq | None, near: list[float], dips: list[float]
) -> float | None:
    """Return the first bound above a value for which bound^2 above - below > 0 is proved on [low, high]."""
    start = max(value, SMALLEST)
    places = [v * v for v in near if v > 0]
    places += [x for x in dips if all(abs(x - other) > APART * x for other in places)]
    squares = sorted({fmpq(*rounded(x, _SPLIT_BITS).as_integer_ratio()) for x in places})
    for factor in STEPS[:_TRIED]:
        bound = math.nextafter(start * factor, math.inf)
        p, q = shortened(bound, up=False).as_integer_ratio()
        if positive_whole(above * (p * p) - below * (q * q), low, high, squares):
            return bound
    return None
