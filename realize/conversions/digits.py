"""Results in decimals: every number correctly rounded to a number of significant digits, however many doubles have.

The functions here take the place of the builders of the same rows when ``digits`` is asked for: the same intermediate
nodes, with poles and zeros that are known to any precision (`realize.conversions.decimals`).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from realize.conversions import builders
from realize.conversions.builders import Factors, Grid
from realize.conversions.decimals import ExactRoot, Laurent, Number, exact_root, monic, negative, written
from realize.errors import Refused
from realize.forms import group_roots
from realize.models import Model, PoleResidue, Sections, TransferFunction, ZeroPoleGain

if TYPE_CHECKING:
    from realize.conversions.route import Task


@dataclass(frozen=True)
class ExactFactors(Factors):
    """Poles, zeros and gain of one channel, to any precision."""

    exact_zeros: list[ExactRoot]
    exact_poles: list[ExactRoot]


def transfer_function(grid: Grid, task: Task) -> TransferFunction:
    """Coefficients in decimals."""
    from realize.kernels.exact.polynomials import coefficients

    parts: dict[str, Any] = {"numerator": [], "denominator": []}
    decimals: dict[str, dict[Any, str]] = {"numerator": {}, "denominator": {}}
    for i, row in enumerate(grid):
        for side, name in enumerate(parts):
            line = []
            for j, pair in enumerate(row):
                found = [written(Number(c), _digits(task)) for c in coefficients(pair[side])]
                line.append([double for double, _ in found])
                decimals[name].update({(i, j, k): text for k, (_, text) in enumerate(found) if text is not None})
            parts[name].append(line)
    return TransferFunction(**parts, decimals=decimals, **task.model.common())


def _digits(task: Task) -> int:
    assert task.digits is not None
    return task.digits


def factors_as_given(model: Model, task: Task) -> list[list[Factors]]:
    """Poles, zeros and gain of a zero-pole-gain model, exactly as given."""
    from fractions import Fraction

    from realize.kernels.exact.numbers import fraction

    assert isinstance(model, ZeroPoleGain)
    if "zeros" in model.decimals or "poles" in model.decimals:
        return factors_from_fractions(builders.fractions(model, task), task)
    gain = model.exact("gain")

    def exact(root: complex) -> ExactRoot:
        parts = (Number(fraction(part.as_integer_ratio())) for part in (root.real, root.imag))
        return ExactRoot(root, *parts)

    p, m = model.shape
    return [
        [
            ExactFactors(
                zeros=model.zeros[i][j].tolist(),
                poles=model.poles[i][j].tolist(),
                gain=Fraction(*gain[i][j]),
                exact_zeros=[exact(root) for root in model.zeros[i][j].tolist()],
                exact_poles=[exact(root) for root in model.poles[i][j].tolist()],
            )
            for j in range(m)
        ]
        for i in range(p)
    ]


def factors_from_fractions(grid: Grid, task: Task) -> list[list[Factors]]:
    """Certified poles and zeros to any precision, with exact multiplicities."""
    from fractions import Fraction

    from realize.kernels.exact.roots import roots

    def listed(polynomial: Any) -> list[ExactRoot]:
        if polynomial.degree() < 1:
            return []
        found = [exact_root(root) for root in roots(polynomial) for _ in range(root.multiplicity)]
        for root in found:
            if not np.isfinite(root.value):
                raise Refused("a pole or zero lies beyond the range of doubles; scale time first")
        return found

    result: list[list[Factors]] = []
    for row in grid:
        line: list[Factors] = []
        for n, d in row:
            zeros = listed(n) if n else []
            poles = listed(d)
            gain = n.leading_coefficient() / d.leading_coefficient() if n else None
            line.append(
                ExactFactors(
                    zeros=[root.value for root in zeros],
                    poles=[root.value for root in poles],
                    gain=Fraction(0) if gain is None else Fraction(int(gain.p), int(gain.q)),
                    exact_zeros=zeros,
                    exact_poles=poles,
                )
            )
        result.append(line)
    return result


def _gain(factors: Factors) -> Number:
    from realize.kernels.exact.numbers import fraction

    return Number(fraction((factors.gain.numerator, factors.gain.denominator)))


def _complex(root: ExactRoot, digits: int) -> tuple[complex, dict[int, str]]:
    """Return a root's decimal as the nearest double and the texts by part, conjugates exactly conjugate."""
    texts: dict[int, str] = {}
    parts = []
    for part, number in enumerate((root.real, root.imag)):
        double, text = written(number, digits)
        parts.append(double)
        if text is not None:
            texts[part] = text
    return complex(*parts), texts


def zero_pole_gain(factors: list[list[Factors]], task: Task) -> ZeroPoleGain:
    """Zeros, poles and gain in decimals."""
    digits = _digits(task)
    values: dict[str, Any] = {"zeros": [], "poles": [], "gain": []}
    decimals: dict[str, dict[Any, str]] = {"zeros": {}, "poles": {}, "gain": {}}
    for i, row in enumerate(factors):
        for line in values.values():
            line.append([])
        for j, channel in enumerate(row):
            assert isinstance(channel, ExactFactors)
            for name, exact in (("zeros", channel.exact_zeros), ("poles", channel.exact_poles)):
                found = [_complex(root, digits) for root in exact]
                values[name][i].append([value for value, _ in found])
                decimals[name].update(
                    {(i, j, k, part): text for k, (_, texts) in enumerate(found) for part, text in texts.items()}
                )
            gain, text = written(_gain(channel), digits)
            values["gain"][i].append(gain)
            if text is not None:
                decimals["gain"][i, j] = text
    return ZeroPoleGain(**values, decimals=decimals, **task.model.common())


