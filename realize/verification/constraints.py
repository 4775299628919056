"""Claims that a returned model keeps what a fit was told to keep; nothing of the fit's own code is used."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from realize.models import (
    MatrixFraction,
    Model,
    PoleResidue,
    StateSpace,
    TransferFunction,
    ZeroPoleGain,
)
from realize.schema import CLAIMS, Claim, judge
from realize.verification.views import View, double_poles, view_of

Array = NDArray[np.float64]


def limit_of(name: str, limits: dict[str, float]) -> float | None:
    """Return the limit of a claim of a fit: the one given, else the default."""
    return limits.get(name, CLAIMS[name].limits.get("fit"))


def relative_degree_claim(model: Model, asked: int, limit: float | None) -> Claim:
    """Return by how much the relative degree of some channel falls short of the one asked; 0 where none does.

    Degree of the denominator less that of the numerator, from exact fractions; channels that are zero do not count.
    """
    view = view_of(model)
    if view.fractions is None:
        direct = _direct(model)
        if asked == 1 and direct is not None:
            short = float(np.any(direct))
            return judge("relative-degree", short, unit="1", basis="proved", uncertainty=0.0, limit=limit)
        return judge("relative-degree", None, unit="1", limit=limit, note="exact fractions are too costly here")
    found = [(d.degree() - n.degree(), i, j) for i, j, n, d in _channels(view) if n]
    if not found:
        return judge("relative-degree", 0.0, unit="1", basis="proved", uncertainty=0.0, limit=limit)
    least, i, j = min(found)
    return judge(
        "relative-degree",
        float(max(0, asked - least)),
        unit="1",
        basis="proved",
        uncertainty=0.0,
        limit=limit,
        where={"output": i, "input": j},
        note=f"the smallest relative degree of a channel is {least}, {asked} was asked",
    )


def fixed_poles_claim(model: Model, poles: Sequence[complex], limit: float | None) -> Claim:
    """Return the largest distance of a fixed pole from the nearest pole of the model, over its size.

    Multiplicities count. A pole at 0 (sampled: at 1) is met exactly or not at all: the distance is then 1.
    """
    view = view_of(model)
    origin = 0.0 if view.period is None else 1.0
    if view.fractions is None:
        have = double_poles(model)
        note = "from poles in doubles"
        worst = max((_distance(complex(pole), have, origin, False) for pole in poles), default=0.0)
        return judge("fixed-poles", worst, basis="measured", uncertainty=None, limit=limit, note=note)
    # a fixed pole need not be in every channel
    lists = {str(d): d for _, _, n, d in _channels(view) if n}
    worst = 0.0
    for pole, times in Counter(map(complex, poles)).items():
        distances = [_exact_distance(d, pole, times, origin) for d in lists.values() if d.degree() > 0]
        worst = max(worst, min(distances, default=1.0))
    return judge("fixed-poles", worst, basis="proved", uncertainty=_above(worst), limit=limit)


def fixed_zeros_claim(model: Model, zeros: Sequence[complex], limit: float | None) -> Claim:
    """Return the largest distance of a fixed zero from the nearest zero of any channel, over its size."""
    view = view_of(model)
    if view.fractions is None:
        return judge("fixed-zeros", None, limit=limit, note="exact fractions are too costly here")
    origin = 0.0 if view.period is None else 1.0
    worst, where = 0.0, {}
    for i, j, n, _ in _channels(view):
        if not n:
            continue
        for zero, times in Counter(map(complex, zeros)).items():
            distance = _exact_distance(n, zero, times, origin) if n.degree() > 0 else 1.0
            if distance > worst:
                worst, where = distance, {"output": i, "input": j}
    return judge("fixed-zeros", worst, basis="proved", uncertainty=_above(worst), limit=limit, where=where)


def steady_state_claim(model: Model, gain: Array, limit: float | None) -> Claim:
    """Return the largest difference of the gain at frequency 0 from the one asked, relative to its size.

    An entry that is asked to be 0 counts relative to the largest one.
    """
    view = view_of(model)
    size = np.abs(gain)
    size = np.where(size > 0, size, size.max() or 1.0)
    point = 0 if view.period is None else 1
    if view.fractions is None:
        with np.errstate(all="ignore"):
            value = view.response(np.zeros(1))[0].real
        error = float(np.max(np.abs(value - gain) / size))
        return judge("steady-state-gain", error, limit=limit, note="evaluated in double arithmetic")
    from realize.kernels.exact.numbers import exact, nearest

    worst, where = 0.0, {}
    for i, j, n, d in _channels(view):
        below = d(point)
        if not below:
            return judge("steady-state-gain", math.inf, basis="proved", limit=limit, where={"output": i, "input": j})
        error = nearest(abs(n(point) / below - exact(float(gain[i, j]))) / exact(float(size[i, j])))
        if error > worst:
            worst, where = error, {"frequency": 0.0, "output": i, "input": j}
    uncertainty = _above(worst)
    return judge("steady-state-gain", worst, basis="proved", uncertainty=uncertainty, limit=limit, where=where)


def symmetry_claim(model: Model, limit: float | None) -> Claim:
    """Return the peak error of the model against its transpose: 0 for a reciprocal network."""
    other = transposed(model)
    if other is None:
        return judge("symmetry", None, limit=limit, note=f"the transpose of a {model.kind} is not formed")
    from realize.verification.conversion import peak_error
    from realize.verification.pair import Pair

    pair = Pair(view_of(model), view_of(other))
    dead = model.dead_time
    if dead is not None and not np.array_equal(dead.total, dead.total.T):
        return judge("symmetry", math.inf, basis="bounded", limit=limit, note="dead times that are not symmetric")
    if pair.identical or (pair.exact and pair.proof(None).identical):
        return judge("symmetry", 0.0, basis="proved", uncertainty=0.0, limit=limit)
    found = peak_error(pair, limit)
    return judge(
        "symmetry",
        math.inf if found.infinite else found.value,
        basis=found.basis,
        uncertainty=found.uncertainty,
        limit=limit,
        where=found.where,
        note=found.note,
    )


def transposed(model: Model) -> Model | None:
    """Return the model of the transposed response, None for kinds that are not transposed here."""
    common: dict[str, Any] = {"time": model.time}
    if model.decimals:
        return None
    if isinstance(model, StateSpace):
        E = None if model.E is None else model.E.T
        return StateSpace(A=model.A.T, B=model.C.T, C=model.B.T, D=model.D.T, E=E, **common)
    if isinstance(model, PoleResidue):
        return PoleResidue(
            poles=model.poles,
            residues=model.residues.transpose(0, 2, 1),
            powers=model.powers,
            direct=model.direct.transpose(0, 2, 1),
            **common,
        )
    if isinstance(model, ZeroPoleGain):
        return ZeroPoleGain(zeros=_turned(model.zeros), poles=_turned(model.poles), gain=model.gain.T, **common)
    if isinstance(model, TransferFunction):
        return TransferFunction(numerator=_turned(model.numerator), denominator=_turned(model.denominator), **common)
    if isinstance(model, MatrixFraction):
        side = "left" if model.side == "right" else "right"
        return MatrixFraction(
            side=side,
            numerator=model.numerator.transpose(0, 2, 1),
            denominator=model.denominator.transpose(0, 2, 1),
            **common,
        )
    return None


def _turned(table: Any) -> Any:
    return [list(row) for row in zip(*table, strict=True)]


def _channels(view: View) -> list[tuple[int, int, Any, Any]]:
    assert view.fractions is not None
    return [(i, j, n, d) for i, row in enumerate(view.fractions) for j, (n, d) in enumerate(row)]


def _direct(model: Model) -> Array | None:
    if isinstance(model, StateSpace) and model.E is None:
        return np.asarray(model.D)
    if isinstance(model, PoleResidue):
        return np.asarray(model.direct)
    return None


def _distance(pole: complex, have: NDArray[np.complex128], origin: float, exact: bool) -> float:
    if have.size == 0:
        return 1.0
    nearest = float(np.min(np.abs(have - pole)))
    if pole == origin and exact:
        return 0.0 if nearest == 0 else 1.0
    return nearest / abs(pole) if pole != 0 else float(nearest > 0)


def _exact_distance(polynomial: Any, root: complex, times: int, origin: float) -> float:
    """Return the distance of the so many-th nearest root of an exact polynomial, over the size of the root asked.

    0 where the root is exactly one of that multiplicity; for one at the origin (z = 1) else 1.
    """
    from realize.kernels.exact.roots import roots

    have = [(entry.value, entry.multiplicity, entry.exact) for entry in roots(polynomial)]
    if root == origin:
        exact = next((count for _, count, value in have if value is not None and value == int(origin)), 0)
        return 0.0 if exact >= times else 1.0
    sizes = sorted(float(abs(value - root)) for value, count, _ in have for _ in range(count))
    if len(sizes) < times:
        return 1.0
    return sizes[times - 1] / abs(root) if root != 0 else float(sizes[times - 1] > 0)


def _above(value: float) -> float:
    """Return what the rounding of a distance between correctly rounded numbers can hide."""
    return 0.0 if value == 0 else 4 * float(np.finfo(float).eps)
