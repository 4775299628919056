"""The functions behind the conversions in double arithmetic: nothing exact is formed, whatever the order."""

from __future__ import annotations

import math
from collections.abc import Callable
from fractions import Fraction
from functools import wraps
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from realize.conversions.builders import Factors, assemble, cascade_channel, in_range, modal, rounded, state_model
from realize.errors import Refused
from realize.forms import append_polynomial_part, cascade_states, group_roots
from realize.kernels import factored
from realize.kernels.zeros import NormalRank, at_origin, connected_states, eigenvalues, paired, poles, zeros
from realize.models import Model, PoleResidue, Sections, StateSpace, TransferFunction, ZeroPoleGain
from realize.models.checks import MAX_EXPONENT

if TYPE_CHECKING:
    from realize.conversions.route import Task

Array = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
FactorGrid = list[list[Factors]]

EPS = float(np.finfo(float).eps)
#: Largest condition of an eigenvalue for which its residue is taken from its eigenvectors.
WORST_CONDITION = 1e10
#: Poles nearer to each other, relative to their size, have residues without a correct digit in six.
NEAREST_POLES = 1e6 * EPS
#: Binary exponents of the largest number that a model file can hold.
_LONGEST = int(MAX_EXPONENT * math.log2(10))
_BEYOND = "a number of the result lies beyond the range of doubles; scale time or gain first, or use --arithmetic exact"


def _guarded(function: Callable[..., Any]) -> Callable[..., Any]:
    """Turn what overflows or does not converge into words, and keep warnings of the arithmetic inside."""

    @wraps(function)
    def inner(value: Any, task: Task) -> Any:
        with np.errstate(all="ignore"), in_range():
            try:
                return function(value, task)
            except NormalRank:
                raise Refused(
                    "det(sE - A) is zero for every s within rounding, so no transfer function can be found in doubles; "
                    "use --arithmetic exact"
                ) from None
            except OverflowError:
                raise Refused(_BEYOND) from None
            except np.linalg.LinAlgError as error:
                raise Refused(f"the eigenvalues were not found in doubles ({error}); use --arithmetic exact") from None

    return inner


def _finite(*arrays: Any) -> None:
    for array in arrays:
        if not np.all(np.isfinite(array)):
            raise Refused(_BEYOND)


def _fraction(mantissa: float, exponent: int) -> Fraction:
    if not math.isfinite(mantissa) or abs(exponent) > _LONGEST:
        raise Refused(_BEYOND)
    return Fraction(mantissa) * Fraction(2) ** exponent


def _channels(model: Model, make: Callable[[int, int], Any]) -> list[list[Any]]:
    p, m = model.shape
    return [[make(i, j) for j in range(m)] for i in range(p)]


@_guarded
def factors_as_given(model: Model, task: Task) -> FactorGrid:
    """Poles, zeros and gain of a zero-pole-gain model, decimals at their nearest doubles."""
    assert isinstance(model, ZeroPoleGain)
    gain = model.exact("gain")
    return _channels(
        model,
        lambda i, j: Factors(model.zeros[i][j].tolist(), model.poles[i][j].tolist(), Fraction(*gain[i][j])),
    )


@_guarded
def factors_from_coefficients(model: Model, task: Task) -> FactorGrid:
    """Eigenvalues of balanced companion matrices; zeros at the origin exact; gain from the leading coefficients."""
    assert isinstance(model, TransferFunction)
    known: dict[bytes, list[complex]] = {}

    def roots(polynomial: factored.Scaled) -> list[complex]:
        key = polynomial[0].tobytes() + polynomial[1].tobytes()
        if key not in known:
            found = factored.polynomial_roots(polynomial)
            _finite(found)
            known[key] = paired(found).tolist()
        return known[key]

    def channel(i: int, j: int) -> Factors:
        above, below = model.exact_or_double("numerator", i, j), model.exact_or_double("denominator", i, j)
        if not np.any(above[0]):
            return Factors([], roots(below), Fraction(0))
        gain = _fraction(float(above[0][0] / below[0][0]), int(above[1][0] - below[1][0]))
        return Factors(roots(above), roots(below), gain)

    return _channels(model, channel)


