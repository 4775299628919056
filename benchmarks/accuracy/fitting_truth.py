"""Invented modal truths, their noise, and their Cramer-Rao bounds: what benchmarks/accuracy/fitting_statistics.py fits.

Nothing here is shared with the package: responses and derivatives are written out from the partial fractions, and the
bound is the inverse of the Fisher information of all unknowns (poles, mode shapes, direct terms) together:
F = 2 Re sum conj(J) J^T / deviation^2 for circular complex noise whose mean square is deviation^2 (S. M. Kay,
Fundamentals of Statistical Signal Processing: Estimation Theory, 1993, chapter 15; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

LINES = 2000
TOP = 2 * np.pi * 100.0
#: A mode counts as above the noise where the bound of its damping's deviation is under this share of the damping.
ABOVE = 0.1


@dataclass(frozen=True)
class Truth:
    """Poles with positive imaginary part (or real), their shapes c b^T, a direct term and a known dead time."""

    pairs: np.ndarray
    singles: np.ndarray
    left: np.ndarray
    right: np.ndarray
    direct: np.ndarray
    w: np.ndarray
    dead_time: float = 0.0

    @property
    def order(self) -> int:
        return 2 * self.pairs.size + self.singles.size

    @property
    def poles(self) -> np.ndarray:
        return np.concatenate([self.pairs, self.singles.astype(complex)])

    def response(self) -> np.ndarray:
        """Return [k][outputs][inputs], without the dead time."""
        s = 1j * self.w[:, None]
        shapes = np.einsum("np,nm->npm", self.left, self.right)
        H = np.einsum("kn,npm->kpm", 1 / (s - self.poles), shapes)
        n = self.pairs.size
        return H + np.einsum("kn,npm->kpm", 1 / (s - self.pairs.conj()), shapes[:n].conj()) + self.direct

    def derivatives(self) -> np.ndarray:
        """Return d response / d unknowns, [unknown][k][outputs][inputs], complex shapes as real and imaginary parts."""
        s = 1j * self.w
        rows = []
        for j, pole in enumerate(self.poles):
            shape = np.outer(self.left[j], self.right[j])
            paired = j < self.pairs.size
            one = 1 / (s - pole)
            two = 1 / (s - pole.conjugate())
            for unit in (1, 1j) if paired else (1,):
                slope = unit * one[:, None, None] ** 2 * shape
                rows.append(slope + (np.conj(unit * shape) * two[:, None, None] ** 2 if paired else 0))
            for vector, other, side in ((self.left[j], self.right[j], 0), (self.right[j], self.left[j], 1)):
                for i in range(vector.size):
                    for unit in (1, 1j) if paired else (1,):
                        d = np.zeros((self.left.shape[1], self.right.shape[1]), complex)
                        if side == 0:
                            d[i] = unit * other
                        else:
                            d[:, i] = unit * other
                        rows.append(one[:, None, None] * d + (two[:, None, None] * d.conj() if paired else 0))
        for i in range(self.direct.size):
            d = np.zeros(self.direct.size)
            d[i] = 1
            rows.append(np.broadcast_to(d.reshape(self.direct.shape), (s.size, *self.direct.shape)).astype(complex))
        return np.array(rows)

    def bounds(self, deviation: np.ndarray) -> np.ndarray:
        """Return the smallest deviations [pairs][2] that frequency (rad/s) and damping ratio can have."""
        J = (self.derivatives() / deviation).reshape(-1, deviation.size)
        A = np.sqrt(2) * np.hstack([J.real, J.imag])
        size = np.linalg.norm(A, axis=1)
        # a shape c b^T is not changed by c z, b / z: as many singular values vanish as there are such z
        u, d, _ = np.linalg.svd(A / size[:, None], full_matrices=False)
        free = 2 * self.pairs.size + self.singles.size
        keep = slice(0, d.size - free)
        root = (u[:, keep] / d[keep]) / size[:, None]
        per = 2 + 2 * (self.left.shape[1] + self.right.shape[1])
        result = np.empty((self.pairs.size, 2))
        for j, pole in enumerate(self.pairs):
            at = np.abs(pole)
            a, b = pole.real, pole.imag
            slopes = np.array([[a / at, b / at], [-(b**2) / at**3, a * b / at**3]])
            result[j] = np.linalg.norm(slopes @ root[per * j : per * j + 2], axis=1)
        return result


def _shapes(rng: np.random.Generator, pairs: np.ndarray, shape: tuple[int, int]) -> tuple[np.ndarray, np.ndarray]:
    """Return real mode shapes between 0.5 and 1.5 in size, with the residue of a second-order section."""
    p, m = shape
    left = rng.uniform(0.5, 1.5, (pairs.size, p)) * rng.choice([-1.0, 1.0], (pairs.size, p))
    right = rng.uniform(0.5, 1.5, (pairs.size, m)) * rng.choice([-1.0, 1.0], (pairs.size, m))
    # peaks of like height: residue in proportion to the half width
    return left * (-pairs.real)[:, None] * (-1j), right + 0j


def spread(seed: int, shape: tuple[int, int], count: int, damping: float, jitter: float = 0.3) -> Truth:
    """Return modes of one damping spread over the band."""
    rng = np.random.default_rng([seed, *shape, count])
    place = (np.arange(count) + 0.5 + rng.uniform(-jitter, jitter, count)) / count
    size = TOP * (0.05 + 0.9 * place)
    pairs = size * (-damping + 1j * np.sqrt(1 - damping**2))
    left, right = _shapes(rng, pairs, shape)
    w = TOP * np.arange(1, LINES + 1) / LINES
    return Truth(pairs, np.zeros(0), left, right, rng.uniform(-0.1, 0.1, shape), w)


def close(seed: int, shape: tuple[int, int]) -> Truth:
    """Return five couples of modes that lie two to three half widths apart."""
    rng = np.random.default_rng([seed, *shape, 5])
    place = (np.arange(5) + 0.5 + rng.uniform(-0.2, 0.2, 5)) / 5
    first = TOP * (0.1 + 0.85 * place)
    size = np.concatenate([first, first * (1 + 2 * 0.005 * rng.uniform(1, 1.5, 5))])
    pairs = size * (-0.005 + 1j * np.sqrt(1 - 0.005**2))
    left, right = _shapes(rng, pairs, shape)
    w = TOP * np.arange(1, LINES + 1) / LINES
    return Truth(pairs, np.zeros(0), left, right, rng.uniform(-0.1, 0.1, shape), w)


def heavy(seed: int, shape: tuple[int, int]) -> Truth:
    """Return four modes with damping ratios from 0.1 to 0.4, an octave and more apart, over two decades."""
    rng = np.random.default_rng([seed, *shape, 4])
    size = TOP * np.array([0.02, 0.06, 0.18, 0.54]) * np.exp(rng.uniform(-0.15, 0.15, 4))
    zeta = rng.uniform(0.1, 0.4, 4)
    pairs = size * (-zeta + 1j * np.sqrt(1 - zeta**2))
    left, right = _shapes(rng, pairs, shape)
    w = TOP * np.arange(1, LINES + 1) / LINES
    return Truth(pairs, np.zeros(0), left, right, rng.uniform(-0.1, 0.1, shape), w)


def integrating(seed: int, shape: tuple[int, int]) -> Truth:
    """Return an integrator and five modes at 1 % damping; the RMS of the integrator is that of the modes."""
    one = spread(seed, shape, 5, 0.01)
    rng = np.random.default_rng([seed, *shape, 6])
    # mean square of 1/w over the lines is nearly 1/(w_first^2 LINES) pi^2/6
    size = np.sqrt(np.mean(np.abs(one.response()) ** 2)) * one.w[0] * np.sqrt(LINES * 6) / np.pi
    left = np.vstack([one.left, size * rng.uniform(0.5, 1.5, (1, shape[0]))])
    right = np.vstack([one.right, rng.uniform(0.5, 1.5, (1, shape[1]))])
    return Truth(one.pairs, np.zeros(1), left, right, one.direct, one.w)


def delayed(seed: int, shape: tuple[int, int]) -> Truth:
    """Return ten modes behind a dead time of 3.7 samples, sampling at twice the highest line."""
    one = spread(seed, shape, 10, 0.005)
    return Truth(one.pairs, one.singles, one.left, one.right, one.direct, one.w, 3.7 * np.pi / TOP)


def uneven(seed: int, shape: tuple[int, int]) -> Truth:
    """Return eight modes of 0.3 to 3 % damping whose shapes differ in size by a factor of up to twenty."""
    rng = np.random.default_rng([seed, *shape, 8])
    one = spread(seed, shape, 8, 0.01, 0.2)
    zeta = np.exp(rng.uniform(np.log(0.003), np.log(0.03), 8))
    size = np.abs(one.pairs)
    pairs = size * (-zeta + 1j * np.sqrt(1 - zeta**2))
    left = one.left * np.exp(rng.uniform(-np.log(20), 0, (8, 1)))
    return Truth(pairs, one.singles, left, one.right, one.direct, one.w)


def noisy(truth: Truth, level: float, kind: str, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the measured response (dead time included) and the true deviation of each entry.

    ``level`` is relative to the RMS of each channel ("constant") or to each value ("proportional").
    """
    rng = np.random.default_rng([seed, 991])
    H = truth.response()
    size = np.sqrt(np.mean(np.abs(H) ** 2, axis=0, keepdims=True)) if kind == "constant" else np.abs(H)
    deviation = level * size * np.ones(H.shape)
    error = deviation * (rng.standard_normal(H.shape) + 1j * rng.standard_normal(H.shape)) / np.sqrt(2)
    turned = np.exp(-1j * truth.w * truth.dead_time)[:, None, None]
    return H * turned + error, deviation
