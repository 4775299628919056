"""Simultaneous iteration for all roots of a polynomial of higher degree, and the certificate that isolates them."""

from __future__ import annotations

import cmath
import math

import numpy as np
from flint import acb, acb_poly, arb, fmpq_poly, fmpz_poly
from numpy.typing import NDArray

from realize.kernels.exact.numbers import power_of_two, precision
from realize.kernels.exact.polynomials import stretched

#: Iterations in all, and the precision (bits) at which the iteration gives up.
ITERATIONS, CAP_BITS = 400, 16_384


def isolated_roots(f: fmpz_poly) -> list[acb] | None:
    """Return disjoint balls, one a root: real roots without imaginary part, the others from the upper half-plane.

    Ehrlich-Aberth iteration z <- z - N / (1 - N sum_j 1 / (z - z_j)), N = p / p', with p and p' in ball arithmetic of
    growing precision, from starting points on the circles of the Newton polygon. The disc of radius n |p / p'| around
    any point holds a root; n disjoint discs hold one each. A disc whose mirror image meets no other disc holds a real
    root if it meets the real axis.

    Sources: Aberth, Math. Comp. 27, 1973; Bini, Numerical Algorithms 13, 1996 (starting points); Henrici, Applied and
    Computational Complex Analysis 1, 1974, theorem 6.4g (discs).

    Returns
    -------
    list of balls, or None if the iteration has not come to an end: then another method has to be taken.
    """
    n = f.degree()
    unit = _unit(f)
    scaled = stretched(fmpq_poly(f), power_of_two(unit))
    z = _start(scaled)
    if z is None:
        return None
    points = [acb(complex(x)) for x in z]
    slope = scaled.derivative()
    bits, goal = 64, 2.0**-40
    done = np.zeros(n, dtype=bool)
    for _ in range(ITERATIONS):
        with precision(bits):
            p, dp = acb_poly(scaled), acb_poly(slope)
            z = np.array([complex(x) for x in points])
            pull = _pull(z, points)
            stuck = False
            for i in range(n):
                if done[i]:
                    continue
                value, rate = p(points[i]), dp(points[i])
                if value.is_zero():
                    done[i] = True
                    continue
                if value.rel_accuracy_bits() < 4:
                    stuck = True
                    continue
                newton = complex(value / rate) if not rate.contains(0) else complex(math.nan)
                step = newton / (1 - newton * pull[i]) if newton == newton else complex(math.nan)
                if not (cmath.isfinite(step)):
                    step = complex(abs(z[i]) / (7 + i), abs(z[i]) / (11 + i))
                points[i] = (points[i] - acb(step)).mid()
                done[i] = abs(step) <= goal * abs(z[i])
        if done.all():
            found = _certified(scaled, slope, points, bits)
            if found is not None:
                return [_moved(ball, unit) for ball in found]
            done[:] = False
            goal = goal * goal if goal > 1e-280 else 0.0
            stuck = True
        if stuck:
            bits *= 2
            if bits > CAP_BITS:
                return None
    return None


def _unit(f: fmpz_poly) -> int:
    """Return the binary exponent of the geometric mean of the moduli of the roots."""
    low, high = int(f[0]), int(f.leading_coefficient())
    return round((low.bit_length() - high.bit_length()) / f.degree())


def _moved(ball: acb, unit: int) -> acb:
    with precision(max(ball.real.bits(), ball.imag.bits()) + 64):
        return ball * arb(power_of_two(unit))


def _start(p: fmpq_poly) -> NDArray[np.complex128] | None:
    """Return starting points on circles whose radii are the slopes of the upper hull of log2 of the coefficients."""
    sizes = [(k, int(c.p).bit_length() - int(c.q).bit_length()) for k, c in enumerate(p.coeffs()) if c]
    hull: list[tuple[int, int]] = []
    for point in sizes:
        while len(hull) > 1 and (hull[-1][1] - hull[-2][1]) * (point[0] - hull[-2][0]) <= (point[1] - hull[-2][1]) * (
            hull[-1][0] - hull[-2][0]
        ):
            hull.pop()
        hull.append(point)
    z = []
    for k, ((a, low), (b, high)) in enumerate(zip(hull, hull[1:], strict=False)):
        exponent = (low - high) / (b - a)
        if abs(exponent) > 900:
            return None
        for j in range(b - a):
            z.append(2.0**exponent * cmath.exp(1j * (2 * math.pi * j / (b - a) + 0.7 + 2 * math.pi * k / (p.degree() + 1))))
    return np.array(z)


def _pull(z: NDArray[np.complex128], points: list[acb]) -> NDArray[np.complex128]:
    """Return sum over j of 1 / (z_i - z_j); pairs too close for doubles by their balls."""
    gap = z[:, None] - z[None, :]
    np.fill_diagonal(gap, 1.0)
    close = np.abs(gap) < 1e-6 * np.abs(z)[:, None]
    for i, j in np.argwhere(close):
        if i != j:
            exact = complex(points[i] - points[j])
            gap[i, j] = exact if exact else abs(z[i]) * 1e-17 * (1 + 1j) * (1 if i > j else -1)
    inverse = 1 / gap
    np.fill_diagonal(inverse, 0.0)
    return inverse.sum(axis=1)


def _certified(p: fmpq_poly, slope: fmpq_poly, points: list[acb], bits: int) -> list[acb] | None:
    """Return the balls of real and upper roots if the discs are disjoint and the real ones are told, else None."""
    n = p.degree()
    with precision(2 * bits):
        value, rate = acb_poly(p), acb_poly(slope)
        discs = []
        for point in points:
            r = value(point) / rate(point)
            if not r.is_finite():
                return None
            radius = (n * r).abs_upper()
            discs.append(acb(point.real + arb(0, radius), point.imag + arb(0, radius)))
    z = np.array([complex(point) for point in points])
    radii = np.array([float(disc.real.rad()) for disc in discs])
    gap = np.abs(z[:, None] - z[None, :])
    mirrored = np.abs(z[:, None] - z.conj()[None, :])
    reach = 2 * (radii[:, None] + radii[None, :]) + 1e-14 * np.abs(z)[:, None]
    for i, j in np.argwhere(gap <= reach):
        if i < j and discs[i].overlaps(discs[j]):
            return None
    real = np.array([disc.imag.contains(0) for disc in discs])
    for i, j in np.argwhere(mirrored <= reach):
        if i != j and real[i]:
            with precision(2 * bits + 64):
                if discs[i].conjugate().overlaps(discs[j]):
                    return None
    found = [acb(disc.real) if real[i] else disc for i, disc in enumerate(discs) if real[i] or disc.imag > 0]
    count = int(real.sum()) + 2 * sum(1 for i, disc in enumerate(discs) if not real[i] and disc.imag > 0)
    return found if count == n else None
