"""Common factors of coefficients, roots, residues and sections cancelled, the kind and all other numbers kept."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

import numpy as np

from realize.conversions.builders import rounded
from realize.errors import Refused
from realize.models import Model, PoleResidue, Sections, TransferFunction, ZeroPoleGain
from realize.models.fractions import form_fractions

#: Digits that a decimal of the result may have and still be written as it is, where the source has decimals.
WRITTEN_DIGITS = 60
#: Why a pole went.
BY_ZERO, NO_RESIDUE, MERGED = "cancelled by a zero", "zero residue", "equal to another pole within rounding"


#: A pole that went: where, how often, why, and in which channel (output, input).
Gone = tuple[complex, int, str, tuple[int, int] | None]


@dataclass
class Cancelling:
    """What cancelling found: the model, the poles that went, and what the decision rests on.

    Attributes
    ----------
    model : Model
    gone : list of (pole, how often, why, (output, input) or None)
    dropped, kept : float
        Relative change of the model's numbers for what went, and for the next that could go.
    """

    model: Model
    gone: list[Gone] = field(default_factory=list)
    dropped: float = 0.0
    kept: float = math.inf


def cancelled(model: Model, relative: Callable[[int], float]) -> Cancelling:
    """Return a model of coefficients, roots, residues or sections without what cancels.

    Parameters
    ----------
    model : TransferFunction, ZeroPoleGain, PoleResidue or Sections
    relative : function of an order
        Relative change of each number within which poles and zeros count as equal; 0 for exactly.
    """
    if isinstance(model, TransferFunction):
        return _coefficients(model, relative)
    if isinstance(model, ZeroPoleGain):
        return _roots(model, relative)
    if isinstance(model, PoleResidue):
        return _residues(model, relative)
    assert isinstance(model, Sections)
    return _sections(model, relative)


def _written(values: list[Any], decimal: bool) -> tuple[list[float], dict[int, str]]:
    """Return nearest doubles, and the decimals that stay as they are in a model that holds decimals already."""
    doubles, strings = rounded(values)
    if decimal:
        for k, value in enumerate(values):
            if k not in strings and Fraction(doubles[k]) != Fraction(int(value.p), int(value.q)):
                text = _terminating(value)
                if text is not None:
                    strings[k] = text
    return doubles, strings


def _terminating(value: Any) -> str | None:
    """Return a rational as an exact decimal, None where it has none of reasonable length."""
    from realize.kernels.exact.numbers import decimal_string

    rest = int(value.q)
    for prime in (2, 5):
        while rest % prime == 0:
            rest //= prime
    if rest != 1:
        return None
    text = decimal_string(value, WRITTEN_DIGITS)
    return text if Fraction(text) == Fraction(int(value.p), int(value.q)) else None


def _coefficients(model: TransferFunction, relative: Callable[[int], float]) -> Cancelling:
    from realize.kernels.exact.near_factors import cancel
    from realize.kernels.exact.polynomials import coefficients

    result = Cancelling(model)
    fields: dict[str, list[list[Any]]] = {"numerator": [], "denominator": []}
    decimals: dict[str, dict[Any, str]] = {"numerator": {}, "denominator": {}}
    changed = False
    for i, row in enumerate(form_fractions(model)):
        for name in fields:
            fields[name].append([])
        for j, (n, d) in enumerate(row):
            found = cancel(n, d, relative(max(n.degree(), d.degree())))
            result.kept = min(result.kept, found.next_change)
            keep = not found.roots and (bool(n) or d.degree() == 0)
            changed = changed or not keep
            for name, p in (("numerator", found.numerator), ("denominator", found.denominator)):
                own = {key[2]: text for key, text in model.decimals.get(name, {}).items() if key[:2] == (i, j)}
                if keep:
                    fields[name][i].append(getattr(model, name)[i][j])
                else:
                    doubles, own = _written(coefficients(p), bool(model.decimals))
                    fields[name][i].append(doubles)
                decimals[name].update({(i, j, k): text for k, text in own.items()})
            result.dropped = max(result.dropped, found.change)
            result.gone += [(root, count, BY_ZERO, (i, j)) for root, count in found.roots]
    if changed:
        result.model = TransferFunction(
            numerator=fields["numerator"], denominator=fields["denominator"], decimals=decimals, **model.common()
        )
    return result


def _roots(model: ZeroPoleGain, relative: Callable[[int], float]) -> Cancelling:
    result = Cancelling(model)
    p, m = model.shape
    exact = {name: model.exact(name) for name in ("zeros", "poles")}
    gain = model.exact("gain")
    keep: dict[str, list[list[Any]]] = {"zeros": [], "poles": []}
    decimals: dict[str, dict[Any, str]] = {"gain": dict(model.decimals.get("gain", {})), "zeros": {}, "poles": {}}
    for i in range(p):
        for name in keep:
            keep[name].append([])
        for j in range(m):
            sides = [exact["zeros"][i][j], exact["poles"][i][j]]
            if not gain[i][j][0]:
                places = [set(range(len(side))) for side in sides]
                change, following = 0.0, math.inf
            else:
                places, change, following = _equal(sides[0], sides[1], relative(max(map(len, sides))))
            result.dropped, result.kept = max(result.dropped, change), min(result.kept, following)
            for root, count in Counter(model.poles[i][j][k] for k in sorted(places[1])).items():
                result.gone.append((complex(root), count, BY_ZERO, (i, j)))
            for name, gone in zip(keep, places, strict=True):
                stay = [k for k in range(getattr(model, name)[i][j].size) if k not in gone]
                keep[name][i].append(getattr(model, name)[i][j][stay])
                for key, text in model.decimals.get(name, {}).items():
                    if key[:2] == (i, j) and key[2] in stay:
                        decimals[name][(i, j, stay.index(key[2]), *key[3:])] = text
    if result.gone or any(
        keep[name][i][j].size != getattr(model, name)[i][j].size for name in keep for i in range(p) for j in range(m)
    ):
        result.model = ZeroPoleGain(
            zeros=keep["zeros"], poles=keep["poles"], gain=model.gain, decimals=decimals, **model.common()
        )
    return result


def _parts(root: Any) -> tuple[Fraction, Fraction]:
    re, im = root
    return Fraction(*re), Fraction(*im)


def _equal(zeros: list[Any], poles: list[Any], allowed: float) -> tuple[list[set[int]], float, float]:
    """Return the places of zeros and poles that are equal pair by pair, the largest change needed, and the next one.

    Both members of a pair may move by the relative change; conjugates go together.
    """
    first, second = [_parts(z) for z in zeros], [_parts(q) for q in poles]
    trials = sorted(
        (_apart(z, q), a, b)
        for a, z in enumerate(first)
        for b, q in enumerate(second)
        if z[1] >= 0 and q[1] >= 0 and (z[1] == 0) == (q[1] == 0)
    )
    gone: list[set[int]] = [set(), set()]
    change, following = 0.0, math.inf
    for distance, a, b in trials:
        if a in gone[0] or b in gone[1]:
            continue
        if distance > allowed:
            following = distance
            break
        change = max(change, distance)
        gone[0].add(a)
        gone[1].add(b)
        if first[a][1]:
            for side, values, k in ((gone[0], first, a), (gone[1], second, b)):
                mate = next(c for c, v in enumerate(values) if c not in side and v == (values[k][0], -values[k][1]))
                side.add(mate)
    return gone, change, following


def _apart(z: tuple[Fraction, Fraction], q: tuple[Fraction, Fraction]) -> float:
    """Return the relative change of both numbers, part by part, that makes them equal."""
    worst = 0.0
    for x, y in zip(z, q, strict=True):
        if x != y:
            size = abs(x) + abs(y)
            worst = max(worst, float(abs(x - y) / size))
    return worst


def _residues(model: PoleResidue, relative: Callable[[int], float]) -> Cancelling:
    result = Cancelling(model)
    n = model.poles.size
    p, m = model.shape
    residues = model.exact("residues")

    def nothing(k: int) -> bool:
        return not any(part[0] for row in residues[k] for entry in row for part in entry)

    stay = [k for k in range(n) if not nothing(k)]
    gone = [k for k in range(n) if k not in stay]
    for pole in dict.fromkeys(complex(model.poles[k]) for k in gone):
        before = max(int(model.powers[k]) for k in range(n) if model.poles[k] == pole)
        after = max((int(model.powers[k]) for k in stay if model.poles[k] == pole), default=0)
        if before > after:
            result.gone.append((pole, before - after, NO_RESIDUE, None))
    poles = [_parts(root) for root in model.exact("poles")]
    allowed = relative(n)
    into: dict[int, int] = {}
    simple = [
        k for k in stay if sum(bool(model.poles[k] == model.poles[c]) for c in stay) == 1 and model.powers[k] == 1
    ]
    if p * m == 1:
        # poles that are equal within rounding: their residues add
        trials = sorted((_apart(poles[a], poles[b]), a, b) for x, a in enumerate(simple) for b in simple[x + 1 :])
        for distance, a, b in trials:
            if a in into or b in into or a in into.values() or (poles[a][1] > 0) != (poles[b][1] > 0):
                continue
            if distance > allowed:
                result.kept = min(result.kept, distance)
                break
            result.dropped = max(result.dropped, distance)
            into[b] = a
    values = np.array(model.residues)
    for b, a in into.items():
        values[a] = values[a] + values[b]
        result.gone.append((complex(model.poles[b]), 1, MERGED, None))
    stay = [k for k in stay if k not in into]
    if len(stay) < n:
        touched = set(into.values())
        decimals: dict[str, dict[Any, str]] = {"direct": dict(model.decimals.get("direct", {}))}
        for name in ("poles", "residues"):
            decimals[name] = {
                (stay.index(key[0]), *key[1:]): text
                for key, text in model.decimals.get(name, {}).items()
                if key[0] in stay and not (name == "residues" and key[0] in touched)
            }
        result.model = PoleResidue(
            poles=model.poles[stay],
            residues=values[stay],
            powers=model.powers[stay],
            direct=model.direct,
            decimals=decimals,
            **model.common(),
        )
    return result


def _sections(model: Sections, relative: Callable[[int], float]) -> Cancelling:
    from realize.kernels.exact.near_factors import cancel
    from realize.kernels.exact.numbers import fraction
    from realize.kernels.exact.polynomials import coefficients, polynomial

    result = Cancelling(model)
    pairs = [[polynomial(row) for row in section] for section in model.exact("sections")]
    allowed = relative(model.order)
    touched: set[tuple[int, int]] = set()
    gain = fraction(model.exact("gain"))
    if not gain or any(not pair[0] for pair in pairs):
        if model.order:
            gone: list[Gone] = [(complex(root), 1, BY_ZERO, None) for root in _denominator_roots(pairs)]
            return Cancelling(Sections(sections=np.zeros((0, 2, 3)), gain=0.0, **model.common()), gone)
        return result
    # the nearest first: within a section, then across
    for a, b in sorted(
        ((a, b) for a in range(len(pairs)) for b in range(len(pairs))), key=lambda place: (place[0] != place[1], place)
    ):
        n, d = pairs[a][0], pairs[b][1]
        if min(n.degree(), d.degree()) < 1:
            continue
        found = cancel(n, d, allowed)
        result.kept = min(result.kept, found.next_change)
        if found.roots:
            pairs[a][0], pairs[b][1] = found.numerator, found.denominator
            touched |= {(a, 0), (b, 1)}
            result.dropped = max(result.dropped, found.change)
            result.gone += [(root, count, BY_ZERO, None) for root, count in found.roots]
    if not touched:
        return result
    _proper(pairs, touched)
    rows: list[Any] = []
    decimals: dict[Any, str] = {}
    for a, pair in enumerate(pairs):
        if all(p.degree() == 0 for p in pair) and {(a, 0), (a, 1)} & touched:
            gain = gain * pair[0].leading_coefficient() / pair[1].leading_coefficient()
            continue
        own = []
        for which, p in enumerate(pair):
            if (a, which) not in touched:
                own.append(model.sections[a, which].tolist())
                texts = {k[2]: t for k, t in model.decimals.get("sections", {}).items() if k[:2] == (a, which)}
            else:
                doubles, strings = _written(coefficients(p), bool(model.decimals))
                shift = 3 - len(doubles)
                own.append([0.0] * shift + doubles)
                texts = {shift + k: text for k, text in strings.items()}
            decimals.update({(len(rows), which, k): text for k, text in texts.items()})
        rows.append(own)
    (value,), strings = _written([gain], bool(model.decimals))
    result.model = Sections(
        sections=np.array(rows).reshape(len(rows), 2, 3),
        gain=value,
        decimals={"sections": decimals, "gain": {(): strings[0]} if strings else {}},
        **model.common(),
    )
    if not math.isfinite(value) and not strings:
        raise Refused("the gain lies beyond the range of doubles; scale it first")
    return result


def _proper(pairs: list[list[Any]], touched: set[tuple[int, int]]) -> None:
    """Move numerators that lost their denominator to sections that have room for them."""
    for a, (n, d) in enumerate(pairs):
        if n.degree() <= d.degree():
            continue
        for b, (other, below) in enumerate(pairs):
            if b != a and other.degree() <= d.degree() and n.degree() <= below.degree():
                pairs[a][0], pairs[b][0] = other, n
                touched |= {(a, 0), (b, 0)}
                break


def _denominator_roots(pairs: list[list[Any]]) -> list[complex]:
    from realize.kernels.exact.roots import roots

    return [root.value for _, d in pairs if d.degree() > 0 for root in roots(d) for _ in range(root.multiplicity)]
