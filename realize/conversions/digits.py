"""Results in decimals: every number correctly rounded to a number of significant digits, however many doubles have.

The functions here take the place of the builders of the same rows when ``digits`` is asked for. A number comes with
what is needed to know it as exactly as wanted: a rational, or a ball that can be made narrower. It is rounded when both
ends of the ball round to the same decimal; a decimal tie, where that never happens, is a rational with one digit more,
found as the simplest rational in the ball, and rounded half to even.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from realize.conversions import builders
from realize.conversions.builders import Factors, Grid
from realize.errors import Refused
from realize.forms import group_roots
from realize.models import Model, PoleResidue, Sections, TransferFunction, ZeroPoleGain
from realize.models.checks import MAX_DIGITS, MAX_EXPONENT

if TYPE_CHECKING:
    from realize.conversions.route import Task

#: From this number of digits on, a number that is a double already stays one: it is exact.
DOUBLE_DIGITS = 17
#: Bits beyond the digits at the first try, and the most that are spent before a tie is taken for granted.
GUARD_BITS, MOST_BITS = 64, 1 << 17
_SMALLEST = 2.0**-1022


@dataclass(frozen=True)
class Number:
    """A real number: a rational, or a function of a precision (bits) that gives a ball around it."""

    exact: Any = None
    at: Callable[[int], Any] | None = None


@dataclass(frozen=True)
class ExactRoot:
    """A pole or zero: its nearest double, and both parts to any precision."""

    value: complex
    real: Number
    imag: Number


@dataclass(frozen=True)
class ExactFactors(Factors):
    """Poles, zeros and gain of one channel, to any precision."""

    exact_zeros: list[ExactRoot]
    exact_poles: list[ExactRoot]


def decimal_text(number: Number, digits: int) -> str:
    """Return a number correctly rounded to significant decimal digits.

    Raises
    ------
    Refused
        If it lies beyond the exponents of a model file.
    """
    from realize.kernels.exact.numbers import decimal_string, exact_value, simplest

    if number.exact is not None or number.at is None:
        return _checked(decimal_string(number.exact, digits), digits)
    bits = int(3.33 * digits) + GUARD_BITS
    while True:
        ball = number.at(bits)
        if ball.is_finite() and not ball.contains(0):
            middle, radius = exact_value(ball), exact_value(ball.rad())
            low, high = (decimal_string(end, digits) for end in (middle - radius, middle + radius))
            if low == high:
                return _checked(low, digits)
            between = simplest(middle - radius, middle + radius)
            # a rational this short in a ball this narrow is the number itself
            if 2 * _size(between) + GUARD_BITS < bits or bits >= MOST_BITS:
                return _checked(decimal_string(between, digits), digits)
        elif bits >= MOST_BITS:
            raise Refused("a number of the result could not be told from zero; ask for fewer digits")
        bits *= 2


def _size(value: Any) -> int:
    return int(value.p).bit_length() + int(value.q).bit_length()


def _checked(text: str, digits: int) -> str:
    """Return the text within the digits and exponents that a model file takes."""
    if sum(c.isdigit() for c in text.partition("e")[0]) > MAX_DIGITS:
        # leading zeros count as digits in a file
        sign, body = ("-", text[1:]) if text.startswith("-") else ("", text)
        fractional = body.partition(".")[2]
        significant = fractional.lstrip("0")
        tail = f".{significant[1:]}" if len(significant) > 1 else ""
        text = f"{sign}{significant[0]}{tail}e-{len(fractional) - len(significant) + 1}"
    if abs(int(text.partition("e")[2] or 0)) > MAX_EXPONENT:
        raise Refused(
            f"a number of the result would be {text[:6]}e{text.partition('e')[2]}, beyond what a model file can hold; "
            "keep state space, zero-pole-gain or sections, or scale time and gain first"
        )
    return text


def written(number: Number, digits: int) -> tuple[float, str | None]:
    """Return the nearest double of a number's decimal, and the decimal, or None where the double is exact."""
    from flint import fmpq

    from realize.kernels.exact.numbers import nearest

    if number.exact is not None and not number.exact:
        return 0.0, None
    if number.exact is not None and digits >= DOUBLE_DIGITS and _is_double(number.exact):
        return nearest(number.exact), None
    text = decimal_text(number, digits)
    mantissa, _, exponent = text.partition("e")
    whole, _, part = mantissa.partition(".")
    power = int(exponent or 0) - len(part)
    value = fmpq(int(whole + part)) * fmpq(10) ** power
    if number.exact is not None and value == number.exact and _is_double(value):
        return nearest(value), None
    return nearest(value), text


def _is_double(value: Any) -> bool:
    from flint import fmpq

    from realize.kernels.exact.numbers import nearest

    double = nearest(value)
    return bool(np.isfinite(double)) and abs(double) >= _SMALLEST and fmpq(*double.as_integer_ratio()) == value


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


def _root(root: Any) -> ExactRoot:
    """Return a root of `realize.kernels.exact.roots` with both parts as numbers."""
    from flint import fmpq

    zero = Number(fmpq(0))
    value = complex(root.value.real, root.value.imag + 0.0)
    if root.exact is not None:
        return ExactRoot(value, Number(root.exact), zero)
    real = zero if root.on_axis else Number(at=lambda bits: _part(root, bits, 0))
    return ExactRoot(value, real, zero if root.real else Number(at=lambda bits: _part(root, bits, 1)))