@_guarded
def factors_from_sections(model: Model, task: Task) -> FactorGrid:
    """Roots of each section by the quadratic formula; the gain is the product of what leads."""
    assert isinstance(model, Sections)
    lists: tuple[list[complex], list[complex]] = ([], [])
    mantissa, exponent = math.frexp(model.gain)
    for section in model.sections:
        for row, found, sign in zip(section, lists, (1, -1), strict=True):
            if not np.any(row):
                return [[Factors([], lists[1], Fraction(0))]]
            row = row[int(np.argmax(row != 0)) :]
            m, e = np.frexp(row)
            roots = factored.polynomial_roots((m, e.astype(np.int64)))
            _finite(roots)
            found += paired(roots).tolist()
            mantissa = mantissa * m[0] if sign > 0 else mantissa / m[0]
            mantissa, more = math.frexp(mantissa)
            exponent += sign * int(e[0]) + more
    if mantissa == 0:
        return [[Factors([], lists[1], Fraction(0))]]
    return [[Factors(lists[0], lists[1], _fraction(mantissa, exponent))]]


def _points(found: ComplexArray, sampled: bool) -> ComplexArray:
    """Return points beside the dynamics, right of the axis (outside of the unit circle) by half of their size."""
    if sampled:
        found = np.log(found[found != 0])
    sizes = np.abs(found[np.isfinite(found)])
    sizes = np.sort(sizes[sizes > 0])
    if sizes.size == 0:
        sizes = np.ones(1)
    middle = np.exp(np.interp([0.0, 0.25, 0.5, 0.75, 1.0], np.linspace(0, 1, sizes.size), np.log(sizes)))
    if sampled:
        middle = np.minimum(middle, 2.0)
    direction = np.array([np.exp(1j * np.pi / 3), 1.0])
    points = np.unique((middle[:, None] * direction[None, :]).reshape(-1))
    return np.exp(points) if sampled else points


def _responses(model: StateSpace, points: ComplexArray) -> ComplexArray:
    """Return the response at a few points by one elimination each: [k][p][m]; infinite where that fails."""
    from realize.kernels.response import balanced_states

    A, B, C, E = balanced_states(model.A, model.B, model.C, model.E)
    values = np.full((points.size, *model.shape), np.inf, dtype=complex)
    for k, point in enumerate(points):
        try:
            state = np.linalg.solve((point * np.eye(A.shape[0]) if E is None else point * E) - A, B.astype(complex))
        except np.linalg.LinAlgError:
            continue
        values[k] = C @ state + model.D
    return values


@_guarded
def factors_from_states(model: Model, task: Task) -> FactorGrid:
    """Eigenvalues, and finite zeros channel by channel; the gain from responses away from poles and zeros."""
    assert isinstance(model, StateSpace)
    _finite(*(matrix for matrix in (model.A, model.B, model.C, model.D, model.E) if matrix is not None))
    own = poles(model.A, model.E)
    _finite(own)
    points = _points(own, model.time.sampled)
    responses = _responses(model, points)
    known = {np.arange(model.A.shape[0]).tobytes(): own}

    def channel(i: int, j: int) -> Factors:
        A, B, C, D, E = model.A, model.B[:, j : j + 1], model.C[i : i + 1], model.D[i : i + 1, j : j + 1], model.E
        if E is None:
            # states that zero entries alone keep off this channel cancel exactly
            part = connected_states(A, B[:, 0], C[0])
            A, B, C = A[np.ix_(part, part)], B[part], C[:, part]
            if part.tobytes() not in known:
                known[part.tobytes()] = eigenvalues(A)
            below = known[part.tobytes()]
        else:
            below = own
        try:
            above = zeros(A, B, C, D, E)
        except NormalRank:
            return Factors([], below.tolist(), Fraction(0))
        _finite(above, below)
        if not model.time.sampled:
            above = at_origin(above, np.block([[A, B], [C, D]]))
        usable = np.isfinite(responses[:, i, j]) & (responses[:, i, j] != 0)
        if not usable.any():
            if not np.any(responses[:, i, j]):
                return Factors([], below.tolist(), Fraction(0))
            raise OverflowError
        gain = factored.gain_from_responses(above, below, points[usable], responses[usable, i, j])
        return Factors(above.tolist(), below.tolist(), _fraction(*gain))

    return _channels(model, channel)


