"""Common factors of two polynomials: exactly, and within an elementwise relative change of the coefficients.

A number s is a root of p + dp with |dp_k| <= eta |p_k| if and only if |p(s)| <= eta sum |p_k| |s|^k (for complex dp).
The larger one of both backward errors, made small over s, says for each pole and zero how far the coefficients must
move for them to meet. A factor g of several roots is cancelled only with the proof at hand: cofactors u and v, found by
Gauss & Newton steps in high precision, whose products give a change of every coefficient ::

    eta = max_k (|p - g u|_k / |p_k|, |q - g v|_k / |q_k|),    zero coefficients left zero

no larger than the threshold. Sources: Wilkinson, Rounding Errors in Algebraic Processes, 1963 (backward errors of
roots); Karmarkar & Lakshman, On approximate GCDs of univariate polynomials, J. Symbolic Comput. 26, 1998 (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from flint import acb, acb_poly, arb, arb_mat, arb_poly, fmpq, fmpq_poly

from realize.kernels.exact.dense_balls import exponent, middle
from realize.kernels.exact.numbers import exact_value, power_of_two, precision
from realize.kernels.exact.polynomials import ONE, ZERO, quotient, stretched
from realize.kernels.exact.roots import roots

#: Working precision (bits) while factors are sought; coefficients span a few hundred binades at most where it counts.
BITS = 384
#: Steps of Gauss & Newton.
STEPS = 5
#: Pairs whose separate backward errors exceed the threshold by more than this are not tried.
TRIED = 1e3
#: Zero coefficients have to stay below 2^-ZERO_BITS of what their neighbours suggest.
ZERO_BITS = 90


@dataclass(frozen=True)
class Cancelled:
    """A fraction without its common factor.

    Attributes
    ----------
    numerator, denominator : fmpq_poly
        The leading coefficients are those of the source, to within the change of coefficients.
    roots : list of (complex, int)
        Roots that went, and how often each.
    change : float
        Largest relative change of a coefficient that makes the factor common: 0 for an exact one.
    next_change : float
        About the same for one more pole and zero; infinite where there is none.
    """

    numerator: fmpq_poly
    denominator: fmpq_poly
    roots: list[tuple[complex, int]]
    change: float
    next_change: float


def cancel(n: fmpq_poly, d: fmpq_poly, threshold: float) -> Cancelled:
    """Return n / d without the factors that are common exactly, or within a relative change of coefficients.

    Parameters
    ----------
    n, d : polynomials
        d is not zero.
    threshold : float
        Largest relative change of a coefficient; 0 for exact factors only.
    """
    if not n:
        gone = [(root.value, root.multiplicity) for root in roots(d)] if d.degree() > 0 else []
        return Cancelled(ZERO, ONE, gone, 0.0, math.inf)
    common = n.gcd(d)
    gone = [(root.value, root.multiplicity) for root in roots(common)] if common.degree() > 0 else []
    if common.degree() > 0:
        exact = Cancelled(quotient(n, common), quotient(d, common), gone, 0.0, math.inf)
    else:
        exact = Cancelled(n, d, [], 0.0, math.inf)
    if threshold <= 0 or min(exact.numerator.degree(), exact.denominator.degree()) < 1:
        return exact
    return _nearly(n, d, common, exact, threshold)


def _nearly(n: fmpq_poly, d: fmpq_poly, common: fmpq_poly, exact: Cancelled, threshold: float) -> Cancelled:
    with precision(BITS):
        pairs = _pairs(exact.numerator, exact.denominator)
        used: tuple[set[int], set[int]] = (set(), set())
        best, factor, following = exact, arb_poly(common), math.inf
        for rough, i, j, s, mates in pairs:
            if i in used[0] or j in used[1]:
                continue
            if rough > TRIED * threshold:
                following = min(following, rough)
                break
            own = arb_poly([-s.real, 1]) if len(mates) == 1 else arb_poly([abs(s) ** 2, -2 * s.real, 1])
            found = _joint(n, d, factor * own)
            if found is None or not found[0] <= threshold:
                following = min(following, math.inf if found is None else found[0])
                continue
            change, g, u, v = found
            factor = g
            used[0].update(a for a, _ in mates)
            used[1].update(b for _, b in mates)
            value = complex(float(s.real), float(s.imag))
            more = [(value, 1)] if len(mates) == 1 else [(value, 1), (value.conjugate(), 1)]
            best = Cancelled(u, v, [*best.roots, *more], change, math.inf)
    return Cancelled(best.numerator, best.denominator, best.roots, best.change, following)


Pair = tuple[float, int, int, acb, list[tuple[int, int]]]


def _pairs(n: fmpq_poly, d: fmpq_poly) -> list[Pair]:
    """Return (backward error, zero, pole, where they meet, members) of zeros and poles of like type, nearest first."""
    lists = [[root.at(BITS // 2) for root in roots(p) for _ in range(root.multiplicity)] for p in (n, d)]
    found: list[Pair] = []
    mates = [_conjugates(values) for values in lists]
    for i, zero in enumerate(lists[0]):
        for j, pole in enumerate(lists[1]):
            if (mates[0][i] == i) != (mates[1][j] == j) or zero.imag < 0 or pole.imag < 0:
                continue
            members = [(i, j)] if mates[0][i] == i else [(i, j), (mates[0][i], mates[1][j])]
            trials = [acb(zero.mid()), acb(pole.mid()), acb(((zero + pole) / 2).mid())]
            value, s = min(((_backward(n, d, s), s) for s in trials), key=lambda pair: pair[0])
            found.append((value, i, j, s, members))
    return sorted(found, key=lambda pair: pair[:3])


def _conjugates(values: list[acb]) -> list[int]:
    """Return for each root the place of its conjugate, its own place for a real one."""
    mates = list(range(len(values)))
    waiting: list[int] = []
    for k, value in enumerate(values):
        if value.imag == 0:
            continue
        mate = next(
            (w for w in waiting if values[w].real.overlaps(value.real) and values[w].imag.overlaps(-value.imag)), None
        )
        if mate is None:
            waiting.append(k)
        else:
            waiting.remove(mate)
            mates[k], mates[mate] = mate, k
    return mates


def _backward(n: fmpq_poly, d: fmpq_poly, s: acb) -> float:
    size = arb(abs(s).mid())
    worst = 0.0
    for p in (n, d):
        above = abs(acb_poly(p)(s)).mid()
        below = arb_poly([abs(c) for c in p.coeffs()])(size).mid()
        worst = max(worst, float(above / below) if below else math.inf)
    return worst


def _joint(n: fmpq_poly, d: fmpq_poly, factor: arb_poly) -> tuple[float, arb_poly, fmpq_poly, fmpq_poly] | None:
    """Return the change of coefficients that makes a factor near the given one common, that factor, and cofactors."""
    k = factor.degree()
    unit = _unit(d)
    step = power_of_two(unit)
    # with s = 2^unit t the roots are near 1
    sides = [stretched(p, step) for p in (n, d)]
    g = [(c * arb(power_of_two(unit * (i - k)))).mid() for i, c in enumerate(factor.coeffs())]
    weights = [_weights(p) for p in sides]
    targets = [[arb(c) for c in p.coeffs()] for p in sides]
    parts = [_divided(target, g) for target in targets]
    for _ in range(STEPS):
        rows, right = [], []
        sizes = [len(part) for part in parts]
        width = k + sum(sizes)
        for which, (target, part, weight) in enumerate(zip(targets, parts, weights, strict=True)):
            start = k + (sizes[0] if which else 0)
            now = _product(g, part)
            for i, value in enumerate(target):
                row = [arb(0)] * width
                for a in range(k):
                    if 0 <= i - a < len(part):
                        row[a] = (part[i - a] / weight[i]).mid()
                for b in range(len(part)):
                    if 0 <= i - b <= k:
                        row[start + b] = (g[i - b] / weight[i]).mid()
                rows.append(row)
                right.append([((value - now[i]) / weight[i]).mid()])
        J, r = arb_mat(rows), arb_mat(right)
        Jt = J.transpose()
        try:
            move = [x.mid() for x in middle(middle(Jt * J)).solve(middle(Jt * r)).entries()]
        except ZeroDivisionError:
            return None
        if not all(x.is_finite() for x in move):
            return None
        g = [(x + y).mid() for x, y in zip(g[:k], move[:k], strict=True)] + [arb(1)]
        parts = [
            [(x + y).mid() for x, y in zip(parts[0], move[k : k + sizes[0]], strict=True)],
            [(x + y).mid() for x, y in zip(parts[1], move[k + sizes[0] :], strict=True)],
        ]
        if max(exponent(x) for x in move) < -BITS // 2:
            break
    change = 0.0
    for target, part, weight in zip(targets, parts, weights, strict=True):
        for value, here, w in zip(target, _product(g, part), weight, strict=True):
            change = max(change, float((abs(value - here) / w).mid()) * (1.0 if value else 2.0**ZERO_BITS * 1e-16))
    back = [(c * arb(power_of_two(unit * (k - i)))).mid() for i, c in enumerate(g)]
    u, v = (fmpq_poly([exact_value(c) * power_of_two(-unit * (i + k)) for i, c in enumerate(part)]) for part in parts)
    return change, arb_poly(back), u, v


def _unit(p: fmpq_poly) -> int:
    """Return the exponent of about the middle size of the roots."""
    c = p.coeffs()
    low = next(k for k, value in enumerate(c) if value)
    top = len(c) - 1
    if top == low:
        return 0
    ratio = abs(c[low] / c[top])
    return (int(ratio.p).bit_length() - int(ratio.q).bit_length()) // (top - low)


def _weights(p: fmpq_poly) -> list[arb]:
    """Return |p_k|, and for zero coefficients a tiny part of what their neighbours suggest."""
    c = [abs(arb(value)) for value in p.coeffs()]
    present = [k for k, value in enumerate(c) if value]
    weights = []
    for k, value in enumerate(c):
        if value:
            weights.append(value)
            continue
        near = min(present, key=lambda other: abs(other - k))
        weights.append(c[near] * arb(fmpq(1, 1 << ZERO_BITS)))
    return weights


def _divided(target: list[arb], g: list[arb]) -> list[arb]:
    """Return the quotient of a polynomial by a monic one, lowest power first."""
    rest, k = list(target), len(g) - 1
    out = [arb(0)] * max(len(target) - k, 0)
    for i in range(len(out) - 1, -1, -1):
        out[i] = rest[i + k]
        for a in range(k + 1):
            rest[i + a] = (rest[i + a] - out[i] * g[a]).mid()
    return out


def _product(g: list[arb], part: list[arb]) -> list[arb]:
    out = [arb(0)] * (len(g) + len(part) - 1)
    for a, x in enumerate(g):
        for b, y in enumerate(part):
            out[a + b] = out[a + b] + x * y
    return [value.mid() for value in out]
