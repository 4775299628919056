"""Singular values and angles of models over all frequencies, as exact curves whose largest value is proved."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from math import comb
from typing import Any

import numpy as np

from realize.errors import InputError, Refused
from realize.models import Model, StateSpace, is_data
from realize.schema import Claim, judge
from realize.verification.proof import square_root
from realize.verification.views import View

#: Number of minors times their degree up to which a transfer matrix is taken apart exactly.
MOST_MINORS = 8000
#: Largest degree in x of an inequality that is proved.
LARGEST_DEGREE = 160
#: Polynomial products for the angles between two graphs, times their degree.
MOST_PRODUCTS = 60_000


@dataclass(frozen=True)
class Extreme:
    """The largest value of a curve: value, frequency (rad/s, infinite at the end), and a proved bound or None."""

    value: float
    frequency: float
    bound: float | None

    @property
    def uncertainty(self) -> float | None:
        """What may be missing from the value."""
        if self.bound is None:
            return None
        return 0.0 if not math.isfinite(self.value) else above(max(self.bound - self.value, 0.0))


def above(value: float) -> float:
    """Return the next double."""
    return math.nextafter(value, math.inf)


def model_in(value: Any, what: str = "model") -> Model:
    """Return the parametric model in a model or a conversion.

    Raises
    ------
    InputError
        If it is neither.
    Refused
        If it is data.
    """
    model = getattr(value, "model", value)
    if not isinstance(model, Model):
        raise InputError(f"{what}: {type(value).__name__}", "a model or a Conversion")
    if is_data(model):
        raise Refused(f"the {what} is data: between its lines nothing is known; fit a model first")
    return model


def same_base(first: Model, second: Model) -> None:
    """Raise `Refused` unless both have the same time base."""
    if first.time.domain != second.time.domain or (
        first.time.sampled and first.time.exact_period != second.time.exact_period
    ):
        raise Refused("the models have different time bases; sample one of them like the other first")


def minor_count(p: int, m: int) -> int:
    """Return how many minors a p x m matrix has."""
    return sum(comb(p, k) * comb(m, k) for k in range(1, min(p, m) + 1))


def minors_affordable(view: View) -> bool:
    """Return whether the minors of a model can be formed exactly (from sizes alone)."""
    p, m = view.model.shape
    count = minor_count(p, m)
    if count > MOST_MINORS or view.fractions is None:
        return False
    largest = max(max(n.degree(), d.degree()) for row in view.fractions for n, d in row)
    return count * max(largest, 1) <= MOST_MINORS and largest <= LARGEST_DEGREE


def minors_in(view: View, transposed: bool = False) -> Any:
    """Return the minors of a model (of its transpose), in s or in the s of z = (1 + s) / (1 - s); formed once."""
    from realize.kernels.exact.graphs import continuous, minors_of

    def make() -> Any:
        assert view.fractions is not None
        grid: Any = view.fractions if view.period is None else continuous(view.fractions)
        return minors_of([list(row) for row in zip(*grid, strict=True)] if transposed else grid)

    return view.model.remembered("minors transposed" if transposed else "minors", make)


def largest_of(
    squares: Sequence[Any],
    period: Any,
    unit_from: Sequence[Any],
    intervals: Sequence[tuple[float, float]] = ((0.0, math.inf),),
) -> Extreme:
    """Return the largest root of a curve over frequencies, proved where the intervals of the proof suffice.

    Parameters
    ----------
    squares : sequence of polynomials
        S_0 to S_q in x = w^2 (sampled: tan^2(w T / 2)).
    period : fmpq or None
    unit_from : sequence of polynomials
        Frequencies are counted in the middle of their roots.
    intervals : sequence of (low, high)
        rad/s, ends included.
    """
    from realize.kernels.exact.graphs import middle
    from realize.kernels.exact.numbers import power_of_two
    from realize.kernels.exact.polynomials import stretched
    from realize.kernels.exact.suprema import Curve, supremum

    exponents = [middle(p) for p in unit_from if p.degree() > 0] if period is None else []
    unit = power_of_two(round(sum(exponents) / len(exponents)) if exponents else 0)
    square = unit * unit
    curve = Curve([stretched(p, square) if unit != 1 else p for p in squares])
    places = []
    for low, high in intervals:
        left = _place(low, period, unit, up=False)
        if left is not None:
            places.append((left, _place(high, period, unit, up=True)))
    if not places:
        return Extreme(0.0, 0.0, 0.0)
    found = supremum(curve, places)
    frequency = _frequency(found.x, period, unit)
    if found.square is None:
        return Extreme(math.inf, frequency, math.inf)
    bound = None if found.bound is None else (above(above(square_root(found.bound))) if found.bound else 0.0)
    return Extreme(square_root(found.square), frequency, bound)


def _place(frequency: float, period: Any, unit: Any, up: bool) -> Any:
    """Return x / unit^2 of a frequency, rounded outwards if it is not exact; None at infinity (sampled: at pi / T)."""
    from flint import arb, fmpq

    from realize.kernels.exact.numbers import exact_value, fraction, precision

    if not math.isfinite(frequency):
        return None
    if period is None:
        w = fraction(float(frequency).as_integer_ratio()) / unit
        return w * w
    if frequency == 0:
        return fmpq(0)
    with precision(120):
        half = arb(frequency) * arb(period) / 2
        if not half < arb.pi() / 2:
            return None
        tangent = half.tan()
        return exact_value((tangent * tangent).upper() if up else (tangent * tangent).lower())


def _frequency(x: Any, period: Any, unit: Any) -> float:
    """Return the frequency (rad/s) of x / unit^2."""
    from flint import arb

    from realize.kernels.exact.numbers import near_ball, precision

    if x is None:
        return math.inf if period is None else math.pi / float(period)
    with precision(128):
        root = arb(x).sqrt()
        return near_ball(root * arb(unit)) if period is None else near_ball(2 * root.atan() / arb(period))


def pole_on_axis(view: View) -> float | None:
    """Return the frequency (rad/s) of a pole on the axis or unit circle, infinite for an improper model, or None."""
    from flint import fmpq

    from realize.kernels.exact.polynomials import even_odd
    from realize.kernels.exact.roots import roots

    minors = minors_in(view)
    if minors.poles.degree() < minors.degree:
        return math.inf if view.period is None else math.pi / view.period
    if not minors.poles[0]:
        return 0.0
    even, odd = even_odd(minors.poles)
    common = even.gcd(odd) if odd else even
    if common.degree() < 1:
        return None
    for root in roots(common):
        if root.real and not root.value.real > 0:
            x = -root.exact if root.exact is not None else fmpq(*(-root.value.real).as_integer_ratio())
            return _frequency(x, view.exact_period, fmpq(1))
    return None


def extreme_claim(
    name: str,
    found: Extreme,
    *,
    unit: str = "absolute",
    basis: Any = None,
    note: str = "",
    relative: float | None = None,
) -> Claim:
    """Return the claim of a largest value."""
    return judge(
        name,
        found.value,
        unit=unit,
        basis=basis or ("measured" if found.bound is None else "proved"),
        uncertainty=found.uncertainty,
        where={"frequency": found.frequency if math.isfinite(found.frequency) else None},
        relative=relative,
        note=note,
    )


def sampled_peak(view: View, size: Callable[[np.ndarray], np.ndarray], *others: View, rounds: int = 3) -> Extreme:
    """Return the largest value of a function of frequency found in doubles; nothing is proved."""
    from realize.verification.bands import whole_band
    from realize.verification.search import largest, seeds

    band = whole_band(view, other=others[0] if others else None)
    w = seeds(band, view.rough_poles, *(other.rough_poles for other in others))
    if isinstance(view.model, StateSpace) and view.model.large_response() is not None:
        from realize.kernels.schur_response import SHARE, thinned

        poles = np.concatenate([one.rough_poles.s for one in (view, *others)])
        w = thinned(w, np.asarray(1j * w, dtype=complex), poles, SHARE)
        # samples that close together leave little to one zoom
        value, where = largest(size, w, band, rounds=rounds)
    else:
        value, where = largest(size, w, band)
    return Extreme(value, where, None)
