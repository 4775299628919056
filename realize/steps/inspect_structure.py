"""Structure of a model for `inspect`: damping and frequency, indices, relative degrees, and what scaling would gain."""

from __future__ import annotations

from typing import Any

import numpy as np

from realize.models import MatrixFraction, Model, SecondOrder, StateSpace, TransferFunction
from realize.models.state_space import is_identity
from realize.verification import View
from realize.verification.views import exact_fractions

#: Largest state models whose indices are exact ranks; beyond, they are not given.
EXACT_INDICES_ORDER = 200
#: Largest block Hankel matrix (rows times columns) for the indices of other kinds.
HANKEL_ENTRIES = 250_000


def damping_and_frequency(view: View, poles: list[Any]) -> tuple[list[float | None], list[float | None]]:
    """Return damping ratio -Re s / |s| and frequency |s| (rad/s) of each listed pole.

    Sampled poles count as s = ln(z) / period. Negative damping: unstable. Damping is None at the origin, and both are
    None for a pole at z = 0, which has no continuous equivalent.
    """
    damping: list[float | None] = []
    frequency: list[float | None] = []
    logarithms = _logarithms(view) if view.period is not None else {}
    for re, im, _ in poles:
        s: complex | None = complex(re, im)
        if view.period is not None:
            if s == 0:
                damping.append(None)
                frequency.append(None)
                continue
            known = logarithms.get((re, im))
            s = (complex(np.log(complex(re, im))) if known is None else known) / view.period
        assert s is not None
        size = float(np.hypot(s.real, s.imag))
        frequency.append(size if np.isfinite(size) else None)
        damping.append(-s.real / size + 0.0 if size and np.isfinite(size) else None)
    return damping, frequency


def _logarithms(view: View) -> dict[tuple[float, float], complex]:
    """Return ln z of every pole to full accuracy, however near z is to 1."""
    from realize.kernels.exact.roots import roots
    from realize.verification.views import logarithm

    if view.fractions is None:
        return {}
    if isinstance(view.model, (StateSpace, SecondOrder, MatrixFraction)) or view.model.shape == (1, 1):
        polynomials = [exact_fractions(view.model, cancel=False)[0][0][1]]
    else:
        polynomials = [d for row in view.fractions for _, d in row]
    return {
        (root.value.real, root.value.imag): logarithm(root)
        for d in polynomials
        if d.degree() > 0
        for root in roots(d)
        if root.value != 0
    }


def indices_of(view: View) -> tuple[list[int] | None, list[int] | None]:
    """Return controllability indices (one an input) and observability indices (one an output).

    Of a state model as given, hidden states left out by themselves; of another kind those of a minimal realization.
    None where they are not known: improper or singular, or too large for exact ranks.
    """
    model = view.model
    if isinstance(model, StateSpace):
        if (model.order or 0) > EXACT_INDICES_ORDER or not is_identity(model.E):
            return None, None
        from realize.kernels.exact.indices import krylov_indices

        A, B, C = (model.exact(name) for name in "ABC")
        transposed = [[list(column) for column in zip(*matrix, strict=True)] for matrix in (A, C)]
        if not A:
            return [0] * model.shape[1], [0] * model.shape[0]
        return krylov_indices(A, B), krylov_indices(transposed[0], transposed[1])
    if view.fractions is None:
        return None, None
    from realize.kernels.exact.hankel_values import common_parts
    from realize.kernels.exact.indices import markov_indices
    from realize.kernels.exact.order import series_modulo
    from realize.kernels.exact.pencils import prime

    p, m = model.shape
    if any(n.degree() > d.degree() for row in view.fractions for n, d in row):
        return None, None
    numerators, common = common_parts(view.fractions)
    count = common.degree()
    if count == 0:
        return [0] * m, [0] * p
    if count * count * p * m > HANKEL_ENTRIES:
        return None, None
    k = 0
    while True:
        q = prime(k)
        try:
            channels = [series_modulo(n, common, 2 * count, q)[1:] for row in numerators for n in row]
        except (ValueError, ZeroDivisionError):  # the prime divides a denominator
            k += 1
            continue
        return markov_indices([list(values) for values in zip(*channels, strict=True)], count, p, m, q)


def relative_degrees(view: View) -> list[list[int | None]] | None:
    """Return degree of denominator minus degree of numerator for each channel [output][input]; None for a zero channel.

    Negative where improper. None altogether where exact arithmetic takes too long.
    """
    if view.fractions is not None:
        return [[d.degree() - n.degree() if n else None for n, d in row] for row in view.fractions]
    model = view.model
    if isinstance(model, StateSpace) and is_identity(model.E) and (model.order or 0) <= EXACT_INDICES_ORDER:
        from realize.kernels.exact.indices import state_relative_degrees

        A, B, C, D = (model.exact(name) for name in "ABCD")
        return state_relative_degrees(A, B, C, D)
    return None


def scaling_of(model: Model) -> dict[str, Any] | None:
    """Return what other units, in powers of two, would gain.

    State models: the exponents of ``states``, ``inputs``, ``outputs`` and ``time``; ``before`` and ``after``, Frobenius
    norms of A in the model's unit of time; ``ratio`` of the two; ``condition`` of the diagonal change of states.
    Coefficients: the exponent of ``time`` that makes the coefficients most alike, and ``before`` and ``after``, the
    logarithm (base 2) of the largest over the smallest of a denominator. None for other kinds.
    """
    if isinstance(model, StateSpace) and model.order and is_identity(model.E):
        from realize.kernels.unit_scaling import scale_model

        if not all(np.all(np.isfinite(matrix)) for matrix in (model.A, model.B, model.C)):
            return None
        scaled = scale_model(model.A, model.B, model.C, sampled=model.time.sampled)
        largest = float(np.abs(model.A).max())
        unit = int(np.frexp(largest)[1]) if largest else 0
        with np.errstate(over="ignore", under="ignore"):
            before = float(np.linalg.norm(np.ldexp(model.A, -unit)))
            after = float(np.linalg.norm(np.ldexp(scaled.A, np.clip(scaled.time - unit, -2000, 2000))))
        spread = int(scaled.states.max() - scaled.states.min())
        return {
            "states": scaled.states.tolist(),
            "inputs": scaled.input,
            "outputs": scaled.output,
            "time": scaled.time,
            "before": _finite(np.ldexp(before, unit)),
            "after": _finite(np.ldexp(after, unit)),
            "ratio": _finite(before / after) if after else None,
            "condition": _finite(np.ldexp(1.0, spread)) if spread < 1024 else None,
        }
    if isinstance(model, TransferFunction) and not model.time.sampled:
        return _of_coefficients(model)
    return None


def _finite(value: Any) -> float | None:
    number = float(value)
    return number if np.isfinite(number) else None


def _of_coefficients(model: TransferFunction) -> dict[str, Any] | None:
    from realize.kernels.exact.numbers import binary_exponent, fraction

    lists = []
    for row in model.exact("denominator"):
        for ratios in row:
            entries = [(k, binary_exponent(fraction(r))) for k, r in enumerate(reversed(ratios)) if fraction(r)]
            if len(entries) > 1:
                lists.append(entries)
    if not lists:
        return None
    slopes = [(e[0][1] - e[-1][1]) / (e[-1][0] - e[0][0]) for e in lists]
    time = round(float(np.mean(slopes)))

    def spread(unit: int) -> int:
        return max(max(e + k * unit for k, e in entries) - min(e + k * unit for k, e in entries) for entries in lists)

    return {"time": time, "before": spread(0), "after": spread(time)}
