"""A fitted response with its poles fixed, as passivity sees it: linear in coefficients, with a metric and a grid."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from realize.fitting.records import Fit
from realize.kernels.passive_frequencies import singular_frequencies
from realize.kernels.vector_fitting import real_basis, stacked

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

#: How far inside the boundary the result is put, relative to the gain: rounding in a conversion does not undo it.
MARGIN = 2.0**-24


class Network:
    """A response with fixed poles, linear in its coefficients, in units near 1."""

    def __init__(self, fit: Fit, w: Array, kind: str, period: float | None, symmetric: bool, direct: bool) -> None:
        self.kind, self.period, self.symmetric, self.direct = kind, period, symmetric, direct
        positive = w[w > 0]
        self.shift = 0
        if period is None and positive.size:
            self.shift = round((np.log2(positive[0]) + np.log2(positive[-1])) / 2)
        scale = float(np.ldexp(1.0, -self.shift))
        self.poles = fit.poles * scale
        self.ports = fit.direct.shape[0]
        size = float(np.max(np.abs(fit.residues * scale), initial=0.0))
        top = max(size, float(np.max(np.abs(fit.direct))))
        # scattering has its own unit
        self.lift = 0 if kind == "bounded-real" or top == 0 else int(np.frexp(top)[1])
        unit = float(np.ldexp(1.0, -self.lift))
        if symmetric:
            self.rows, self.columns = np.triu_indices(self.ports)
        else:
            index = np.arange(self.ports**2)
            self.rows, self.columns = index // self.ports, index % self.ports
        residues = fit.residues[:, self.rows, self.columns] * scale * unit
        coefficients = residues.real.copy()
        second = np.flatnonzero(self.poles.imag < 0)
        coefficients[second] = residues[second - 1].imag
        constant = fit.direct[self.rows, self.columns][None] * unit
        self.base = np.vstack([coefficients, constant]) if direct else coefficients
        self.margin = MARGIN
        self.w = w if period is not None else w * scale

    def rounding(self, w: Array) -> float:
        """Return what rounding of large terms that cancel may do to the response, relative to its size."""
        sums = np.max(np.abs(self.basis(w)) @ np.abs(self.base), axis=1)
        size = np.maximum(self.size(w), np.linalg.norm(self.response(w, self.base), ord=2, axis=(1, 2)))
        return float(np.finfo(float).eps * np.max(sums / np.maximum(size, 1e-300)))

    def points(self, w: Array) -> ComplexArray:
        return np.asarray(1j * w if self.period is None else np.exp(1j * w * self.period), dtype=complex)

    def basis(self, w: Array) -> ComplexArray:
        """Return the functions [k][coefficients]; at infinity the direct term, or w^2 times the real part."""
        finite = np.isfinite(w)
        points = self.points(np.where(finite, w, 1.0))
        with np.errstate(divide="ignore", invalid="ignore"):
            columns = real_basis(points, self.poles)
        if self.direct:
            columns = np.hstack([columns, np.ones((w.size, 1))])
        if not finite.all():
            columns[~finite] = self._far()
        return columns

    def _far(self) -> ComplexArray:
        if self.direct:
            return np.append(np.zeros(self.poles.size), 1.0).astype(complex)
        second = self.poles.imag < 0
        size = np.where(self.poles.imag != 0, 2.0, 1.0)
        return np.where(second, 2 * np.roll(self.poles.imag, 1), -size * self.poles.real).astype(complex)

    def response(self, w: Array, coefficients: Array) -> ComplexArray:
        flat = self.basis(w) @ coefficients
        result = np.empty((w.size, self.ports, self.ports), dtype=complex)
        result[:, self.rows, self.columns] = flat
        if self.symmetric:
            result[:, self.columns, self.rows] = flat
        return result

    def size(self, w: Array) -> Array:
        """Return the gain that margins are relative to: that of the model, 1 for scattering."""
        if self.kind == "bounded-real":
            return np.ones(w.size)
        return np.asarray(np.linalg.norm(self.response(w, self.base), ord=2, axis=(1, 2)))

    def states(self, coefficients: Array) -> tuple[Array, Array, Array, Array]:
        """Return a real state model: every pole with all ports."""
        p = self.ports
        full = np.zeros((coefficients.shape[0], p, p))
        full[:, self.rows, self.columns] = coefficients
        if self.symmetric:
            full[:, self.columns, self.rows] = coefficients
        n = self.poles.size
        A, B, C = np.zeros((n, n)), np.zeros(n), np.zeros((p, n, p))
        for k in np.flatnonzero(self.poles.imag >= 0):
            pole = self.poles[k]
            A[k, k] = pole.real
            B[k] = 1.0
            C[:, k] = full[k]
            if pole.imag > 0:
                # x = 1/(s - p): real and imaginary parts, r x + conj
                A[k : k + 2, k : k + 2] = [[pole.real, -pole.imag], [pole.imag, pole.real]]
                C[:, k], C[:, k + 1] = 2 * full[k], -2 * full[k + 1]
        unit = np.eye(p)
        D = full[-1] if self.direct else np.zeros((p, p))
        inputs = np.asarray(np.kron(B[:, None], unit), dtype=float)
        return np.asarray(np.kron(A, unit), dtype=float), inputs, C.reshape(p, n * p), np.asarray(D)

    def singular(self, coefficients: Array) -> Array:
        """Return the frequencies where the Hamiltonian pencil says that the sign may change."""
        A, B, C, D = self.states(coefficients)
        level = 1.0 if self.kind == "bounded-real" else 0.0
        if self.period is None:
            return singular_frequencies(A, B, C, D, self.kind, level)
        unit = np.eye(A.shape[0])
        mapped = np.asarray(np.linalg.solve(A + unit, np.hstack([A - unit, B])), dtype=float)
        n = A.shape[0]
        left = np.asarray(np.linalg.solve((A + unit).T, C.T).T, dtype=float)
        found = singular_frequencies(mapped[:, :n], 2 * mapped[:, n:], left, D - C @ mapped[:, n:], self.kind, level)
        return np.asarray(2 * np.arctan(found) / self.period)


class Metric:
    """Coordinates x of a change, in which its weighted size over the data's lines is the length of x."""

    def __init__(self, network: Network, fit: Fit, pinned: bool) -> None:
        points = network.points(network.w)
        keep = ~np.any(points[:, None] == network.poles[None, :], axis=1)
        columns = network.basis(network.w[keep])
        still = network.basis(np.zeros(1))[0].real if pinned else None
        unit = float(np.ldexp(1.0, network.lift))
        with np.errstate(divide="ignore"):
            inverse = np.where(np.isfinite(fit.deviation), unit / fit.deviation, 0.0)[keep]
        if not np.all(np.isfinite(inverse)):
            # data without any noise: every line alike
            inverse = np.ones(inverse.shape)
        first = inverse[:, network.rows, network.columns]
        second = inverse[:, network.columns, network.rows]
        both = np.where(network.rows == network.columns, 0.0, 1.0) if network.symmetric else 0.0
        weights = np.sqrt(first**2 + both * second**2)
        self.maps: list[Array] = []
        for c in range(network.rows.size):
            matrix = stacked(weights[:, c, None] * columns)
            norm = np.linalg.norm(matrix, axis=0)
            norm = np.where(norm > 0, norm, 1.0)
            matrix = matrix / norm
            free = np.eye(norm.size)
            if still is not None:
                free = np.linalg.qr((still / norm)[:, None], mode="complete")[0][:, 1:]
            _, sizes, right = np.linalg.svd(matrix @ free, full_matrices=False)
            sizes = np.maximum(sizes, max(matrix.shape) * np.finfo(float).eps * sizes[0])
            self.maps.append((free @ (right.T / sizes)) / norm[:, None])
        self.starts = np.cumsum([0] + [m.shape[1] for m in self.maps])

    def coefficients(self, x: Array) -> Array:
        """Return the change of the coefficients [coefficients][channels]."""
        parts = [m @ x[a:b] for m, a, b in zip(self.maps, self.starts[:-1], self.starts[1:], strict=True)]
        return np.array(parts).T

    def row(self, values: ComplexArray, shares: ComplexArray) -> Array:
        """Return the derivative of Re sum_c shares_c basis @ coefficients_c."""
        return np.concatenate([(share * values).real @ m for share, m in zip(shares, self.maps, strict=True)])


def grid_of(network: Network) -> Array:
    """Return frequencies where to look: 0, the lines, around every pole, far out, and infinity."""
    lines = network.w[network.w > 0]
    if lines.size > 600:
        lines = lines[np.unique(np.rint(np.linspace(0, lines.size - 1, 600)).astype(int))]
    poles = network.poles if network.period is None else np.log(network.poles) / network.period
    upper = poles[poles.imag >= 0]
    around = (upper.imag[:, None] + np.array([-3, -1, -0.3, 0, 0.3, 1, 3]) * np.abs(upper.real)[:, None]).ravel()
    size = np.abs(upper)[np.abs(upper) > 0]
    ends = np.concatenate([lines, size])
    wide = np.geomspace(ends.min() / 1e3, ends.max() * 1e3, 120)
    every = np.concatenate([np.zeros(1), lines, around[around > 0], size, wide])
    last = np.inf
    if network.period is not None:
        last = np.pi / network.period
        every = every[every < last]
    every = np.unique(np.append(every, last))
    points = network.points(np.where(np.isfinite(every), every, 1.0))
    at_pole = np.any(points[:, None] == network.poles[None, :], axis=1) & np.isfinite(every)
    return np.asarray(every[~at_pole])