@_guarded
def factors_from_residues(model: Model, task: Task) -> FactorGrid:
    """Poles as given; zeros of each channel's modal state model."""
    return factors_from_states(modal(model, task), task)  # type: ignore[arg-type]


def _numerators_over_common(factors: FactorGrid) -> FactorGrid:
    """Return the channels over one list of poles, each as often as the channel with the most has it."""
    most: dict[complex, int] = {}
    for row in factors:
        for channel in row:
            for pole in dict.fromkeys(channel.poles):
                most[pole] = max(most.get(pole, 0), channel.poles.count(pole))
    common = [pole for pole, count in most.items() for _ in range(count)]
    grid = []
    for row in factors:
        line = []
        for channel in row:
            more = [pole for pole, n in most.items() for _ in range(n - channel.poles.count(pole))]
            line.append(Factors([*channel.zeros, *more] if channel.gain else [], common, channel.gain))
        grid.append(line)
    return grid


def _coefficients(roots: list[complex], gain: Fraction | None) -> list[Fraction]:
    if gain is not None and gain == 0:
        return [Fraction(0)]
    mantissas, exponents = factored.multiplied_out(np.array(roots, dtype=complex))
    if gain is not None:
        shift = abs(gain.numerator).bit_length() - gain.denominator.bit_length()
        mantissas = mantissas * float(gain / Fraction(2) ** shift)
        exponents = exponents + shift
    return [_fraction(m, e) if m else Fraction(0) for m, e in zip(mantissas.tolist(), exponents.tolist(), strict=True)]


@_guarded
def transfer_function(factors: FactorGrid, task: Task) -> TransferFunction:
    """Factors multiplied out, each coefficient with its own exponent on the way."""
    if task.common_denominator:
        factors = _numerators_over_common(factors)
    result: dict[str, Any] = {"numerator": [], "denominator": []}
    decimals: dict[str, dict[Any, str]] = {"numerator": {}, "denominator": {}}
    for i, row in enumerate(factors):
        lines: tuple[list[Any], list[Any]] = ([], [])
        for j, channel in enumerate(row):
            pair = _coefficients(channel.zeros, channel.gain), _coefficients(channel.poles, None)
            for name, values, line in zip(("numerator", "denominator"), pair, lines, strict=True):
                doubles, strings = rounded(values)
                line.append(doubles)
                decimals[name].update({(i, j, k): text for k, text in strings.items()})
        result["numerator"].append(lines[0])
        result["denominator"].append(lines[1])
    return TransferFunction(**result, decimals=decimals, **task.model.common())


def _without_common(channel: Factors) -> tuple[list[complex], list[complex]]:
    """Return zeros and poles without those that are equal to the last bit."""
    left, right = list(channel.zeros), []
    for pole in channel.poles:
        if pole in left:
            left.remove(pole)
        else:
            right.append(pole)
    return left, right


