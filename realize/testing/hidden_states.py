"""State models with hidden modes whose minimal order is known by construction.

In Kalman's coordinates: the states are reachable and unobservable, both, neither, or observable and unreachable, the
matrices block triangular accordingly, and everything between the blocks is filled at random. The part that is both is
minimal by the eigenvector tests for the few kinds of blocks it is made of, whatever the rest is; its size is the order.
Integer shears then turn the coordinates. All numbers are exact.
"""

from __future__ import annotations

import random
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from numpy.typing import NDArray

from realize.models import StateSpace, TimeBase

Grid = list[list[int]]
#: Kinds of blocks of equal or near eigenvalues.
SIMPLE, PAIR, CHAIN, EQUAL = "simple", "lightly damped pair", "Jordan chain", "equal poles without a chain"
#: Denominator of the eigenvalues of sampled models.
SAMPLED = 256


@dataclass(frozen=True)
class HiddenStates:
    """A model with hidden modes.

    Attributes
    ----------
    A, B, C : lists of lists of int
        Continuous; divided by 256 in A for a sampled model.
    order : int
        Minimal order.
    condition : float
        Condition number of the shears together.
    largest_chain : int
        Largest number of equal eigenvalues, hidden ones included.
    """

    A: Grid
    B: Grid
    C: Grid
    order: int
    condition: float
    largest_chain: int


