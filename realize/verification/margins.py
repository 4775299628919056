"""Margins of a single loop u = -K y, with every crossing: exact roots of polynomials."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from realize.errors import InputError, Refused
from realize.models import Model, TransferFunction
from realize.schema import Claim, judge
from realize.verification.curves import Extreme, extreme_claim, largest_of, minors_affordable, model_in
from realize.verification.feedback import _angles, _loop_of, loop_is_stable
from realize.verification.views import view_of

#: Relative rounding of a margin evaluated at a correctly rounded crossing.
ROUNDING = 2.0**-48


@dataclass(frozen=True)
class GainCrossing:
    """A frequency (rad/s) where the loop gain is 1, how far its phase is from -180 degrees, and the dead time to there.

    `phase` is in (-180, 180] degrees; `delay` in seconds is the least dead time that puts the loop on -1 (None at zero
    frequency).
    """

    frequency: float
    phase: float
    delay: float | None


@dataclass(frozen=True)
class PhaseCrossing:
    """A frequency (rad/s; infinite at the end) where the loop gain is real and negative, and the factor that makes it
    -1."""

    frequency: float
    factor: float


@dataclass(frozen=True)
class LoopMargins:
    """Margins of a loop, each a claim, and all crossings by rising frequency.

    Attributes
    ----------
    stable : bool
        Decided exactly. Where it is False the margins are not available and the sensitivities infinite.
    gain_margin : Claim
        Smallest factor above 1 on the loop gain that puts it on -1; infinite if there is none.
    gain_reduction_margin : Claim
        Largest factor below 1 that does; 0 if there is none.
    phase_margin : Claim
        Degrees; infinite without a gain crossing.
    delay_margin : Claim
        Least dead time, s, that puts the loop on -1.
    largest_sensitivity, largest_complementary_sensitivity : Claim
        Largest moduli of 1 / (1 + L) and of L / (1 + L).
    """

    stable: bool
    gain_margin: Claim
    gain_reduction_margin: Claim
    phase_margin: Claim
    delay_margin: Claim
    largest_sensitivity: Claim
    largest_complementary_sensitivity: Claim
    gain_crossings: tuple[GainCrossing, ...]
    phase_crossings: tuple[PhaseCrossing, ...]


def loop_margins(plant: Any, controller: Any = None) -> LoopMargins:
    """Return gain, phase and delay margin and largest sensitivities of the loop L = P K with u = -K y.

    Continuous or sampled. Gain crossings are the roots of N N~ - D D~, phase crossings those of the imaginary part
    of N D*, polynomials in x = w^2 (sampled: tan^2(w T / 2)), correctly rounded.

    Parameters
    ----------
    plant : Model or Conversion
        One input, one output; without a controller, the loop gain L itself.
    controller : Model or Conversion, optional

    Returns
    -------
    LoopMargins

    Raises
    ------
    Refused
        With dead time, or too large for exact arithmetic.
    InputError
        With more than one input or output.
    """
    P = model_in(plant, "plant")
    K = model_in(controller, "controller") if controller is not None else _unity(P)
    for model in (P, K):
        if model.shape != (1, 1):
            raise InputError(
                f"{model.shape[0]} outputs and {model.shape[1]} inputs",
                "a single loop; realize.stability_margin takes several",
            )
    _loop_of(P, K)
    one, two = view_of(P), view_of(K)
    if not (minors_affordable(one) and minors_affordable(two)):
        raise Refused("the loop is too large for exact arithmetic; reduce the plant first")
    found = _angles(one, two, controller=True)
    stable = found is not None and loop_is_stable(found)
    assert one.fractions is not None and two.fractions is not None
    (n1, d1), (n2, d2) = one.fractions[0][0], two.fractions[0][0]
    loop = _Loop(n1 * n2, d1 * d2, one.exact_period)
    return _collected(loop, stable)


def _unity(P: Model) -> Model:
    return TransferFunction(numerator=[1.0], denominator=[1.0], time=P.time)


class _Loop:
    """A loop gain N / D in s, or in the s of z = (1 + s) / (1 - s), without common factor."""

    def __init__(self, n: Any, d: Any, period: Any) -> None:
        from realize.kernels.exact.graphs import continuous
        from realize.kernels.exact.polynomials import reduce_fraction

        n, d = reduce_fraction(n, d)
        if period is not None:
            n, d = continuous([[(n, d)]])[0][0]
        self.n, self.d, self.period = n, d, period
        self.degree = max(n.degree(), d.degree())

    def frequency(self, x: Any) -> float:
        """Return the frequency (rad/s) of a positive root x given in balls or as a rational, None for infinity."""
        from flint import arb

        from realize.kernels.exact.numbers import near_ball, precision

        if x is None:
            return math.inf if self.period is None else math.pi / float(self.period)
        with precision(160):
            root = arb(x).sqrt()
            return near_ball(root if self.period is None else 2 * root.atan() / arb(self.period))

    def value(self, x: Any) -> Any:
        """Return L at a root x (ball) of a polynomial, as a complex ball; None if the end is a pole."""
        from flint import acb, acb_poly, arb

        from realize.kernels.exact.numbers import precision

        with precision(256):
            if x is None:
                low = self.d[self.degree]
                return acb(arb(self.n[self.degree])) / acb(arb(low)) if low else None
            s = acb(0, arb(x).sqrt()) if x else acb(0)
            if not x and not self.d[0]:
                return None
            return acb_poly(self.n)(s) / acb_poly(self.d)(s)

    def positive_roots(self, p: Any) -> list[Any]:
        """Return the distinct positive roots of a polynomial in x as real balls."""
        from realize.kernels.exact.numbers import exact_value
        from realize.kernels.exact.roots import roots

        if p.degree() < 1:
            return []
        return [
            root.exact if root.exact is not None else exact_value(root.at(200).real)
            for root in roots(p)
            if root.real and root.ball.real > 0
        ]


def _collected(loop: _Loop, stable: bool) -> LoopMargins:
    from realize.kernels.exact.numbers import near_ball, precision
    from realize.kernels.exact.polynomials import even_odd
    from realize.kernels.exact.positivity import square_modulus

    gain = square_modulus(loop.n) - square_modulus(loop.d) if loop.n else -square_modulus(loop.d)
    places: list[Any] = loop.positive_roots(gain)
    if not gain or (gain[0] == 0 and loop.n[0]):
        places.insert(0, 0)
    if gain and gain[loop.degree] == 0 and loop.n and loop.n[loop.degree]:
        places.append(None)
    gain_crossings = sorted((_gain_crossing(loop, x) for x in places), key=lambda c: c.frequency)

    from flint import fmpq_poly

    product = loop.n * fmpq_poly([-c if k % 2 else c for k, c in enumerate(loop.d.coeffs())])
    odd = even_odd(product)[1]
    in_x = fmpq_poly([-c if k % 2 else c for k, c in enumerate(odd.coeffs())])
    ends: list[Any] = [0, *loop.positive_roots(in_x), None]
    phase_crossings = []
    for x in ends:
        value = loop.value(x)
        if value is not None and value.real < 0:
            with precision(256):
                phase_crossings.append(PhaseCrossing(loop.frequency(x), near_ball(-1 / value.real)))
    phase_crossings.sort(key=lambda c: c.frequency)
    if not stable:
        return _unstable(tuple(gain_crossings), tuple(phase_crossings))

    up = [c for c in phase_crossings if c.factor > 1]
    down = [c for c in phase_crossings if c.factor < 1]
    first = min(up, key=lambda c: c.factor, default=PhaseCrossing(math.inf, math.inf))
    last = max(down, key=lambda c: c.factor, default=PhaseCrossing(math.inf, 0.0))
    nearest = min(gain_crossings, key=lambda c: abs(c.phase), default=None)
    delays = [c for c in gain_crossings if c.delay is not None]
    soonest = min(delays, key=lambda c: c.delay or 0.0, default=None)
    delay, at = (soonest.delay or 0.0, soonest.frequency) if soonest else (math.inf, math.inf)
    if loop.period is None:
        end = loop.value(None)
        if end is None or abs(float(end.real)) >= 1:
            # a gain of 1 or more without end: the least dead time destabilises
            delay, at = 0.0, math.inf
    closed = loop.n + loop.d
    tops = [square_modulus(p) for p in (closed, loop.d, loop.n)]
    sensitivity = largest_of(tops[:2], loop.period, [closed])
    complementary = largest_of([tops[0], tops[2]], loop.period, [closed]) if loop.n else Extreme(0.0, 0.0, 0.0)
    return LoopMargins(
        True,
        _claim("gain-margin", first.factor, first.frequency, "1"),
        _claim("gain-reduction-margin", last.factor, last.frequency, "1"),
        _claim(
            "phase-margin",
            abs(nearest.phase) if nearest else math.inf,
            nearest.frequency if nearest else math.inf,
            "degrees",
        ),
        _claim("delay-margin", delay, at, "s"),
        extreme_claim("largest-sensitivity", sensitivity, unit="1"),
        extreme_claim("largest-complementary-sensitivity", complementary, unit="1"),
        tuple(gain_crossings),
        tuple(phase_crossings),
    )


def _gain_crossing(loop: _Loop, x: Any) -> GainCrossing:
    from flint import arb

    from realize.kernels.exact.numbers import near_ball, precision

    frequency = loop.frequency(x)
    value = loop.value(x)
    with precision(160):
        angle = near_ball((-value).arg()) if not (value.imag.contains(0) and value.real > 0) else math.pi
        degrees = near_ball(arb(angle) * 180 / arb.pi())
    delay = (angle if angle > 0 else angle + 2 * math.pi) / frequency if 0 < frequency < math.inf else None
    if angle == 0 and delay is not None:
        delay = 0.0
    return GainCrossing(frequency, degrees, delay)


def _claim(name: str, value: float, frequency: float, unit: str) -> Claim:
    return judge(
        name,
        value,
        unit=unit,
        basis="proved",
        uncertainty=ROUNDING * value if math.isfinite(value) else 0.0,
        where={"frequency": frequency if math.isfinite(frequency) else None},
    )


def _unstable(gain: tuple[GainCrossing, ...], phase: tuple[PhaseCrossing, ...]) -> LoopMargins:
    note = "the loop u = -K y is not internally stable"

    def none(name: str, unit: str) -> Claim:
        return judge(name, None, unit=unit, basis="proved", note=note)

    def infinite(name: str) -> Claim:
        return judge(name, math.inf, unit="1", basis="proved", note=note)

    return LoopMargins(
        False,
        none("gain-margin", "1"),
        none("gain-reduction-margin", "1"),
        none("phase-margin", "degrees"),
        none("delay-margin", "s"),
        infinite("largest-sensitivity"),
        infinite("largest-complementary-sensitivity"),
        gain,
        phase,
    )


__all__ = ["GainCrossing", "LoopMargins", "PhaseCrossing", "loop_margins"]