def pole_residue(grid: Grid, task: Task) -> PoleResidue:
    """Poles, residues and polynomial part in decimals, over the common poles of all channels."""
    from realize.kernels.exact.partial_fractions import residues
    from realize.kernels.exact.polynomials import reduce_fraction

    digits, (p, m) = _digits(task), (len(grid), len(grid[0]))
    poles: dict[Any, tuple[complex, dict[int, str]]] = {}
    entries: dict[tuple[Any, int], dict[tuple[int, int], list[tuple[float, str | None]]]] = {}
    direct: dict[int, dict[tuple[int, int], tuple[float, str | None]]] = {}
    for i, row in enumerate(grid):
        for j, (n, d) in enumerate(row):
            found, polynomial = residues(n, d)
            n, d = reduce_fraction(n, d)
            tail = n % d
            terms: list[list[tuple[float, str | None]]] = []
            for root, rough in found:
                value, texts = _complex(exact_root(root), digits)
                if not np.isfinite(value):
                    raise Refused("a pole lies beyond the range of doubles; scale time first")
                key = (texts.get(0, value.real), texts.get(1, value.imag))
                poles[key] = (value, texts)
                if not root.real and root.ball.imag < 0:
                    # the conjugate of the one before
                    terms = [[real, negative(imag)] for real, imag in terms]
                else:
                    laurent = Laurent(tail, d, root)
                    terms = [
                        [written(number, digits) for number in laurent.parts(power, residue)]
                        for power, residue in enumerate(rough, start=1)
                    ]
                for power, parts in enumerate(terms, start=1):
                    entries.setdefault((key, power), {})[i, j] = parts
            for power, term in enumerate(reversed(polynomial)):
                direct.setdefault(power, {})[i, j] = written(Number(term), digits)
    if len({value for value, _ in poles.values()}) < len(poles):
        raise Refused(
            "two different poles round to the same double, and a pole-residue model tells its poles apart by their "
            "doubles; use state space, zero-pole-gain or transfer function"
        )

    def order(key: tuple[Any, int]) -> tuple[float, float, float, float, int]:
        value = poles[key[0]][0]
        return abs(value), value.real, abs(value.imag), -value.imag, key[1]

    keys = sorted(entries, key=order)
    matrices = np.zeros((len(keys), p, m), dtype=complex)
    decimals: dict[str, dict[Any, str]] = {"poles": {}, "residues": {}, "direct": {}}
    for k, (key, power) in enumerate(keys):
        decimals["poles"].update({(k, part): text for part, text in poles[key][1].items()})
        for (i, j), parts in entries[key, power].items():
            matrices[k, i, j] = complex(parts[0][0], parts[1][0])
            decimals["residues"].update(
                {(k, i, j, part): text for part, (_, text) in enumerate(parts) if text is not None}
            )
    degree = max(direct, default=0)
    whole = np.zeros((degree + 1, p, m))
    for power, places in direct.items():
        for (i, j), (double, text) in places.items():
            whole[degree - power, i, j] = double
            if text is not None:
                decimals["direct"][degree - power, i, j] = text
    return PoleResidue(
        poles=[poles[key][0] for key, _ in keys],
        powers=[power for _, power in keys],
        residues=matrices,
        direct=whole,
        decimals=decimals,
        **task.model.common(),
    )


def sections(factors: list[list[Factors]], task: Task) -> Sections:
    """Second-order sections in decimals, zeros paired to poles as in doubles."""
    if len(factors) * len(factors[0]) != 1:
        raise Refused("sections hold one input and one output; convert channel by channel, or to zero-pole-gain")
    channel = factors[0][0]
    assert isinstance(channel, ExactFactors)
    digits = _digits(task)
    sampled = task.model.time.sampled
    if len(channel.zeros) <= len(channel.poles):
        rough = [(s.zeros, s.poles) for s in group_roots(channel.zeros, channel.poles, sampled)]
    else:
        # more zeros than poles: the roles are exchanged
        rough = [(s.poles, s.zeros) for s in group_roots(channel.poles, channel.zeros, sampled)]
    waiting: dict[tuple[int, complex], list[ExactRoot]] = {}
    for which, exact in enumerate((channel.exact_zeros, channel.exact_poles)):
        for root in exact:
            if root.value.imag >= 0:
                waiting.setdefault((which, root.value), []).append(root)
    rows: list[Any] = []
    decimals: dict[Any, str] = {}
    for k, pair in enumerate(rough):
        section = []
        for which, roots in enumerate(pair):
            # a conjugate pair is one exact root, two real roots are two
            mine = [waiting[which, r].pop() for r in roots if r.imag >= 0]
            numbers = monic(mine)
            found = [written(number, digits) for number in numbers]
            shift = 3 - len(found)
            section.append([0.0] * shift + [double for double, _ in found])
            decimals.update({(k, which, shift + c): text for c, (_, text) in enumerate(found) if text is not None})
        rows.append(section)
    gain, text = written(_gain(channel), digits)
    if not np.isfinite(gain) or (gain == 0.0 and channel.gain != 0):
        raise Refused("the gain of the sections lies beyond the range of doubles; use zero-pole-gain")
    return Sections(
        sections=np.array(rows).reshape(len(rows), 2, 3),
        gain=gain,
        decimals={"sections": decimals, "gain": {} if text is None else {(): text}},
        **task.model.common(),
    )


#: Builders that write decimals, by source and target node.
BUILDERS: dict[tuple[str, str], Callable[[Any, Any], Any]] = {
    ("exact-fractions", "transfer-function"): transfer_function,
    ("exact-fractions", "pole-residue"): pole_residue,
    ("exact-fractions", "factors"): factors_from_fractions,
    ("zero-pole-gain", "factors"): factors_as_given,
    ("factors", "zero-pole-gain"): zero_pole_gain,
    ("factors", "sections"): sections,
}
