"""Impulse responses of exact rational functions: Markov parameters, and values at equal steps of time."""

from __future__ import annotations

import math

import numpy as np
from flint import arb, arb_mat, fmpq, fmpq_poly
from numpy.typing import NDArray

from realize.kernels.exact.numbers import near_ball, nearest, precision

Array = NDArray[np.float64]
#: Relative accuracy (bits) asked of each value, and the precision (bits) at which it stops asking.
VALUE_BITS, LAST_BITS = 60, 8192


def sampled_terms(n: fmpq_poly, d: fmpq_poly, count: int) -> tuple[Array, Array]:
    """Return the coefficients of z^0, z^-1, ... of n / d, deg n <= deg d, correctly rounded, and error bounds."""
    degree = d.degree()
    lead = d.leading_coefficient()
    below = [c / lead for c in reversed(d.coeffs()[:degree])]
    above = [c / lead for c in reversed(n.coeffs() + [fmpq(0)] * (degree + 1 - n.length()))]
    found: list[fmpq] = []
    for k in range(count):
        value = above[k] if k <= degree else fmpq(0)
        for j in range(min(k, degree)):
            if below[j]:
                value -= below[j] * found[k - 1 - j]
        found.append(value)
    values = np.array([nearest(value) for value in found])
    exact = np.array(
        [
            fmpq(*v.as_integer_ratio()) == x if math.isfinite(v) else False
            for v, x in zip(values.tolist(), found, strict=True)
        ]
    )
    return values, np.where(exact, 0.0, np.spacing(np.abs(values)))


def values_at_steps(n: fmpq_poly, d: fmpq_poly, step: float, count: int) -> tuple[Array, Array]:
    """Return the inverse Laplace transform of n / d, deg n < deg d, at 0, step, 2 step, ..., and error bounds.

    h(t) = c exp(A t) b in companion form, exp(A step) and its products with b in ball arithmetic; the precision is
    doubled until every value is known to 60 bits relative to itself, up to 8192 bits: then to that absolute radius.

    Parameters
    ----------
    step : float
        s; the exact value of the double counts.
    """
    degree = d.degree()
    if not n or degree < 1:
        return np.zeros(count), np.zeros(count)
    lead = d.leading_coefficient()
    a = [c / lead for c in d.coeffs()[:degree]]
    c = [x / lead for x in n.coeffs()] + [fmpq(0)] * (degree - n.length())
    T = fmpq(*step.as_integer_ratio())
    # the unit of time is a power of two near the step: entries of A T stay alike
    bits = 128 + 4 * count.bit_length() * degree
    while True:
        with precision(bits):
            companion = [[arb(0)] * degree for _ in range(degree)]
            for k in range(degree - 1):
                companion[k][k + 1] = arb(T)
            companion[-1] = [arb(-x * T) for x in a]
            phi = arb_mat(companion).exp()
            state = arb_mat([[arb(int(k == degree - 1))] for k in range(degree)])
            row = arb_mat([[arb(x) for x in c]])
            balls = []
            for k in range(count):
                balls.append((row * state)[0, 0])
                if k < count - 1:
                    state = phi * state
            if degree and balls[0].contains(0) and not c[-1]:
                balls[0] = arb(0)
            good = all(ball.is_exact() or ball.rel_accuracy_bits() >= VALUE_BITS for ball in balls)
            if good or bits >= LAST_BITS:
                values = np.array([near_ball(ball) for ball in balls])
                radius = np.array(
                    [math.nextafter(float(ball.rad()), math.inf) if not ball.is_exact() else 0.0 for ball in balls]
                )
                return values, radius + np.where(values != 0, np.spacing(np.abs(values)), 0.0)
        bits *= 2