def _refuse_near(listed: ComplexArray) -> None:
    if listed.size < 2:
        return
    gap = np.abs(listed[:, None] - listed[None, :]) / np.maximum(np.abs(listed)[:, None], np.abs(listed)[None, :])
    gap[np.arange(listed.size), np.arange(listed.size)] = np.inf
    if np.nanmin(gap) < NEAREST_POLES:
        pole = listed[int(np.nanargmin(gap)) // listed.size]
        raise Refused(
            f"two poles near {pole:.6g} differ by {np.nanmin(gap):.1e} of their size: their residues would have no "
            "correct digit in doubles; keep state space or zero-pole-gain, or use --arithmetic exact"
        )


@_guarded
def pole_residue(factors: FactorGrid, task: Task) -> PoleResidue:
    """Residues as products of differences; poles that are equal to the last bit by their Taylor series."""
    p, m = len(factors), len(factors[0])
    entries: dict[tuple[complex, int], Any] = {}
    direct: dict[int, Any] = {}
    for i, row in enumerate(factors):
        for j, channel in enumerate(row):
            if not channel.gain:
                continue
            shift = abs(channel.gain.numerator).bit_length() - channel.gain.denominator.bit_length()
            mantissa = float(channel.gain / Fraction(2) ** shift)
            above, below = (np.array(part, dtype=complex) for part in _without_common(channel))
            distinct = np.array(list(dict.fromkeys(below.tolist())), dtype=complex)
            _refuse_near(distinct)
            for pole in distinct.tolist():
                if pole.imag < 0:
                    continue
                count = int(np.sum(below == pole))
                m_k, e_k = factored.local_series(above, below[below != pole], pole, count)
                values = mantissa * m_k
                series = np.ldexp(values.real, e_k + shift) + 1j * np.ldexp(values.imag, e_k + shift)
                _finite(series)
                for k in range(count):
                    value = complex(series[k]) if pole.imag else complex(series[k].real)
                    if value == 0 and k == 0:
                        raise OverflowError
                    for place, number in {pole: value, pole.conjugate(): value.conjugate()}.items():
                        key = (place, count - k)
                        entries.setdefault(key, np.zeros((p, m), dtype=complex))[i, j] = number
            degree = above.size - below.size
            if degree >= 0:
                terms = np.ldexp(mantissa * factored.series_at_infinity(above, below, degree + 1), shift)
                _finite(terms)
                for n, term in enumerate(terms.tolist()):
                    direct.setdefault(degree - n, np.zeros((p, m)))[i, j] = term
    keys = sorted(entries, key=lambda k: (abs(k[0]), k[0].real, abs(k[0].imag), -k[0].imag, k[1]))
    top = max(direct, default=0)
    return PoleResidue(
        poles=[key[0] for key in keys],
        powers=[key[1] for key in keys],
        residues=np.array([entries[key] for key in keys]).reshape(len(keys), p, m),
        direct=np.array([direct.get(power, np.zeros((p, m))) for power in range(top, -1, -1)]),
        **task.model.common(),
    )


@_guarded
def residues_from_states(model: Model, task: Task) -> PoleResidue:
    """Eigenvalues and eigenvectors; where those are ill-conditioned or E is given, products of poles and zeros."""
    import scipy.linalg

    from realize.kernels.response import balanced_states

    assert isinstance(model, StateSpace)
    n = model.A.shape[0]
    if n == 0:
        return PoleResidue(poles=[], residues=np.zeros((0, *model.shape)), direct=model.D, **model.common())
    if model.E is not None:
        return pole_residue(factors_from_states(model, task), task)  # type: ignore[no-any-return]
    A, B, C, _ = balanced_states(model.A, model.B, model.C, None)
    values, left, right = scipy.linalg.eig(A, left=True)
    overlap = np.einsum("ij,ij->j", left.conj(), right)
    condition = float(np.max(1 / np.abs(overlap)))
    if not condition < WORST_CONDITION:
        try:
            return pole_residue(factors_from_states(model, task), task)  # type: ignore[no-any-return]
        except Refused as reason:
            raise Refused(
                f"the eigenvectors have condition {condition:.1e}, and products of factors do not help: {reason}"
            ) from None
    into = (left.conj().T @ B) / overlap[:, None]
    out = C @ right
    upper, real = values.imag > 0, values.imag == 0
    residues = out.T[:, :, None] * into[:, None, :]
    found = np.concatenate([np.stack([values[upper], values[upper].conj()], axis=1).reshape(-1), values[real]])
    parts = np.concatenate(
        [
            np.stack([residues[upper], residues[upper].conj()], axis=1).reshape(-1, *model.shape),
            residues[real].real.astype(complex),
        ]
    )
    _finite(found, parts)
    # a pole with several independent eigenvectors is listed once, with the sum of its residues
    distinct, where = np.unique(found, return_inverse=True)
    together = np.zeros((distinct.size, *model.shape), dtype=complex)
    np.add.at(together, where, parts)
    order = np.lexsort((-distinct.imag, np.abs(distinct.imag), distinct.real, np.abs(distinct)))
    return PoleResidue(poles=distinct[order], residues=together[order], direct=model.D, **model.common())


@_guarded
def cascade(factors: FactorGrid, task: Task) -> StateSpace:
    """One cascade for each channel; the polynomial part of an improper one by division in doubles."""
    sampled = task.model.time.sampled

    def improper(channel: Factors) -> tuple[Any, ...]:
        above = np.array([float(value) for value in _coefficients(channel.zeros, channel.gain)])
        below = np.array([float(value) for value in _coefficients(channel.poles, None)])
        whole, rest = np.polydiv(above, below)
        _finite(whole, rest)
        lead = np.flatnonzero(np.abs(rest) > above.size * EPS * np.abs(above).max())
        part = Factors([], channel.poles, Fraction(0))
        if lead.size and below.size > 1:
            rest = rest[lead[0] :]
            mantissa, exponent = np.frexp(rest)
            found = paired(factored.polynomial_roots((mantissa, exponent.astype(np.int64))))
            _finite(found)
            part = Factors(found.tolist(), channel.poles, Fraction(float(rest[0])))
        states = cascade_states(group_roots(part.zeros, part.poles, sampled), part.gain, sampled)
        return (*states, whole[:, None, None])

    def one(channel: Factors) -> tuple[Any, ...]:
        return improper(channel) if len(channel.zeros) > len(channel.poles) else cascade_channel(channel, task)

    return assemble(task, [[one(channel) for channel in row] for row in factors])


def _companion(model: TransferFunction, task: Task, *, inputs: bool) -> StateSpace:
    p, m = model.shape
    if (m if inputs else p) != 1:
        which, other = ("input", "observable-companion") if inputs else ("output", "controllable-companion")
        raise Refused(
            f"this companion form needs one {which} and there are {m if inputs else p}; "
            f"{'use ' + other if (p if inputs else m) == 1 else 'use modal'}"
        )
    first = model.denominator[0][0]
    if any(not np.array_equal(d, first) for row in model.denominator for d in row):
        common = _numerators_over_common(factors_from_coefficients(model, task))
        numerators = [_coefficients(channel.zeros, channel.gain) for row in common for channel in row]
        denominator = _coefficients(common[0][0].poles, None)
        above = [np.array([float(value) for value in values]) for values in numerators]
        below = np.array([float(value) for value in denominator])
    else:
        above, below = [n for row in model.numerator for n in row], first
    if model.beyond_doubles:
        raise OverflowError
    n = below.size - 1
    degree = max(max(values.size for values in above) - 1 - n, 0)
    a = below[1:] / below[0]
    rows, wholes = np.zeros((len(above), n)), np.zeros((degree + 1, len(above)))
    for k, values in enumerate(above):
        whole, rest = np.polydiv(values, below) if values.size > n else (np.zeros(1), values)
        rest = (rest / below[0])[-n:] if n else np.zeros(0)
        rows[k, n - rest.size :] = rest
        wholes[degree + 1 - whole.size :, k] = whole
    _finite(a, rows, wholes)
    if np.any((a == 0) & (below[1:] != 0)):
        raise OverflowError
    A = np.vstack([-a[None, :], np.eye(n)[:-1]]) if n else np.zeros((0, 0))
    A = A + 0.0
    B = np.eye(n)[:, :1] if n else np.zeros((0, 1))
    A, B, C = (A, B, rows) if inputs else (A.T, rows.T, B.T)
    polynomial = wholes[:, :, None] if inputs else wholes[:, None, :]
    if degree == 0:
        return state_model(task, A, B, C, polynomial[-1])
    return state_model(task, *append_polynomial_part(A, B, C, np.zeros(polynomial[0].shape), polynomial))


@_guarded
def controllable(model: TransferFunction, task: Task) -> StateSpace:
    """Controllable companion form of coefficients as they stand, one input."""
    return _companion(model, task, inputs=True)


@_guarded
def observable(model: TransferFunction, task: Task) -> StateSpace:
    """Observable companion form of coefficients as they stand, one output."""
    return _companion(model, task, inputs=False)
