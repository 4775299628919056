"""Families of generated models for the honesty benchmark: every kind, continuous and sampled, one to six channels."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from itertools import pairwise
from typing import Any

import numpy as np
import scipy.signal
from families import _closed, coefficients

from realize.models import Model, PoleResidue, Sections, StateSpace, TimeBase, TransferFunction, ZeroPoleGain

Rng = np.random.Generator
Roots = list[complex]


def _size(rng: Rng, low: float, high: float) -> float:
    return float(10.0 ** rng.uniform(low, high))


def _short(value: float) -> float:
    """Return the value with few digits, as people write them."""
    return float(f"{value:.4g}")


def _pair(w: float, damping: float) -> Roots:
    re, im = -damping * w, w * float(np.sqrt(1 - damping**2))
    return [complex(re, im), complex(re, -im)]


def _expanded(roots: Roots) -> np.ndarray:
    return np.atleast_1d(np.real(np.poly(roots)))


def _kind(rng: Rng, zeros: Roots, poles: Roots, gain: float, time: TimeBase | None = None) -> Model:
    """Return a plant given by its factors as one of the kinds that can be written from them."""
    common: dict[str, Any] = {} if time is None else {"time": time}
    choice = rng.integers(4)
    if choice == 0:
        with np.errstate(all="ignore"):
            numerator, denominator = gain * _expanded(zeros), _expanded(poles)
        fits = np.all(np.isfinite(numerator)) and np.all(np.isfinite(denominator)) and denominator[0] != 0
        if fits:
            return TransferFunction(numerator=numerator.tolist(), denominator=denominator.tolist(), **common)
    if choice == 1 and time is None:
        return coefficients(zeros, poles, Fraction(gain), time)
    return ZeroPoleGain(zeros=zeros, poles=poles, gain=gain, **common)


def filters(rng: Rng) -> Model:
    order = int(rng.integers(1, 11))
    band = str(rng.choice(["lowpass", "highpass", "bandpass"]))
    w = _size(rng, -3, 9)
    edges: Any = [1.0, 1.0 + float(rng.uniform(0.02, 2))] if band == "bandpass" else 1.0
    order = (order + 1) // 2 if band == "bandpass" else order
    name = rng.integers(3)
    if name == 0:
        z, p, k = scipy.signal.butter(order, edges, band, analog=True, output="zpk")
    elif name == 1:
        z, p, k = scipy.signal.cheby1(order, float(rng.uniform(0.1, 3)), edges, band, analog=True, output="zpk")
    else:
        z, p, k = scipy.signal.ellip(order, 0.5, float(rng.uniform(30, 90)), edges, band, analog=True, output="zpk")
    return _kind(rng, _closed(z * w), _closed(p * w), float(np.real(k)) * w ** (len(p) - len(z)))


def repeated(rng: Rng) -> Model:
    pole = -_short(_size(rng, -2, 4))
    count = int(rng.integers(2, 9))
    poles = [complex(pole)] * count
    if rng.random() < 0.4:
        poles += _pair(abs(pole) * _size(rng, -1, 1), 0.3) * int(rng.integers(1, 3))
    zeros = [complex(-_short(_size(rng, -2, 4)))] * int(rng.integers(0, 3))
    return _kind(rng, zeros, poles, abs(pole) ** count)


def ladder(rng: Rng) -> Model:
    count = int(rng.integers(2, 14))
    return _kind(rng, [], [complex(-k) for k in range(1, count + 1)], 1.0)


def modes(rng: Rng) -> Model:
    count = int(rng.integers(1, 6))
    w = np.sort(10.0 ** rng.uniform(0, 3, count)).tolist()
    poles = [z for f in w for z in _pair(f, _size(rng, -9, -1.5))]
    zeros = [z for a, b in pairwise(w) for z in _pair((a * b) ** 0.5, _size(rng, -9, -1.5))]
    return _kind(rng, zeros, poles, _size(rng, -2, 6))


def scales(rng: Rng) -> Model:
    poles = [complex(-_size(rng, -3, 9)) for _ in range(int(rng.integers(2, 8)))]
    zeros = [complex(-_size(rng, -3, 9)) for _ in range(int(rng.integers(0, len(poles))))]
    return _kind(rng, zeros, poles, _size(rng, -6, 6))


def gains(rng: Rng) -> Model:
    return _kind(rng, [-5.0 + 0j], [-1.0 + 0j, -2.0 + 0j, *_pair(3.0, 0.1)], _size(rng, -300, 300))


def integrators(rng: Rng) -> Model:
    poles = [0j] * int(rng.integers(0, 4)) + [complex(-_size(rng, -2, 3)) for _ in range(int(rng.integers(0, 4)))]
    zeros = [0j] * int(rng.integers(0, 3)) if not poles or poles[0] != 0 else [complex(-_size(rng, -2, 3))]
    return _kind(rng, zeros[: len(poles)], poles, _size(rng, -3, 3))


def notches(rng: Rng) -> Model:
    zeros, poles = [], []
    for _ in range(int(rng.integers(1, 4))):
        w = _short(_size(rng, 0, 3))
        zeros += [complex(0, w), complex(0, -w)]
        poles += _pair(w * float(rng.uniform(0.9, 1.1)), float(rng.uniform(0.001, 0.7)))
    return _kind(rng, zeros, poles, 1.0)


def undamped(rng: Rng) -> Model:
    poles = []
    for _ in range(int(rng.integers(1, 3))):
        w = _short(_size(rng, -1, 3))
        poles += [complex(0, w), complex(0, -w)]
    poles += [complex(-_size(rng, -1, 3)) for _ in range(int(rng.integers(0, 3)))]
    return _kind(rng, [], poles, _size(rng, -3, 3))


def cancelling(rng: Rng) -> Model:
    poles = [complex(-_short(_size(rng, -1, 2))) for _ in range(int(rng.integers(1, 4)))] + _pair(5.0, 0.2)
    distance = 0.0 if rng.random() < 0.5 else _size(rng, -15, -4)
    shared = complex(_short(_size(rng, -1, 2)) * (1 if rng.random() < 0.3 else -1))
    return _kind(rng, [shared * (1 + distance)], [*poles, shared], 1.0)


def improper(rng: Rng) -> Model:
    poles = [complex(-_size(rng, -1, 2)) for _ in range(int(rng.integers(0, 3)))]
    zeros = [complex(-_size(rng, -1, 2)) for _ in range(len(poles) + int(rng.integers(1, 4)))]
    return _kind(rng, zeros, poles, _size(rng, -3, 3))


def constants(rng: Rng) -> Model:
    return _kind(rng, [], [], float(rng.choice([0.0, 1.0, -2.5, 1e-300, 1e300, 0.1])))


def unstable(rng: Rng) -> Model:
    poles = [complex(_size(rng, -1, 2)), complex(-_size(rng, -1, 2)), *_pair(_size(rng, -1, 2), -0.2)]
    poles += [complex(-_size(rng, -1, 2)) for _ in range(int(rng.integers(0, 3)))]
    return _kind(rng, [complex(_size(rng, -1, 2))], poles, _size(rng, -2, 2))


def _clock(rng: Rng) -> TimeBase:
    choice = rng.integers(3)
    if choice == 0:
        return TimeBase("sampled", period=_short(_size(rng, -6, 1)))
    return TimeBase("sampled", rate=str(rng.choice(["44100", "48000", "10", "1000"])))


def sampled_filters(rng: Rng) -> Model:
    order, cut = int(rng.integers(1, 8)), _size(rng, -4, -0.35)
    name = rng.integers(3)
    if name == 0:
        z, p, k = scipy.signal.butter(order, 2 * cut, output="zpk")
    elif name == 1:
        z, p, k = scipy.signal.cheby1(order, 1, 2 * cut, output="zpk")
    else:
        z, p, k = scipy.signal.ellip(order, 0.5, 60, 2 * cut, output="zpk")
    z = np.where(np.abs(z + 1) < 1e-6, -1.0, z)
    return _kind(rng, _closed(z), _closed(p), float(k), _clock(rng))


def sampled_edges(rng: Rng) -> Model:
    """Poles near z = 1 and z = -1, integrators, light pairs, deadbeat."""
    poles: Roots = []
    for _ in range(int(rng.integers(1, 4))):
        gap = _size(rng, -12, -1)
        choice = rng.integers(5)
        if choice == 0:
            poles.append(complex(1 - gap))
        elif choice == 1:
            poles.append(complex(gap - 1))
        elif choice == 2:
            angle = float(rng.uniform(0.01, 3.1))
            z = (1 - gap) * complex(np.cos(angle), np.sin(angle))
            poles += [z, z.conjugate()]
        elif choice == 3:
            poles += [0j] * int(rng.integers(1, 4))
        elif 1.0 + 0j not in poles:
            poles.append(1.0 + 0j)
    zeros = [complex(rng.choice([-1.0, 0.5, -0.3, 1 - _size(rng, -9, -1)])) for _ in range(int(rng.integers(0, 3)))]
    return _kind(rng, zeros[: len(poles)], poles, _size(rng, -3, 3), _clock(rng))


def matrices(rng: Rng) -> Model:
    """2 x 2, 1 x 3 and 3 x 2 with shared poles, zero channels, different units; continuous and sampled."""
    p, m = [(2, 2), (1, 3), (3, 2)][int(rng.integers(3))]
    time = _clock(rng) if rng.random() < 0.3 else None
    common: dict[str, Any] = {} if time is None else {"time": time}
    if time is None:
        poles = [complex(-_short(_size(rng, -1, 2))) for _ in range(int(rng.integers(1, 4)))]
        poles += _pair(_size(rng, -1, 2), _size(rng, -4, -0.3)) if rng.random() < 0.6 else []
        poles += [0j] if rng.random() < 0.2 else []
    else:
        poles = [complex(v) for v in np.unique(np.round(rng.uniform(-0.95, 0.99, int(rng.integers(1, 4))), 3))]
    units = 10.0 ** rng.uniform(-4, 4, p)[:, None] * 10.0 ** rng.uniform(-4, 4, m)[None, :]
    dead = rng.random((p, m)) < 0.2
    if rng.random() < 0.3:
        residues = np.zeros((len(poles), p, m), dtype=complex)
        for k, pole in enumerate(poles):
            if pole.imag >= 0:
                value = rng.normal(size=(p, m)) + (1j * rng.normal(size=(p, m)) if pole.imag else 0)
                residues[k] = np.where(dead, 0, value * units)
        for k, pole in enumerate(poles):
            if pole.imag < 0:
                residues[k] = residues[poles.index(pole.conjugate())].conj()
        if len(set(poles)) == len(poles):
            return PoleResidue(poles=poles, residues=residues, direct=np.where(dead, 0, units), **common)
    zeros: list[list[Roots]] = []
    chosen: list[list[Roots]] = []
    real = [pole for pole in poles if pole.imag == 0]
    for _ in range(p):
        zeros.append([[complex(-_short(_size(rng, -1, 1))) for _ in range(int(rng.integers(0, 2)))] for _ in range(m)])
        chosen.append([[q for q in poles if q not in real[:1] or rng.random() < 0.7] for _ in range(m)])
    gain = np.where(dead, 0.0, units * rng.normal(size=(p, m)))
    cut = [[zeros[i][j][: len(chosen[i][j])] if gain[i, j] else [] for j in range(m)] for i in range(p)]
    if rng.random() < 0.4:
        above = [[(gain[i, j] * _expanded(cut[i][j])).tolist() for j in range(m)] for i in range(p)]
        below = [[_expanded(chosen[i][j]).tolist() for j in range(m)] for i in range(p)]
        return TransferFunction(numerator=above, denominator=below, **common)
    return ZeroPoleGain(zeros=cut, poles=chosen, gain=gain.tolist(), **common)


def _random_states(rng: Rng, n: int, p: int, m: int, sampled: bool) -> tuple[Any, ...]:
    A = rng.normal(size=(n, n))
    size = np.abs(np.linalg.eigvals(A)).max()
    A = A / size * float(rng.uniform(0.6, 0.999)) if sampled else A - (size * float(rng.uniform(0.3, 1.1))) * np.eye(n)
    T = 10.0 ** rng.uniform(-1, 1, n) if rng.random() < 0.7 else 10.0 ** rng.uniform(-6, 6, n)
    A = T[:, None] * A / T[None, :] * (1.0 if sampled else _size(rng, -3, 6))
    D = rng.normal(size=(p, m)) if rng.random() < 0.5 else np.zeros((p, m))
    return A, T[:, None] * rng.normal(size=(n, m)), rng.normal(size=(p, n)) / T[None, :], D


def states(rng: Rng) -> Model:
    n, (p, m) = int(rng.integers(1, 8)), [(1, 1), (1, 1), (2, 2), (1, 3), (3, 2)][int(rng.integers(5))]
    sampled = rng.random() < 0.4
    A, B, C, D = _random_states(rng, n, p, m, sampled)
    return StateSpace(A=A, B=B, C=C, D=D, **({"time": _clock(rng)} if sampled else {}))


def descriptors(rng: Rng) -> Model:
    n, (p, m) = int(rng.integers(1, 7)), [(1, 1), (1, 1), (2, 2), (1, 3)][int(rng.integers(4))]
    sampled = rng.random() < 0.3
    A, B, C, D = _random_states(rng, n, p, m, sampled)
    E = np.eye(n) + 0.5 * rng.normal(size=(n, n))
    if rng.random() < 0.25 and n > 1:
        # an algebraic state, exactly
        E[-1] = 0.0
    elif rng.random() < 0.3 and n > 1:
        E[-1] = E[0] * (1 + _size(rng, -10, -2))
    return StateSpace(A=E @ A, B=E @ B, C=C, D=D, E=E, **({"time": _clock(rng)} if sampled else {}))


def sections(rng: Rng) -> Model:
    rows = []
    for _ in range(int(rng.integers(1, 6))):
        w = _size(rng, -1, 3)
        below = [1.0, float(2 * w * rng.uniform(0.001, 1.2)), w * w]
        rows.append([rng.choice([[0.0, 0.0, 1.0], [0.0, 1.0, w], [1.0, 0.1 * w, w * w]]).tolist(), below])
    return Sections(sections=rows, gain=_size(rng, -6, 6))


def residues(rng: Rng) -> Model:
    poles, powers, values = [], [], []
    for _ in range(int(rng.integers(1, 5))):
        pole, most = complex(-_size(rng, -1, 3)), int(rng.integers(1, 3))
        pair = rng.random() < 0.5
        if pair:
            pole = _pair(abs(pole), _size(rng, -4, -0.1))[0]
        for power in range(1, most + 1):
            value = complex(rng.normal(), rng.normal() if pair else 0) * abs(pole) ** power
            for q, r in [(pole, value), (pole.conjugate(), value.conjugate())][: 2 if pair else 1]:
                poles.append(q)
                powers.append(power)
                values.append(r)
    direct = [[[0.0]]] if rng.random() < 0.5 else [[[float(rng.normal())]]]
    if rng.random() < 0.2:
        direct = [[[float(rng.normal())]], *direct]
    return PoleResidue(poles=poles, powers=powers, residues=np.array(values).reshape(-1, 1, 1), direct=direct)


FAMILIES: dict[str, Callable[[Rng], Model]] = {
    make.__name__.replace("_", "-"): make
    for make in (
        filters,
        repeated,
        ladder,
        modes,
        scales,
        gains,
        integrators,
        notches,
        undamped,
        cancelling,
        improper,
        constants,
        unstable,
        sampled_filters,
        sampled_edges,
        matrices,
        states,
        descriptors,
        sections,
        residues,
    )
}


def generated(index: int, seed: int, family: str | None = None) -> tuple[str, Model, Rng]:
    """Return the family, the model, and the generator for what is done with it; index and seed decide all."""
    names = list(FAMILIES)
    name = family or names[index % len(names)]
    rng = np.random.default_rng([seed, index, names.index(name)])
    return name, FAMILIES[name](rng), rng
