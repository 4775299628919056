"""The functions behind the rows of the conversion table."""

from __future__ import annotations

import cmath
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np

from realize.errors import Refused
from realize.forms import (
    append_polynomial_part,
    cascade_states,
    controllable_companion,
    group_roots,
    modal_states,
    observable_companion,
)
from realize.forms.cascade import Section, monic
from realize.forms.tuned_coupling import BeyondDoubles
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
from realize.models.checks import MAX_EXPONENT
from realize.models.fractions import form_fractions

if TYPE_CHECKING:
    from realize.conversions.route import Task

Grid = list[list[tuple[Any, Any]]]

#: Bits to which roots of sampled models are known while a cascade is built.
PRECISE_BITS = 120

#: Digits of a decimal string that stands for a number beyond the range of doubles.
DIGITS = 20
_SMALLEST = 2.0**-1022


@dataclass(frozen=True)
class Factors:
    """Poles, zeros and gain of one channel."""

    zeros: list[complex]
    poles: list[complex]
    gain: Fraction
    #: Sampled models: those of them that are exactly on the unit circle, whatever their doubles are.
    circle: frozenset[complex] = field(default=frozenset(), kw_only=True)
    #: Sampled models: what they stand for to more digits, since what counts is their distance from z = 1 and -1.
    precise: dict[complex, tuple[Any, Any]] = field(default_factory=dict, kw_only=True)


def _python(value: Any) -> Fraction:
    return Fraction(int(value.p), int(value.q))


def fractions(model: Model, task: Task) -> Grid:
    """Exact fractions of each channel; those of a state model are reduced, unless a common denominator is asked for."""
    from realize.kernels.exact import states
    from realize.kernels.exact.polynomials import reduce_fraction

    try:
        formed = form_fractions(model)
    except states.SingularPencil:
        raise Refused(
            "the pencil sE - A is singular: det(sE - A) is zero for every s, so no transfer function exists"
        ) from None
    if (
        isinstance(model, (StateSpace, SecondOrder, MatrixFraction))
        and not task.common_denominator
        and task.to != "state-space"
    ):
        return [[reduce_fraction(n, d) for n, d in row] for row in formed]
    if task.common_denominator:
        return _over_common_denominator(formed)
    return formed


