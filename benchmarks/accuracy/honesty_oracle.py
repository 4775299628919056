"""Truth about two models in exact rational arithmetic, for holding claims against it.

Shares no code with `realize.verification` or `realize.kernels`: fractions are formed here from the definition of each
kind, over the rationals of python-flint. Values at a frequency are certified balls around the exact value; of a sampled
model, at exact rational points of the unit circle. A largest value that was found is therefore a lower bound of the
truth, and a claim below it is false.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from fractions import Fraction
from functools import cached_property, partial
from typing import Any

import honesty_polynomials
import numpy as np
from flint import acb, acb_poly, arb, ctx, fmpq, fmpq_mat, fmpq_poly

from realize.models import (
    MatrixFraction,
    Model,
    PoleResidue,
    SecondOrder,
    Sections,
    StateSpace,
    TransferFunction,
    ZeroPoleGain,
)

Poly = Any
Pair = tuple[Any, Any]
Span = tuple[float, float]

S = fmpq_poly([0, 1])
ONE = fmpq_poly([1])
#: Zeros and poles with less damping have an interval of this relative half-width (definition of the claims).
LIGHT = 1e-4
#: Edges of bands are moved inwards by this, so that no rounding of an edge makes a claim false.
EDGE = 1e-9
#: A root of a sampled model this near to the unit circle, in units of eps, counts as on it.
CIRCLE = 4 * np.finfo(float).eps
#: Order beyond which state models are solved point by point.
LARGEST = 48


@contextmanager
def bits(precision: int) -> Iterator[None]:
    before = ctx.prec
    ctx.prec = precision
    try:
        yield
    finally:
        ctx.prec = before


def rational(value: Any) -> fmpq:
    if isinstance(value, fmpq):
        return value
    value = Fraction(value)
    return fmpq(value.numerator, value.denominator)


class _Numbers:
    """Entries of a field, exact decimals in place of doubles where there are some."""

    def __init__(self, model: Model, name: str) -> None:
        self.table = model.decimals.get(name, {})

    def real(self, value: Any, *index: int) -> fmpq:
        return rational(Fraction(self.table[index]) if index in self.table else float(value))

    def pair(self, value: complex, *index: int) -> Pair:
        return self.real(value.real, *index, 0), self.real(value.imag, *index, 1)


def _from_roots(roots: list[Pair]) -> Poly:
    """Product of (s - root): pairs as quadratics, each counted once for the member above the axis."""
    total = ONE
    for re, im in roots:
        if im == 0:
            total *= S - fmpq_poly([re])
        elif im > 0:
            total *= fmpq_poly([re * re + im * im, -2 * re, 1])
    return total


def _interpolated(value: Callable[[fmpq], fmpq], degree: int) -> Poly:
    """Newton's divided differences at 0, 1, -1, 2, ..."""
    points = [fmpq((k + 1) // 2 * (1 if k % 2 else -1)) for k in range(degree + 1)]
    table = [value(x) for x in points]
    for step in range(1, degree + 1):
        for k in range(degree, step - 1, -1):
            table[k] = (table[k] - table[k - 1]) / (points[k] - points[k - step])
    total = fmpq_poly([])
    for k in range(degree, -1, -1):
        total = total * (S - fmpq_poly([points[k]])) + fmpq_poly([table[k]])
    return total


def _states(model: StateSpace) -> list[list[Pair]]:
    n = model.A.shape[0]
    p, m = model.shape
    A, B, C, D = (
        [[rational(float(x)) for x in row] for row in matrix] for matrix in (model.A, model.B, model.C, model.D)
    )
    if n == 0:
        return [[(fmpq_poly([D[i][j]]), ONE) for j in range(m)] for i in range(p)]
    if model.E is None:
        base = fmpq_mat(A)
        d = base.charpoly()
        grid = []
        for i in range(p):
            row = []
            for j in range(m):
                moved = fmpq_mat([[A[r][c] - B[r][j] * C[i][c] for c in range(n)] for r in range(n)])
                row.append((moved.charpoly() - d + d * fmpq_poly([D[i][j]]), d))
            grid.append(row)
        return grid
    E = [[rational(float(x)) for x in row] for row in model.E]

    def bordered(i: int | None, j: int | None) -> Callable[[fmpq], fmpq]:
        def value(x: fmpq) -> fmpq:
            rows = [[x * E[r][c] - A[r][c] for c in range(n)] for r in range(n)]
            if i is not None and j is not None:
                rows = [[*rows[r], B[r][j]] for r in range(n)] + [[*(-C[i][c] for c in range(n)), D[i][j]]]
            return fmpq_mat(rows).det()

        return value

    d = _interpolated(bordered(None, None), n)
    return [[(_interpolated(bordered(i, j), n), d) for j in range(m)] for i in range(p)]


def _residues(model: PoleResidue) -> list[list[Pair]]:
    p, m = model.shape
    poles, residues, direct = (_Numbers(model, name) for name in ("poles", "residues", "direct"))
    values = [poles.pair(complex(pole), k) for k, pole in enumerate(model.poles)]
    highest: dict[Pair, int] = {}
    for pole, power in zip(values, model.powers, strict=True):
        if pole[1] >= 0:
            key = (str(pole[0]), str(pole[1]))
            highest[key] = max(highest.get(key, 0), int(power))
    factors = {(str(a), str(b)): _from_roots([(a, b)]) for a, b in values if b >= 0}
    d = ONE
    for key, power in highest.items():
        d *= factors[key] ** power
    grid = []
    for i in range(p):
        row = []
        for j in range(m):
            n = fmpq_poly([])
            for k, matrix in enumerate(model.direct):
                n = n * S + fmpq_poly([direct.real(matrix[i, j], k, i, j)])
            n = n * d
            for k, (a, b) in enumerate(values):
                if b < 0:
                    continue
                power = int(model.powers[k])
                re, im = residues.pair(complex(model.residues[k, i, j]), k, i, j)
                rest = d // factors[str(a), str(b)] ** power
                if b == 0:
                    n += rest * fmpq_poly([re])
                    continue
                # r (s - conj p)^k + its conjugate = 2 Re
                x, y = fmpq_poly([re]), fmpq_poly([im])
                for _ in range(power):
                    x, y = x * (S - fmpq_poly([a])) - y * fmpq_poly([b]), y * (S - fmpq_poly([a])) + x * fmpq_poly([b])
                n += rest * x * 2
            row.append((n, d))
        grid.append(row)
    return grid


def fractions_of(model: Model) -> list[list[Pair]]:
    """Return the exact (numerator, denominator) of each channel, nothing cancelled."""
    p, m = model.shape
    if isinstance(model, StateSpace):
        return _states(model)
    if isinstance(model, PoleResidue):
        return _residues(model)
    if isinstance(model, TransferFunction):
        sides = [_Numbers(model, name) for name in ("numerator", "denominator")]
        return [
            [
                tuple(
                    fmpq_poly([side.real(c, i, j, k) for k, c in enumerate(values[i][j])][::-1])
                    for side, values in zip(sides, (model.numerator, model.denominator), strict=True)
                )
                for j in range(m)
            ]
            for i in range(p)
        ]
    if isinstance(model, ZeroPoleGain):
        zeros, poles, gain = (_Numbers(model, name) for name in ("zeros", "poles", "gain"))
        return [
            [
                (
                    _from_roots([zeros.pair(complex(z), i, j, k) for k, z in enumerate(model.zeros[i][j])])
                    * fmpq_poly([gain.real(model.gain[i, j], i, j)]),
                    _from_roots([poles.pair(complex(z), i, j, k) for k, z in enumerate(model.poles[i][j])]),
                )
                for j in range(m)
            ]
            for i in range(p)
        ]
    if isinstance(model, Sections):
        entry = _Numbers(model, "sections")
        texts = model.decimals.get("gain", {})
        n = fmpq_poly([rational(Fraction(next(iter(texts.values()))) if texts else float(model.gain))])
        d = ONE
        for k, section in enumerate(model.sections):
            above, below = (fmpq_poly([entry.real(section[w, c], k, w, c) for c in (2, 1, 0)]) for w in (0, 1))
            n, d = n * above, d * below
        return [[(n, d)]]
    if isinstance(model, MatrixFraction):
        return honesty_polynomials.matrix_fraction(model, partial(_Numbers, model))
    if isinstance(model, SecondOrder):
        return honesty_polynomials.second_order(model, partial(_Numbers, model))
    raise TypeError(model.kind)


@dataclass(frozen=True)
class Spot:
    """One root: size and damping of its continuous equivalent (rad/s), on the axis or not, inside the stable region."""

    size: float
    natural: float
    damping: float
    on_axis: bool
    inside: bool


def spots(polynomial: Poly, period: fmpq | None) -> list[Spot]:
    """Return the distinct roots of a polynomial, those at s = 0 (z = 1) with size 0, those at z = 0 left out."""
    if polynomial.degree() < 1:
        return []
    found = []
    with bits(400):
        for root, _ in (polynomial / polynomial.gcd(polynomial.derivative())).numer().complex_roots():
            s = acb(root)
            if period is None:
                edge, inside = s.real.contains(0), bool(s.real < 0)
            else:
                if s.contains(0):
                    continue
                radius = s.real * s.real + s.imag * s.imag - 1
                edge = radius.contains(0) or bool(abs(radius) < 2 * CIRCLE)
                inside = bool(radius < 0)
                s = acb(0) if (s - 1).contains(0) else s.log() / arb(period)
            size = float(abs(s).mid())
            natural = abs(float(s.imag.mid()))
            damping = abs(float(s.real.mid())) / size if size else 0.0
            found.append(Spot(size, natural, damping, bool(edge), inside))
    return found


class Side:
    """One model: exact fractions, roots, and values at frequencies, remembered."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.period = rational(model.time.exact_period) if model.time.sampled else None
        self.p, self.m = model.shape
        self.full = fractions_of(model)
        self.grid = [[self._cancelled(n, d) for n, d in row] for row in self.full]
        self.flat = [pair for row in self.grid for pair in row]
        self._balls: dict[tuple[int, int], Any] = {}
        self._kept: list[Any] = []
        #: Largest gains by range of frequencies, as they were found.
        self.gains: dict[Any, Any] = {}

    @staticmethod
    def _cancelled(n: Poly, d: Poly) -> Pair:
        if n.degree() < 0:
            return n, ONE
        common = n.gcd(d)
        return n // common, d // common

    @cached_property
    def zeros(self) -> list[list[Spot]]:
        return [spots(n, self.period) for n, _ in self.flat]

    @cached_property
    def poles(self) -> list[list[Spot]]:
        return [spots(d, self.period) for _, d in self.flat]

    @cached_property
    def all_poles(self) -> list[Spot]:
        return [spot for row in self.poles for spot in row]

    @cached_property
    def common_zeros(self) -> list[Spot]:
        common = None
        for n, _ in self.flat:
            if n.degree() >= 0:
                common = n if common is None else common.gcd(n)
        return [] if common is None else spots(common, self.period)

    @property
    def origin(self) -> int:
        return 0 if self.period is None else 1

    @cached_property
    def pole_at_origin(self) -> bool:
        return any(d(self.origin) == 0 for _, d in self.flat)

    @property
    def top(self) -> float:
        return math.inf if self.period is None else math.pi / float(Fraction(int(self.period.p), int(self.period.q)))

    def band(self, k: int | None = None) -> Span | None:
        """Return the dynamic band of a channel or of all, edges as they are; None without poles and zeros."""
        rows = range(len(self.flat)) if k is None else [k]
        sizes = [spot.size for r in rows for spot in self.zeros[r] + self.poles[r] if spot.size > 0]
        if not sizes:
            return None
        high = min(10 * max(sizes), self.top)
        return min(min(sizes) / 10, high), high

    @cached_property
    def stable(self) -> bool:
        """True if every pole is inside; those of a state model include what no channel shows."""
        if isinstance(self.model, StateSpace):
            return all(spot.inside for spot in spots(self.full[0][0][1], self.period))
        return all(spot.inside for row in self.poles for spot in row)

    def value(self, polynomial: Poly, z: Callable[[], acb], exact: Pair | None) -> acb:
        """Return a ball of at least 60 correct bits around a polynomial at a point; exactly 0 where it vanishes."""
        for precision in (256, 1024, 4096, 16384):
            key = (id(polynomial), precision)
            with bits(precision):
                if key not in self._balls:
                    self._balls[key] = acb_poly(polynomial)
                    self._kept.append(polynomial)
                ball = self._balls[key](z())
                if abs(ball).rel_accuracy_bits() > 60:
                    return ball
            if precision == 1024 and exact is not None and _at(polynomial, exact) == (0, 0):
                return acb(0)
        return ball


def _at(polynomial: Poly, point: Pair) -> Pair:
    re, im = fmpq(0), fmpq(0)
    x, y = point
    for c in reversed(polynomial.coeffs()):
        re, im = re * x - im * y + c, re * y + im * x
    return re, im


INFINITE = math.inf


class Truth:
    """Source and result; everything about their difference."""

    def __init__(self, source: Side, result: Side) -> None:
        self.source, self.result = source, result
        self.shape = source.p, source.m
        self.cross = [(n2 * d1 - n1 * d2) for (n1, d1), (n2, d2) in zip(source.flat, result.flat, strict=True)]
        self._values: dict[float, tuple[list[Any], list[Any]]] = {}

    @property
    def identical(self) -> bool:
        return all(c.degree() < 0 for c in self.cross)

    def point(self, w: float) -> tuple[Callable[[], acb], Pair]:
        """Return a point of the axis, or of the unit circle within a rounding of the frequency, exactly."""
        if self.source.period is None:
            exact = fmpq(0), rational(w)
        elif w >= self.source.top * (1 - 1e-15):
            exact = fmpq(-1), fmpq(0)
        else:
            t = rational(math.tan(w * float(self.source.model.time.seconds) / 2))
            below = 1 + t * t
            exact = (1 - t * t) / below, 2 * t / below
        return (lambda: acb(arb(exact[0]), arb(exact[1]))), exact

    def at(self, w: float) -> tuple[list[Any], list[Any]]:
        """Return dG and G of each channel as balls; `INFINITE` at a pole."""
        if w not in self._values:
            self._values[w] = self._limit() if math.isinf(w) else self._at(w)
        return self._values[w]

    def _at(self, w: float) -> tuple[list[Any], list[Any]]:
        z, exact = self.point(w)
        one, two = self.source, self.result
        values: dict[str, acb] = {}

        def of(side: Side, polynomial: Poly) -> acb:
            if polynomial.degree() == 0:
                return acb(polynomial[0])
            key = id(polynomial)
            if key not in values:
                values[key] = side.value(polynomial, z, exact)
            return values[key]

        difference, gain = [], []
        with bits(128):
            for (n1, d1), (_, d2), cross in zip(one.flat, two.flat, self.cross, strict=True):
                a, b = of(one, d1), of(two, d2)
                gain.append(acb(0) if n1.degree() < 0 else INFINITE if a == 0 else of(one, n1) / a)
                if cross.degree() < 0:
                    difference.append(acb(0))
                else:
                    difference.append(INFINITE if a == 0 or b == 0 else of(two, cross) / (a * b))
        return difference, gain

    def _limit(self) -> tuple[list[Any], list[Any]]:
        def limit(n: Poly, d: Poly) -> Any:
            if n.degree() < d.degree():
                return acb(0)
            return INFINITE if n.degree() > d.degree() else acb(n[n.degree()] / d[d.degree()])

        with bits(128):
            return (
                [
                    limit(cross, d1 * d2)
                    for (_, d1), (_, d2), cross in zip(self.source.flat, self.result.flat, self.cross, strict=True)
                ],
                [limit(n, d) for n, d in self.source.flat],
            )


def norm(values: Sequence[Any]) -> Any:
    """Return the Frobenius norm as a ball."""
    if any(value is INFINITE for value in values):
        return INFINITE
    if len(values) == 1:
        return abs(values[0])
    total = arb(0)
    for value in values:
        size = abs(value)
        total += size * size
    return total.sqrt() if total != 0 else arb(0)


def singular(values: Sequence[Any], shape: tuple[int, int]) -> Any:
    """Return the largest singular value, to about 1e-14."""
    if len(values) == 1 or 1 in shape:
        return norm(values)
    size = norm(values)
    if size is INFINITE or not size > 0:
        return size
    scaled = [complex(value / size) for value in values]
    return size * arb(float(np.linalg.svd(np.array(scaled).reshape(shape), compute_uv=False)[0]))


def quotient(above: Any, below: Any) -> Any:
    if above is INFINITE:
        return INFINITE
    if not above > 0:
        return arb(0)
    if below is INFINITE:
        return arb(0)
    return above / below if below > 0 else INFINITE


def level(value: Any) -> float:
    """Return log of a ball, for ordering."""
    if value is INFINITE:
        return math.inf
    return float(value.mid().log()) if value > 0 else -math.inf
