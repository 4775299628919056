"""Invented systems with known poles for the fitting tests."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True)
class System:
    """Poles, residues [n][outputs][inputs] and direct term with known values."""

    poles: ComplexArray
    residues: ComplexArray
    direct: NDArray[np.float64]

    def at(self, s: ComplexArray) -> ComplexArray:
        return np.einsum("kn,npm->kpm", 1 / (s[:, None] - self.poles), self.residues) + self.direct


@pytest.fixture(scope="session")
def invented() -> Callable[..., System]:
    def build(
        order: int,
        shape: tuple[int, int] = (1, 1),
        *,
        seed: int = 0,
        band: tuple[float, float] = (0.1, 10.0),
        damping: tuple[float, float] = (3e-3, 0.3),
    ) -> System:
        rng = np.random.default_rng(seed)
        w = np.exp(rng.uniform(*np.log(band), order // 2))
        zeta = np.exp(rng.uniform(*np.log(damping), order // 2))
        poles: list[complex] = []
        residues: list[ComplexArray] = []
        for size, ratio in zip(w, zeta, strict=True):
            pole = complex(size * (-ratio + 1j * np.sqrt(1 - ratio**2)))
            residue = (rng.normal(size=shape) + 1j * rng.normal(size=shape)) * 0.3 * size
            poles += [pole, pole.conjugate()]
            residues += [residue, residue.conj()]
        if order % 2:
            poles.append(complex(-np.exp(rng.uniform(*np.log(band)))))
            residues.append(rng.normal(size=shape) * abs(poles[-1]) + 0j)
        return System(np.array(poles, dtype=complex), np.array(residues).reshape(order, *shape), rng.normal(size=shape))

    return build


@pytest.fixture(scope="session")
def complex_noise() -> Callable[..., ComplexArray]:
    """Complex noise with mean square 1."""

    def build(shape: tuple[int, ...], seed: int) -> ComplexArray:
        rng = np.random.default_rng([seed, 77])
        return (rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2)

    return build