def _part(root: Any, bits: int, part: int) -> Any:
    """Return real or imaginary part as a ball with a relative accuracy of so many bits of its own."""
    work = bits
    while True:
        ball = root.at(work)
        value = ball.imag if part else ball.real
        if value.rel_accuracy_bits() >= bits or work > MOST_BITS:
            return value
        work += max(bits - value.rel_accuracy_bits(), 32) if work < 4 * bits else work


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
        found = [_root(root) for root in roots(polynomial) for _ in range(root.multiplicity)]
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
                value, texts = _complex(_root(root), digits)
                if not np.isfinite(value):
                    raise Refused("a pole lies beyond the range of doubles; scale time first")
                key = (texts.get(0, value.real), texts.get(1, value.imag))
                poles[key] = (value, texts)
                if not root.real and root.ball.imag < 0:
                    # the conjugate of the one before
                    terms = [[real, _negative(imag)] for real, imag in terms]
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


def _negative(number: tuple[float, str | None]) -> tuple[float, str | None]:
    double, text = number
    if text is not None:
        text = text[1:] if text.startswith("-") else f"-{text}"
    return 0.0 - double, text


class Laurent:
    """Residues of n / d at one root of d, to any precision.

    With n(r + t) / d(r + t) = sum_j q_j t^(j - m) at a pole of multiplicity m, the residue of power k is q_(m - k).
    """

    def __init__(self, n: Any, d: Any, root: Any) -> None:
        self.root, m = root, root.multiplicity
        above, below = [n], [d]
        for k in range(1, 2 * m):
            above.append(above[-1].derivative() / k)
            below.append(below[-1].derivative() / k)
        self.above, self.below = above[:m], below[m:]
        self.known: dict[int, list[Any]] = {}

    def series(self, bits: int) -> list[Any]:
        """Return q_0 .. q_(m-1): rationals at a rational pole, complex balls elsewhere."""
        if bits not in self.known:
            from flint import acb_poly

            from realize.kernels.exact.numbers import precision

            with precision(bits + 32):
                if self.root.exact is not None:
                    above, below = ([p(self.root.exact) for p in side] for side in (self.above, self.below))
                else:
                    r = self.root.at(bits + 32)
                    above, below = ([acb_poly(p)(r) for p in side] for side in (self.above, self.below))
                q: list[Any] = []
                for k, value in enumerate(above):
                    rest = value
                    for i in range(1, k + 1):
                        rest = rest - below[i] * q[k - i]
                    q.append(rest / below[0])
            self.known[bits] = q
        return self.known[bits]

    def parts(self, power: int, rough: complex) -> list[Number]:
        """Return real and imaginary part of the residue of a power; those that are exactly zero from the rough one."""
        from flint import fmpq

        k = self.root.multiplicity - power
        if self.root.exact is not None:
            return [Number(self.series(0)[k]), Number(fmpq(0))]

        def ball(part: int) -> Callable[[int], Any]:
            return lambda bits: self.series(bits)[k].imag if part else self.series(bits)[k].real

        numbers = []
        for part, double in enumerate((rough.real, rough.imag)):
            zero = double == 0.0 and ball(part)(2 * GUARD_BITS).contains(0)
            numbers.append(Number(fmpq(0)) if zero or (part and self.root.real) else Number(at=ball(part)))
        return numbers


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
            numbers = _monic(mine)
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


def _monic(roots: list[ExactRoot]) -> list[Number]:
    """Return the coefficients of the monic polynomial of a conjugate pair (given by one member) or one or two reals."""
    from flint import fmpq

    one = Number(fmpq(1))
    if not roots:
        return [one]
    if roots[0].value.imag != 0:
        x, y = roots[0].real, roots[0].imag
        return [one, _combined(lambda a: -2 * a, x), _combined(lambda a, b: a * a + b * b, x, y)]
    if len(roots) == 1:
        return [one, _combined(lambda a: -a, roots[0].real)]
    x, y = roots[0].real, roots[1].real
    return [one, _combined(lambda a, b: -(a + b), x, y), _combined(lambda a, b: a * b, x, y)]


def _combined(join: Callable[..., Any], *numbers: Number) -> Number:
    """Return a function of numbers, exact where all are rational."""
    if all(number.exact is not None for number in numbers):
        return Number(join(*(number.exact for number in numbers)))

    def at(bits: int) -> Any:
        from flint import arb

        from realize.kernels.exact.numbers import precision

        with precision(bits + 32):
            balls = [arb(n.exact) if n.at is None else n.at(bits + 32) for n in numbers]
            return join(*balls)

    return Number(at=at)


#: Builders that write decimals, by source and target node.
BUILDERS: dict[tuple[str, str], Callable[[Any, Any], Any]] = {
    ("exact-fractions", "transfer-function"): transfer_function,
    ("exact-fractions", "pole-residue"): pole_residue,
    ("exact-fractions", "factors"): factors_from_fractions,
    ("zero-pole-gain", "factors"): factors_as_given,
    ("factors", "zero-pole-gain"): zero_pole_gain,
    ("factors", "sections"): sections,
}
