"""Families of single-channel plants for the accuracy benchmarks: invented parameters, known formulas."""

from __future__ import annotations

from collections.abc import Iterator
from fractions import Fraction

import numpy as np
import scipy.signal

import realize


def _closed(roots: np.ndarray) -> list[complex]:
    """Return the roots as an exactly conjugate list."""
    roots = np.asarray(roots, dtype=complex)
    real = [complex(r.real) for r in roots if abs(r.imag) <= 1e-13 * abs(r)]
    upper = [
        complex(r) if abs(r.real) > 1e-13 * abs(r) else complex(0, r.imag) for r in roots if r.imag > 1e-13 * abs(r)
    ]
    return real + [z for r in upper for z in (r, r.conjugate())]


def decimal(value: Fraction) -> str:
    """Return a decimal string of 40 digits."""
    import flint

    from realize.kernels.exact.numbers import decimal_string

    return decimal_string(flint.fmpq(value.numerator, value.denominator), 40)


def exact_product(roots: list[complex]) -> list[Fraction]:
    """Return the exact coefficients of the monic polynomial, highest power first."""
    total = [Fraction(1)]
    for r in [r for r in roots if r.imag >= 0]:
        re, im = Fraction(r.real), Fraction(r.imag)
        factor = [Fraction(1), -re] if r.imag == 0 else [Fraction(1), -2 * re, re * re + im * im]
        new = [Fraction(0)] * (len(total) + len(factor) - 1)
        for i, a in enumerate(total):
            for j, b in enumerate(factor):
                new[i + j] += a * b
        total = new
    return total


def coefficients(
    zeros: list[complex], poles: list[complex], gain: float | Fraction, time: realize.TimeBase | None = None
) -> realize.TransferFunction:
    """Return the transfer function of the factors: coefficients correctly rounded, as decimals beyond the doubles."""
    fields: dict[str, list[float]] = {}
    decimals: dict[str, dict[tuple[int, int, int], str]] = {}
    for name, roots, factor in (("numerator", zeros, Fraction(gain)), ("denominator", poles, Fraction(1))):
        values, strings = [], {}
        for k, value in enumerate(exact_product(roots)):
            value *= factor
            try:
                number = value.numerator / value.denominator
            except OverflowError:
                number = np.inf
            if not np.isfinite(number) or (value and abs(number) < 1e-300):
                strings[0, 0, k] = decimal(value)
            values.append(number)
        fields[name], decimals[name] = values, strings
    common = {} if time is None else {"time": time}
    return realize.TransferFunction(**fields, decimals=decimals, **common)


def _filters() -> Iterator[tuple[str, tuple]]:
    """Yield filters designed at 1 rad/s and moved by exact factors, so that no gain leaves the double range."""
    unit = {
        "Butterworth": lambda n, wn, kind: scipy.signal.butter(n, wn, kind, analog=True, output="zpk"),
        "Chebyshev": lambda n, wn, kind: scipy.signal.cheby1(n, 1, wn, kind, analog=True, output="zpk"),
        "elliptic": lambda n, wn, kind: scipy.signal.ellip(n, 0.5, 60, wn, kind, analog=True, output="zpk"),
    }

    def moved(make):  # type: ignore[no-untyped-def]
        def design(n, wn, kind):  # type: ignore[no-untyped-def]
            w0 = float(np.min(wn))
            z, p, k = make(n, np.asarray(wn) / w0 if kind == "bandpass" else 1.0, kind)
            return z * w0, p * w0, Fraction(float(k)) * Fraction(w0) ** (len(p) - len(z))

        return design

    designs = {name: moved(make) for name, make in unit.items()}
    for name, design in designs.items():
        for f in (1.0, 1e3, 1e6, 1e9):
            for n in (4, 8, 12, 20, 30, 40):
                yield f"{name} {n} low-pass {f:g} Hz", design(n, 2 * np.pi * f, "lowpass")
            for n in (2, 4, 6, 10, 15, 20):
                yield f"{name} {2 * n} band-pass {f:g} Hz", design(n, [2 * np.pi * f, 3 * np.pi * f], "bandpass")
            for n in (4, 9):
                yield f"{name} {n} high-pass {f:g} Hz", design(n, 2 * np.pi * f, "highpass")


def continuous() -> Iterator[tuple[str, realize.TransferFunction]]:
    """Yield (name, transfer function) of every continuous family."""
    for name, (z, p, k) in _filters():
        yield name, coefficients(_closed(z), _closed(p), k)
    for n in (1, 2, 3, 5, 10, 20):
        yield f"1/(s+1)^{n}", coefficients([], [-1.0 + 0j] * n, 1.0)
    for n in (10, 20, 30):
        yield f"poles -1..-{n}", coefficients([], [complex(-k) for k in range(1, n + 1)], 1.0)
    for count in (5, 20, 40, 60):
        for damping in (0.001, 0.005, 0.01):
            yield f"{count} modes, damping {damping:g}", modes(count, damping)
    rng = np.random.default_rng(11)
    for trial in range(12):
        sizes = 10.0 ** rng.uniform(-3, 9, 6)
        poles = [complex(-s) for s in sizes]
        zeros = [complex(-s) for s in 10.0 ** rng.uniform(-3, 9, trial % 4)]
        yield f"time scales 1e-3..1e9, {trial}", coefficients(zeros, poles, 1.0)
    for gain in (1e-300, 1e-14, 1e150, 1e300):
        yield f"gain {gain:g}", coefficients([-5.0 + 0j], [-1.0 + 0j, -2.0 + 0j], gain)


def modes(count: int, damping: float) -> realize.TransferFunction:
    """Return a collocated flexible structure: alternating zeros and poles, damping the same."""
    frequencies = 10.0 * np.cumsum(1 + 0.3 * np.sin(np.arange(count) * 2.4))
    between = np.sqrt(frequencies[1:] * frequencies[:-1])

    def pairs(w: np.ndarray) -> list[complex]:
        upper = w * (-damping + 1j * np.sqrt(1 - damping**2))
        return [z for r in upper.tolist() for z in (r, r.conjugate())]

    return coefficients(pairs(between), pairs(frequencies), 1.0)


def sampled() -> Iterator[tuple[str, realize.TransferFunction]]:
    """Yield (name, transfer function) of the sampled families."""
    for rate in (10.0, 1e3, 48e3):
        time = realize.TimeBase("sampled", rate=rate)
        for n in (2, 4, 8, 12, 20):
            for cut in (0.001, 0.01, 0.1, 0.3):
                if n > 8 and cut < 0.01:
                    continue
                for name, made in (
                    ("Butterworth", scipy.signal.butter(n, 2 * cut, output="zpk")),
                    ("Chebyshev", scipy.signal.cheby1(n, 1, 2 * cut, output="zpk")),
                    ("elliptic", scipy.signal.ellip(n, 0.5, 60, 2 * cut, output="zpk")),
                ):
                    z, p, k = made
                    yield (
                        f"sampled {name} {n}, cut-off {cut:g} of {rate:g} Hz",
                        coefficients(_circle(z), _closed(p), float(k), time),
                    )


def _circle(zeros: np.ndarray) -> list[complex]:
    """Return zeros with those near -1 exactly there."""
    return _closed(np.where(np.abs(zeros + 1) < 1e-6, -1.0, zeros))