def hidden_states(
    seed: int, sizes: tuple[int, int] = (11, 40), condition: float = 1e6, repeated: bool = True
) -> HiddenStates:
    """Return a model with hidden modes, integers all.

    Parameters
    ----------
    seed : int
    sizes : (int, int)
        Smallest and largest number of states.
    condition : float
        Shears are added while their condition number together stays below this.
    repeated : bool
        With Jordan chains, equal poles, and hidden eigenvalues that are those of the visible part.
    """
    draw = random.Random(seed)
    n = draw.randint(*sizes)
    m, p = draw.randint(1, 3), draw.randint(1, 3)
    visible = draw.randint(n // 3, n - 2)
    cuts = sorted(draw.randint(0, n - visible) for _ in range(2))
    counts = [cuts[0], visible, cuts[1] - cuts[0], n - visible - cuts[1]]
    # at most as many speeds as doubles of moderate size tell apart
    speeds = list(range(1, 2 * n + 1))
    draw.shuffle(speeds)
    A = [[0] * n for _ in range(n)]
    B = [[draw.choice((-2, -1, 1, 2)) for _ in range(m)] for _ in range(n)]
    C = [[draw.choice((-2, -1, 1, 2)) for _ in range(n)] for _ in range(p)]
    group = [part for part, count in enumerate(counts) for _ in range(count)]
    for i in range(n):
        for j in range(n):
            # from the reachable to the unreachable, and from the unobservable to the observable, nothing leads
            if group[i] < group[j] and not (group[i] == 1 and group[j] == 2):
                A[i][j] = draw.randint(-1, 1)
    starts = [sum(counts[:k]) for k in range(4)]
    multiplicity: dict[tuple[int, int], int] = {}
    used: list[tuple[int, int]] = []
    for part in (1, 0, 2, 3):
        place, end = starts[part], starts[part] + counts[part]
        while place < end:
            room = end - place
            kind = draw.choices((SIMPLE, PAIR, CHAIN, EQUAL), (6, 2, repeated, repeated))[0]
            size = {SIMPLE: 1, PAIR: 2, CHAIN: draw.randint(2, 3), EQUAL: min(m, p, 2)}[kind]
            if size > room:
                kind, size = SIMPLE, 1
            again = repeated and part != 1 and used and draw.random() < 0.3
            if kind == PAIR:
                pole = draw.choice([x for x in used if x[1]] or [(-1, 3)]) if again else (-1, 2 + speeds.pop())
            else:
                pole = draw.choice([x for x in used if not x[1]] or [(-1, 0)]) if again else (-speeds.pop(), 0)
            used.append(pole)
            multiplicity[pole] = multiplicity.get(pole, 0) + size // (2 if pole[1] else 1)
            for k in range(place, place + size):
                A[k][k] = pole[0]
            if kind == PAIR:
                A[place][place + 1], A[place + 1][place] = pole[1], -pole[1]
            elif kind == CHAIN:
                # reached by its last state, seen by its first
                for k in range(place, place + size - 1):
                    A[k][k + 1] = 1
            elif kind == EQUAL:
                # rows of B, and columns of C, that are independent
                for k in range(size):
                    for j in range(size):
                        B[place + k][j] = int(j == k) if j <= k else draw.randint(-1, 1)
                        C[j][place + k] = int(j == k) if j >= k else draw.randint(-1, 1)
            place += size
    for i in range(n):
        if group[i] >= 2:
            B[i] = [0] * m
        if group[i] in (0, 2):
            for row in C:
                row[i] = 0
    T = np.eye(n)
    done = 1.0
    for _ in range(6 * n):
        i, j = draw.sample(range(n), 2)
        factor = draw.choice((-2, -1, 1, 2))
        T[i] += factor * T[j]
        now = float(np.linalg.cond(T))
        if now > condition:
            T[i] -= factor * T[j]
            break
        done = now
        A[i] = [x + factor * y for x, y in zip(A[i], A[j], strict=True)]
        B[i] = [x + factor * y for x, y in zip(B[i], B[j], strict=True)]
        for table in (A, C):
            for row in table:
                row[j] -= factor * row[i]
    return HiddenStates(A, B, C, visible, done, max(multiplicity.values()))


def exact_model(known: HiddenStates, seed: int, sampled: bool = False) -> StateSpace:
    """Return the model in other units: powers of two up to 2^20 for states and channels, 1e6 or 1e-6 for the time.

    What is no double stands in it as a decimal.
    """
    draw = random.Random(seed)
    n, m, p = len(known.A), len(known.B[0]), len(known.C)
    states, inputs, outputs = ([Fraction(2) ** draw.randint(-20, 20) for _ in range(k)] for k in (n, m, p))
    time = Fraction(1, SAMPLED) if sampled else Fraction(10) ** draw.choice((-6, 0, 6))
    grids = {
        "A": [[time * states[i] / states[j] * known.A[i][j] for j in range(n)] for i in range(n)],
        "B": [[states[i] * inputs[j] * known.B[i][j] * (1 if sampled else time) for j in range(m)] for i in range(n)],
        "C": [[outputs[i] / states[j] * known.C[i][j] for j in range(n)] for i in range(p)],
    }
    decimals: dict[str, dict[tuple[int, ...], str]] = {name: {} for name in grids}
    for name, grid in grids.items():
        for i, row in enumerate(grid):
            for j, value in enumerate(row):
                if Fraction(float(value)) != value:
                    decimals[name][i, j] = _decimal(value)
    doubles = {name: np.array([[float(x) for x in row] for row in grid]) for name, grid in grids.items()}
    return StateSpace(
        A=doubles["A"],
        B=doubles["B"],
        C=doubles["C"],
        time=TimeBase("sampled", period=0.5) if sampled else TimeBase(),
        decimals=decimals,
    )


def _decimal(value: Fraction) -> str:
    """Return a fraction whose denominator has no factors but 2 and 5 as a decimal."""
    shift = 0
    while value.denominator != 1:
        value, shift = value * 10, shift + 1
    return f"{value.numerator}e-{shift}"


Array = NDArray[np.float64]


def rounded_model(known: HiddenStates, seed: int) -> tuple[Array, Array, Array]:
    """Return A, B, C in units that are no powers of two, each number computed exactly and rounded once."""
    draw = random.Random(seed)
    n = len(known.A)
    d = [Fraction(draw.uniform(0.5, 2)) for _ in range(n)]
    return (
        np.array([[float(Fraction(1, 10) * d[i] / d[j] * known.A[i][j]) for j in range(n)] for i in range(n)]),
        np.array([[float(Fraction(3, 10) * d[i] * x) for x in row] for i, row in enumerate(known.B)]),
        np.array([[float(x / d[j] / 7) for j, x in enumerate(row)] for row in known.C]),
    )
