"""Shared by all tests: exact responses by the rational arithmetic of Python alone, and command line helpers."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

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

# worker processes inherit this: two of them with two threads of linear algebra each wait for each other on two cores
for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

Gaussian = tuple[Fraction, Fraction]
ZERO: Gaussian = (Fraction(0), Fraction(0))
ONE: Gaussian = (Fraction(1), Fraction(0))


def _add(a: Gaussian, b: Gaussian) -> Gaussian:
    return a[0] + b[0], a[1] + b[1]


def _sub(a: Gaussian, b: Gaussian) -> Gaussian:
    return a[0] - b[0], a[1] - b[1]


def _mul(a: Gaussian, b: Gaussian) -> Gaussian:
    return a[0] * b[0] - a[1] * b[1], a[0] * b[1] + a[1] * b[0]


def _div(a: Gaussian, b: Gaussian) -> Gaussian:
    size = b[0] * b[0] + b[1] * b[1]
    top = _mul(a, (b[0], -b[1]))
    return top[0] / size, top[1] / size


def _number(value: Any) -> Gaussian:
    if isinstance(value, complex):
        return Fraction(value.real), Fraction(value.imag)
    return Fraction(value), Fraction(0)


def _power(base: Gaussian, exponent: int) -> Gaussian:
    result = ONE
    for _ in range(exponent):
        result = _mul(result, base)
    return result


class Oracle:
    """Exact values of a model at rational points, from the definition of its kind and the fractions of Python.

    Shares no code with the package beyond the arrays (and exact decimals) of the model.
    """

    @staticmethod
    def _entries(model: Model, name: str) -> Callable[..., Fraction]:
        table = model.decimals.get(name, {})

        def entry(value: Any, *index: int) -> Fraction:
            return Fraction(table[index]) if index in table else Fraction(float(value))

        return entry

    @classmethod
    def _root(cls, model: Model, name: str, value: complex, *index: int) -> Gaussian:
        entry = cls._entries(model, name)
        return entry(value.real, *index, 0), entry(value.imag, *index, 1)

    @classmethod
    def at(cls, model: Model, s: Gaussian) -> list[list[Gaussian]]:
        """Return the rational part, outputs x inputs, at the point s; raises ZeroDivisionError at a pole."""
        p, m = model.shape
        grid = [[ZERO] * m for _ in range(p)]
        if isinstance(model, TransferFunction):
            for i in range(p):
                for j in range(m):
                    parts = []
                    for name in ("numerator", "denominator"):
                        entry, value = cls._entries(model, name), ZERO
                        for k, c in enumerate(getattr(model, name)[i][j]):
                            value = _add(_mul(value, s), (entry(c, i, j, k), Fraction(0)))
                        parts.append(value)
                    grid[i][j] = _div(*parts)
        elif isinstance(model, ZeroPoleGain):
            for i in range(p):
                for j in range(m):
                    value = (cls._entries(model, "gain")(model.gain[i, j], i, j), Fraction(0))
                    for k, zero in enumerate(model.zeros[i][j].tolist()):
                        value = _mul(value, _sub(s, cls._root(model, "zeros", zero, i, j, k)))
                    for k, pole in enumerate(model.poles[i][j].tolist()):
                        value = _div(value, _sub(s, cls._root(model, "poles", pole, i, j, k)))
                    grid[i][j] = value
        elif isinstance(model, PoleResidue):
            for i in range(p):
                for j in range(m):
                    value = ZERO
                    for matrix in model.direct:
                        value = _add(_mul(value, s), _number(float(matrix[i, j])))
                    for k, pole in enumerate(model.poles.tolist()):
                        below = _power(_sub(s, _number(pole)), int(model.powers[k]))
                        value = _add(value, _div(_number(complex(model.residues[k, i, j])), below))
                    grid[i][j] = value
        elif isinstance(model, Sections):
            entry = cls._entries(model, "sections")
            gain = model.decimals.get("gain", {})
            value = (Fraction(next(iter(gain.values()))) if gain else Fraction(model.gain), Fraction(0))
            for k, pair in enumerate(model.sections):
                parts = []
                for side in (0, 1):
                    part = ZERO
                    for c in range(3):
                        part = _add(_mul(part, s), (entry(pair[side, c], k, side, c), Fraction(0)))
                    parts.append(part)
                value = _div(_mul(value, parts[0]), parts[1])
            grid[0][0] = value
        elif isinstance(model, StateSpace):
            x = cls._solve(model, s)
            n = model.A.shape[0]
            for i in range(p):
                for j in range(m):
                    value = _number(float(model.D[i, j]))
                    for k in range(n):
                        c = Fraction(float(model.C[i, k]))
                        value = _add(value, (c * x[k][j][0], c * x[k][j][1]))
                    grid[i][j] = value
        elif isinstance(model, MatrixFraction):
            N, D = (cls._polynomial_matrix(model, name, s) for name in ("numerator", "denominator"))
            if model.side == "right":
                flipped = cls._eliminate(
                    [[*a, *b] for a, b in zip(zip(*D, strict=True), zip(*N, strict=True), strict=True)]
                )
                return [list(column) for column in zip(*flipped, strict=True)]
            return cls._eliminate([[*a, *b] for a, b in zip(D, N, strict=True)])
        elif isinstance(model, SecondOrder):
            K, D, M = (cls._matrix(model, name) for name in ("stiffness", "damping", "mass"))
            reads = [cls._matrix(model, f"{name}_output") for name in ("position", "velocity", "acceleration")]
            F, direct = cls._matrix(model, "input"), cls._matrix(model, "direct")
            powers = [ONE, s, _mul(s, s)]
            rows = [
                [cls._sum(powers, [part[i][k] for part in (K, D, M)]) for k in range(len(M))]
                + [(value, Fraction(0)) for value in F[i]]
                for i in range(len(M))
            ]
            x = cls._eliminate(rows)
            for i in range(p):
                for j in range(m):
                    value = (direct[i][j], Fraction(0))
                    for k in range(len(M)):
                        value = _add(value, _mul(cls._sum(powers, [part[i][k] for part in reads]), x[k][j]))
                    grid[i][j] = value
        else:
            raise TypeError(model.kind)
        return grid

    @classmethod
    def _polynomial_matrix(cls, model: Model, name: str, s: Gaussian) -> list[list[Gaussian]]:
        entry, values = cls._entries(model, name), getattr(model, name)
        total = [[ZERO] * values.shape[2] for _ in range(values.shape[1])]
        for k, matrix in enumerate(values):
            for i, row in enumerate(matrix):
                for j, value in enumerate(row):
                    total[i][j] = _add(_mul(total[i][j], s), (entry(value, k, i, j), Fraction(0)))
        return total

    @classmethod
    def _matrix(cls, model: Model, name: str) -> list[list[Fraction]]:
        entry = cls._entries(model, name)
        return [[entry(value, i, j) for j, value in enumerate(row)] for i, row in enumerate(getattr(model, name))]

    @staticmethod
    def _sum(powers: list[Gaussian], values: list[Fraction]) -> Gaussian:
        total = ZERO
        for power, value in zip(powers, values, strict=True):
            total = _add(total, (power[0] * value, power[1] * value))
        return total

    @classmethod
    def _solve(cls, model: StateSpace, s: Gaussian) -> list[list[Gaussian]]:
        """Gauss-Jordan elimination of (s E - A) X = B over the Gaussian rationals."""
        n, m = model.B.shape
        E = np.eye(n) if model.E is None else model.E
        rows = [
            [_sub(_mul(s, _number(float(E[i, k]))), _number(float(model.A[i, k]))) for k in range(n)]
            + [_number(float(model.B[i, j])) for j in range(m)]
            for i in range(n)
        ]
        return cls._eliminate(rows)

    @staticmethod
    def _eliminate(rows: list[list[Gaussian]]) -> list[list[Gaussian]]:
        """Return X of P X = Q from the rows of [P Q]."""
        n = len(rows)
        for k in range(n):
            pivot = next((r for r in range(k, n) if rows[r][k] != ZERO), None)
            if pivot is None:
                raise ZeroDivisionError("a pole")
            rows[k], rows[pivot] = rows[pivot], rows[k]
            inverse = _div(ONE, rows[k][k])
            rows[k] = [_mul(value, inverse) if value != ZERO else ZERO for value in rows[k]]
            for r in range(n):
                factor = rows[r][k]
                if r != k and factor != ZERO:
                    rows[r] = [
                        _sub(a, _mul(factor, b)) if b != ZERO else a for a, b in zip(rows[r], rows[k], strict=True)
                    ]
        return [row[n:] for row in rows]

    @staticmethod
    def point(model: Model, frequency: float) -> Gaussian:
        """Return jw, or a rational point of the unit circle within 1e-12 of exp(jwT)."""
        if not model.time.sampled:
            return Fraction(0), Fraction(frequency)
        t = Fraction(math.tan(0.5 * frequency * model.time.seconds)).limit_denominator(10**9)
        below = 1 + t * t
        return (1 - t * t) / below, 2 * t / below

    @classmethod
    def error(cls, source: Model, result: Model, frequency: Sequence[float], *, channels: bool = False) -> float:
        """Return the largest relative error over frequencies, by Frobenius norms or of the worst channel."""
        worst = 0.0
        for w in frequency:
            s = cls.point(source, w)
            one, two = cls.at(source, s), cls.at(result, s)
            above, below = Fraction(0), Fraction(0)
            for row_one, row_two in zip(one, two, strict=True):
                for a, b in zip(row_one, row_two, strict=True):
                    d = _sub(b, a)
                    difference, size = d[0] ** 2 + d[1] ** 2, a[0] ** 2 + a[1] ** 2
                    if channels:
                        worst = max(worst, _root_ratio(difference, size))
                    above, below = above + difference, below + size
            if not channels:
                worst = max(worst, _root_ratio(above, below))
        return worst

    @classmethod
    def sizes(cls, source: Model, result: Model, frequency: Sequence[float]) -> tuple[float, float]:
        """Return the largest Frobenius norms of the difference and of the source over the frequencies."""
        top, gain = 0.0, 0.0
        for w in frequency:
            s = cls.point(source, w)
            one, two = cls.at(source, s), cls.at(result, s)
            pairs = [(a, b) for x, y in zip(one, two, strict=True) for a, b in zip(x, y, strict=True)]
            differences = [_sub(b, a) for a, b in pairs]
            top = max(top, root(sum((d[0] ** 2 + d[1] ** 2 for d in differences), Fraction(0))))
            gain = max(gain, root(sum((a[0] ** 2 + a[1] ** 2 for a, _ in pairs), Fraction(0))))
        return top, gain


def _root_ratio(above: Fraction, below: Fraction) -> float:
    if above == 0:
        return 0.0
    return math.inf if below == 0 else root(above / below)


def root(value: Fraction) -> float:
    """Return the square root of a fraction of any size as a double."""
    if value == 0:
        return 0.0
    shift = (value.numerator.bit_length() - value.denominator.bit_length()) // 2
    return math.ldexp(math.sqrt(value / Fraction(4) ** shift), shift)


@pytest.fixture(scope="session")
def oracle() -> type[Oracle]:
    """Exact responses by an independent method."""
    return Oracle


@dataclass
class Ran:
    """What a command left behind."""

    status: int
    out: str
    err: str

    @property
    def record(self) -> Any:
        """Standard output as JSON, NaN and infinities refused."""
        return json.loads(self.out, parse_constant=_refuse)


def _refuse(text: str) -> None:
    raise AssertionError(f"{text} in JSON")


@pytest.fixture
def run(capfd: pytest.CaptureFixture[str]) -> Callable[..., Ran]:
    """Run a command in this process; no traceback may appear."""
    from realize.commands.main import run as run_command

    def call(*arguments: Any) -> Ran:
        capfd.readouterr()
        status = run_command([str(argument) for argument in arguments])
        out, err = capfd.readouterr()
        assert "Traceback" not in err, err
        return Ran(status, out, err)

    return call


@pytest.fixture
def spawn() -> Callable[..., Ran]:
    """Run a command in a real process."""

    def call(*arguments: Any, stdin: bytes | None = None, cwd: Path | None = None) -> Ran:
        done = subprocess.run(
            [sys.executable, "-m", "realize", *(str(argument) for argument in arguments)],
            input=stdin if stdin is not None else b"",
            capture_output=True,
            cwd=cwd,
            timeout=60,
            env={**os.environ, "OMP_NUM_THREADS": "1"},
        )
        return Ran(done.returncode, done.stdout.decode(), done.stderr.decode())

    return call