def _over_common_denominator(grid: Grid) -> Grid:
    """Return the same fractions over their monic least common denominator."""
    from realize.kernels.exact.polynomials import reduce_fraction

    reduced = [[reduce_fraction(n, d) for n, d in row] for row in grid]
    common = reduced[0][0][1]
    for row in reduced:
        for _, d in row:
            common = common * (d // common.gcd(d))
    common = common / common.leading_coefficient()
    return [[(n * (common // d), common) for n, d in row] for row in reduced]


def rounded(values: list[Any]) -> tuple[list[float], dict[int, str]]:
    """Return the nearest doubles, and decimal strings for the numbers that no double can hold."""
    from realize.kernels.exact.numbers import decimal_string, fraction, nearest

    doubles, strings = [], {}
    for k, value in enumerate(values):
        if isinstance(value, Fraction):
            value = fraction((value.numerator, value.denominator))
        number = nearest(value)
        if not np.isfinite(number) or (value != 0 and abs(number) < _SMALLEST):
            text = decimal_string(value, DIGITS)
            if abs(int(text.partition("e")[2] or 0)) > MAX_EXPONENT:
                raise Refused(
                    f"a number of the result would be {text[:6]}e{text.partition('e')[2]}, beyond what a model file "
                    "can hold; keep state space, zero-pole-gain or sections, or scale time and gain first"
                )
            strings[k] = text
        doubles.append(number)
    return doubles, strings


def transfer_function(grid: Grid, task: Task) -> TransferFunction:
    """Coefficients, each the double nearest to the exact value."""
    from realize.kernels.exact.polynomials import coefficients

    result: dict[str, Any] = {"numerator": [], "denominator": []}
    decimals: dict[str, dict[Any, str]] = {"numerator": {}, "denominator": {}}
    for i, row in enumerate(grid):
        lines: tuple[list[Any], list[Any]] = ([], [])
        for j, pair in enumerate(row):
            for name, polynomial, line in zip(("numerator", "denominator"), pair, lines, strict=True):
                doubles, strings = rounded(coefficients(polynomial))
                line.append(doubles)
                decimals[name].update({(i, j, k): text for k, text in strings.items()})
        result["numerator"].append(lines[0])
        result["denominator"].append(lines[1])
    return TransferFunction(**result, decimals=decimals, **task.model.common())


def factors_as_given(model: Model, task: Task) -> list[list[Factors]]:
    """Poles, zeros and gain of a zero-pole-gain model."""
    assert isinstance(model, ZeroPoleGain)
    if "zeros" in model.decimals or "poles" in model.decimals:
        # exact decimals are no doubles yet: multiplicities and rounding are decided exactly
        return factors_from_fractions(form_fractions(model), task)
    gain = model.exact("gain")
    p, m = model.shape
    return [
        [Factors(model.zeros[i][j].tolist(), model.poles[i][j].tolist(), Fraction(*gain[i][j])) for j in range(m)]
        for i in range(p)
    ]


def factors_from_fractions(grid: Grid, task: Task) -> list[list[Factors]]:
    """Certified poles and zeros, correctly rounded, with exact multiplicities."""
    from realize.kernels.exact.numbers import exact_value
    from realize.kernels.exact.roots import roots, unit_circle

    on_circle: set[complex] = set()
    precise: dict[complex, tuple[Any, Any]] = {}

    def listed(polynomial: Any) -> list[complex]:
        if polynomial.degree() < 1:
            return []
        distinct = roots(polynomial)
        if task.model.time.sampled:
            flags = unit_circle(polynomial, distinct)
            on_circle.update(root.value for root, flag in zip(distinct, flags, strict=True) if flag)
            for root in distinct:
                ball = root.at(PRECISE_BITS)
                precise[root.value] = (exact_value(ball.real), exact_value(ball.imag))
        found = [root.value for root in distinct for _ in range(root.multiplicity)]
        for value in found:
            if not cmath.isfinite(value):
                raise Refused("a pole or zero lies beyond the range of doubles; scale time first")
        return found

    result = []
    for row in grid:
        line = []
        for n, d in row:
            if n.degree() < 0:
                line.append(Factors([], listed(d), Fraction(0)))
                continue
            gain = _python(n.leading_coefficient() / d.leading_coefficient())
            zeros, poles = listed(n), listed(d)
            line.append(Factors(zeros, poles, gain, circle=frozenset(on_circle), precise=precise))
        result.append(line)
    return result


def zero_pole_gain(factors: list[list[Factors]], task: Task) -> ZeroPoleGain:
    """Zero-pole-gain model; gains beyond the doubles become decimal strings."""
    gains: list[list[float]] = []
    decimals: dict[tuple[int, ...], str] = {}
    for i, row in enumerate(factors):
        doubles, strings = rounded([channel.gain for channel in row])
        gains.append(doubles)
        decimals.update({(i, j): text for j, text in strings.items()})
    return ZeroPoleGain(
        zeros=[[channel.zeros for channel in row] for row in factors],
        poles=[[channel.poles for channel in row] for row in factors],
        gain=gains,
        decimals={"gain": decimals},
        **task.model.common(),
    )


def pole_residue(grid: Grid, task: Task) -> PoleResidue:
    """Partial fractions of all channels over their common poles."""
    from realize.kernels.exact.partial_fractions import residues

    p, m = len(grid), len(grid[0])
    entries: dict[tuple[complex, int], Any] = {}
    direct: dict[int, Any] = {}
    for i, row in enumerate(grid):
        for j, (n, d) in enumerate(row):
            found, polynomial = residues(n, d)
            listed = [root.value for root, _ in found]
            if len(set(listed)) < len(listed):
                raise Refused(
                    "two different poles round to the same double, so that no residues in doubles can tell them apart; "
                    "use state space, zero-pole-gain or transfer function"
                )
            for root, values in found:
                for power, value in enumerate(values, start=1):
                    if not np.isfinite(root.value) or not np.isfinite(value) or (value == 0 and power == len(values)):
                        raise Refused("a pole or residue lies beyond the range of doubles; scale time or gain first")
                    key = (root.value, power)
                    entries.setdefault(key, np.zeros((p, m), dtype=complex))[i, j] += value
            for power, term in enumerate(reversed(polynomial)):
                direct.setdefault(power, np.zeros((p, m)))[i, j] = rounded([term])[0][0]
    degree = max(direct, default=0)
    parts = [direct.get(power, np.zeros((p, m))) for power in range(degree, -1, -1)]
    if not np.all(np.isfinite(parts)):
        raise Refused("a coefficient of the polynomial part lies beyond the range of doubles; scale time or gain first")
    keys = sorted(entries, key=lambda k: (abs(k[0]), k[0].real, abs(k[0].imag), -k[0].imag, k[1]))
    return PoleResidue(
        poles=[key[0] for key in keys],
        powers=[key[1] for key in keys],
        residues=np.array([entries[key] for key in keys]).reshape(len(keys), p, m),
        direct=np.array(parts),
        **task.model.common(),
    )


def sections(factors: list[list[Factors]], task: Task) -> Sections:
    """Second-order sections with zeros paired to poles."""
    if len(factors) * len(factors[0]) != 1:
        raise Refused("sections hold one input and one output; convert channel by channel, or to zero-pole-gain")
    channel = factors[0][0]
    if len(channel.zeros) <= len(channel.poles):
        grouped = [(s.zeros, s.poles) for s in group_roots(channel.zeros, channel.poles, task.model.time.sampled)]
    else:
        # more zeros than poles: the roles are exchanged
        grouped = [(s.poles, s.zeros) for s in group_roots(channel.poles, channel.zeros, task.model.time.sampled)]
    rows: list[Any] = []
    decimals: dict[Any, str] = {}
    for k, (zeros, poles) in enumerate(grouped):
        pair = []
        for which, roots in enumerate((zeros, poles)):
            doubles, strings = rounded(monic(tuple(roots)))
            if len(roots) == 2 and roots[0] in channel.circle:
                doubles[2] = 1.0
            shift = 3 - len(doubles)
            pair.append([0.0] * shift + doubles)
            decimals.update({(k, which, shift + c): text for c, text in strings.items()})
        rows.append(pair)
    (gain,), strings = rounded([channel.gain])
    return Sections(
        sections=np.array(rows).reshape(len(rows), 2, 3),
        gain=gain,
        decimals={"sections": decimals, "gain": {(): strings[0]} if strings else {}},
        **task.model.common(),
    )


def state_model(task: Task, A: Any, B: Any, C: Any, D: Any, E: Any = None) -> StateSpace:
    """State model with the signals of the source, refused with entries beyond the doubles."""
    for name, value in zip("ABCD", (A, B, C, D), strict=True):
        if not np.isfinite(value).all():
            raise Refused(f"an entry of {name} lies beyond the range of doubles; scale time or gain first")
    return StateSpace(A=A, B=B, C=C, D=D, E=E, **task.model.common())


def cascade(factors: list[list[Factors]], task: Task) -> StateSpace:
    """One cascade for each channel, side by side; an improper channel gets its polynomial part by itself."""
    with in_range():
        return assemble(task, [[cascade_channel(channel, task) for channel in row] for row in factors])


@contextmanager
def in_range() -> Iterator[None]:
    """Turn an entry beyond the range of doubles into words."""
    try:
        yield
    except (BeyondDoubles, OverflowError):
        raise Refused("an entry of the result lies beyond the range of doubles; scale time or gain first") from None


def cascade_channel(channel: Factors, task: Task) -> tuple[Any, ...]:
    """Matrices A, B, C, D of one channel as a cascade, and its polynomial part, None where there is none."""
    if len(channel.zeros) <= len(channel.poles):
        grouped = group_roots(channel.zeros, channel.poles, task.model.time.sampled)
        return (*cascade_states(grouped, channel.gain, task.model.time.sampled, channel.circle, channel.precise), None)
    from realize.kernels.exact import polynomials
    from realize.kernels.exact.numbers import fraction

    def exact(root: complex) -> tuple[Any, Any]:
        return fraction(root.real.as_integer_ratio()), fraction(root.imag.as_integer_ratio())

    n = polynomials.from_roots([exact(root) for root in channel.zeros])
    d = polynomials.from_roots([exact(root) for root in channel.poles])
    gain = fraction((channel.gain.numerator, channel.gain.denominator))
    whole, rest = divmod(n * gain, d)
    sampled = task.model.time.sampled
    part = factors_from_fractions([[(rest, d)]], task)[0][0]
    A, B, C, D = cascade_states(
        group_roots(part.zeros, part.poles, sampled), part.gain, sampled, part.circle, part.precise
    )
    return A, B, C, D, np.array([[[value]] for value in rounded(polynomials.coefficients(whole))[0]])


def assemble(task: Task, grid: list[list[tuple[Any, ...]]]) -> StateSpace:
    """Put the channels side by side, identically zero ones left out, the polynomial parts in one descriptor block."""
    p, m = len(grid), len(grid[0])
    keep = [(i, j) for i in range(p) for j in range(m) if p * m == 1 or grid[i][j][2].any() or grid[i][j][3].any()]
    n = sum(grid[i][j][0].shape[0] for i, j in keep)
    A, B, C, D = np.zeros((n, n)), np.zeros((n, m)), np.zeros((p, n)), np.zeros((p, m))
    degree = max(
        (grid[i][j][4].shape[0] - 1 for i in range(p) for j in range(m) if grid[i][j][4] is not None), default=0
    )
    polynomial = np.zeros((degree + 1, p, m))
    start = 0
    for i, j in keep:
        a, b, c, d, _ = grid[i][j]
        part = slice(start, start + a.shape[0])
        A[part, part], B[part, j], C[i, part], D[i, j] = a, b[:, 0], c[0], d[0, 0]
        start += a.shape[0]
    for i in range(p):
        for j in range(m):
            own = grid[i][j][4]
            if own is not None:
                polynomial[degree + 1 - own.shape[0] :, i, j] = own[:, 0, 0]
    if degree == 0 and not polynomial.any():
        return state_model(task, A, B, C, D)
    return state_model(task, *append_polynomial_part(A, B, C, D, polynomial))


def cascade_of_sections(model: Model, task: Task) -> StateSpace:
    """The sections as they stand, in series, without pairing anew."""
    assert isinstance(model, Sections)
    from realize.kernels.exact.polynomials import polynomial

    gain = Fraction(*model.exact("gain"))
    grouped, ok = [], True
    for numerator, denominator in model.exact("sections"):
        n, d = polynomial(numerator), polynomial(denominator)
        (part,) = factors_from_fractions([[(n, d)]], task)[0]
        gain *= part.gain
        ok = ok and len(part.zeros) <= len(part.poles)
        if part.poles or part.zeros:
            grouped.append(Section(_paired(part.poles), _paired(part.zeros)))
    if not ok:
        return cascade(factors_from_fractions(form_fractions(model), task), task)
    with in_range():
        return state_model(task, *cascade_states(grouped, gain, model.time.sampled))


def _paired(roots: list[complex]) -> tuple[complex, ...]:
    return tuple(sorted(roots, key=lambda r: -r.imag))


def modal(model: PoleResidue, task: Task) -> StateSpace:
    """One block for each pole or pair; the polynomial part in a descriptor block."""
    A, B, C, D = modal_states(model.poles, model.residues, model.powers, model.direct[-1])
    if model.direct.shape[0] > 1:
        return state_model(task, *append_polynomial_part(A, B, C, np.zeros_like(D), model.direct))
    return state_model(task, A, B, C, D)


def _companion_input(grid: Grid, task: Task, *, inputs: bool) -> tuple[list[list[Fraction]], list[Fraction], Any]:
    from realize.kernels.exact.polynomials import coefficients

    p, m = len(grid), len(grid[0])
    if (m if inputs else p) != 1:
        which, other = ("input", "observable-companion") if inputs else ("output", "controllable-companion")
        raise Refused(
            f"this companion form needs one {which} and there are {m if inputs else p}; "
            f"{'use ' + other if (p if inputs else m) == 1 else 'use modal'}"
        )
    flat = [pair for row in grid for pair in row]
    if len(flat) > 1:
        flat = [pair for row in _over_common_denominator(grid) for pair in row]
    denominator = flat[0][1]
    numerators, wholes = [], []
    for n, d in flat:
        whole, rest = divmod(n, d)
        improper = whole.degree() > 0
        wholes.append(whole if improper else None)
        numerators.append([_python(value) for value in coefficients(rest if improper else n)])
    return numerators, [_python(value) for value in coefficients(denominator)], wholes


def _companion(grid: Grid, task: Task, *, inputs: bool) -> StateSpace:
    from realize.kernels.exact.polynomials import coefficients

    numerators, denominator, wholes = _companion_input(grid, task, inputs=inputs)
    build = controllable_companion if inputs else observable_companion
    with in_range():
        A, B, C, D = build(numerators, denominator)
    if all(whole is None for whole in wholes):
        return state_model(task, A, B, C, D)
    degree = max(whole.degree() for whole in wholes if whole is not None)
    polynomial = np.zeros((degree + 1, *D.shape))
    for k, whole in enumerate(wholes):
        if whole is not None:
            values = rounded(coefficients(whole))[0]
            place = (k, 0) if inputs else (0, k)
            polynomial[(slice(degree + 1 - len(values), None), *place)] = values
    return state_model(task, *append_polynomial_part(A, B, C, D, polynomial))


def controllable(grid: Grid, task: Task) -> StateSpace:
    """Controllable companion form, one input."""
    return _companion(grid, task, inputs=True)


def observable(grid: Grid, task: Task) -> StateSpace:
    """Observable companion form, one output."""
    return _companion(grid, task, inputs=False)
