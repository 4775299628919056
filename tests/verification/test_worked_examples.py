"""Ten worked examples of the claims' definitions (DESIGN 3.3), with the arithmetic spelled out."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
import pytest

from realize.models import DeadTime, Model, StateSpace, TimeBase, TransferFunction, ZeroPoleGain
from realize.schema import Claim
from realize.verification import Pair, View, conversion_claims


def plant(numerator: list[float], denominator: list[float], **more: object) -> TransferFunction:
    return TransferFunction(numerator=numerator, denominator=denominator, **more)


def matrix(numerators: list[list[list[float]]], denominators: list[list[list[float]]]) -> TransferFunction:
    return TransferFunction(numerator=numerators, denominator=denominators)


def claims(source: Model, result: Model, *, structured: bool = True) -> Mapping[str, Claim]:
    return {claim.name: claim for claim in conversion_claims(source, result, structured)}


def value(claim: Claim) -> float:
    return math.inf if claim.infinite else float(claim.value)  # type: ignore[arg-type]


def covers(claim: Claim, truth: float, slack: float = 1e-6) -> None:
    """The value is the truth to within `slack`, and value + uncertainty is not below it."""
    assert value(claim) == pytest.approx(truth, rel=slack)
    if claim.uncertainty is not None:
        assert value(claim) + claim.uncertainty >= truth * (1 - 1e-12)


def test_1_the_roll_off_of_a_dense_form() -> None:
    """1/(s+1)^3 in rotated coordinates.

    In exact arithmetic C B = C A B = 0 and the response falls as 1/s^3. After rounding, C B is some d of the size
    of 1e-17, so that the response is 1/s^3 + d/s far out: at 1e8 rad/s the first term is 1e-24 and the second 1e-25
    d/1e-17, a relative error of d 1e16, tens of per cent for d of 1e-17 to 1e-16. The band ends at 10 times the
    pole, 10 rad/s, where the error is d 1e2 + ..., below 1e-13; relative to the peak (1 at w = 0) it is below 1e-15
    everywhere.
    """
    source = plant([1.0], [1.0, 3.0, 3.0, 1.0])
    A = np.array([[-1.0, 1.0, 0.0], [0.0, -1.0, 1.0], [0.0, 0.0, -1.0]])
    # a rotation by 3-4-5 triangles in two planes: rounded entries
    Q = np.array([[0.6, -0.8, 0.0], [0.8, 0.6, 0.0], [0.0, 0.0, 1.0]]) @ np.array(
        [[1.0, 0.0, 0.0], [0.0, 5 / 13, -12 / 13], [0.0, 12 / 13, 5 / 13]]
    )
    B, C = Q @ np.array([[0.0], [0.0], [1.0]]), np.array([[1.0, 0.0, 0.0]]) @ Q.T
    dense = StateSpace(A=Q @ A @ Q.T, B=B, C=C)
    from fractions import Fraction

    d = abs(float(sum(Fraction(float(c)) * Fraction(float(b)) for c, b in zip(C[0], B[:, 0], strict=True))))
    assert 0 < d < 1e-15
    found = claims(source, dense, structured=False)
    assert value(found["response-error"]) < 1e-13
    assert value(found["peak-error"]) < 1e-15
    assert found["peak-error"].holds is True
    assert value(found["end-behaviour"]) == math.inf
    assert found["end-behaviour"].holds is None, "no limit for dense coordinates"
    # far out, the error is d w^2: |d/s| over |1/s^3|
    difference, size = Pair(View(source), View(dense)).sizes(np.array([1e8]))
    assert difference[0, 0, 0] / size[0, 0, 0] == pytest.approx(d * 1e16, rel=0.05)


def test_2_a_notch_on_the_axis() -> None:
    """(s^2 + 1)/(s^2 + s + 1) against (s^2 + 1 + e)/(s^2 + s + 1), e = 2^-40 = 9.1e-13.

    |dG| / |G| = e / |1 - w^2|, infinite at w = 1. The zero has damping 0, so from 1 - 1e-4 to 1 + 1e-4 rad/s the
    divisor is the larger |G| at the edges. Inside, |dG| = e/|D| is nearly constant; the largest ratio is just
    outside, at the lower edge: |1 - (1 - 1e-4)^2| = 2e-4 - 1e-8 = 1.9999e-4, so the claim is e / 1.9999e-4 =
    4.5477e-9 (outside, by the definition).
    """
    e = 2.0**-40
    found = claims(plant([1.0, 0.0, 1.0], [1.0, 1.0, 1.0]), plant([1.0, 0.0, 1.0 + e], [1.0, 1.0, 1.0]))
    covers(found["response-error"], e / 1.9999e-4, 1e-3)
    assert found["response-error"].where["frequency"] == pytest.approx(1.0, rel=2e-4)
    assert found["response-error"].holds is False
    # |1/(1 - w^2 + jw)| peaks where w^2 = 1/2: 1/sqrt(1/4 + 1/2) = 2/sqrt(3); |G| is 1 at 0 and at infinity
    covers(found["peak-error"], e * 2 / math.sqrt(3), 1e-6)
    assert value(found["end-behaviour"]) == 0.0


def test_3_an_integrator() -> None:
    """1/s: the band is that of a system without dynamics, 0 is not in it, and the peak is that of the band.

    (1 + 2^-33)/s: every error is 2^-33 = 1.16e-10. 1/(s + 1e-12): the pole has left the origin, which no band shows
    (1e-12/w is 1e-11 at 0.1 rad/s), and end-behaviour says so.
    """
    source = plant([1.0], [1.0, 0.0])
    found = claims(source, plant([1.0 + 2.0**-33], [1.0, 0.0]))
    for name in ("response-error", "peak-error", "end-behaviour"):
        covers(found[name], 2.0**-33)
        assert found[name].holds is not False
    left = claims(source, plant([1.0], [1.0, 1e-12]))
    assert value(left["response-error"]) < 1e-10
    assert left["end-behaviour"].holds is False and left["end-behaviour"].infinite


def test_4_a_pole_pair_on_the_axis() -> None:
    """1/(s^2 + 4): from 2 - 2e-4 to 2 + 2e-4 rad/s nothing is compared.

    Against 1/(s^2 + 4 + e), e = 2^-40: dG/G = -e / (4 + e - w^2); at the lower edge w = 2 (1 - 1e-4): 4 - w^2 = 4
    (2e-4 - 1e-8) = 7.9996e-4, so 9.095e-13 / 7.9996e-4 = 1.137e-9. The pole moved by e/4 = 2.3e-13 rad/s, far more
    than one unit in the last place of 2 (4.4e-16): end-behaviour is infinite.
    """
    e = 2.0**-40
    found = claims(plant([1.0], [1.0, 0.0, 4.0]), plant([1.0], [1.0, 0.0, 4.0 + e]))
    covers(found["response-error"], e / 7.9996e-4, 1e-3)
    assert found["end-behaviour"].infinite and found["end-behaviour"].holds is False
    damped = claims(plant([1.0], [1.0, 0.0, 4.0]), plant([1.0], [1.0, 2.0**-60, 4.0]))
    assert damped["end-behaviour"].infinite and "axis" in damped["end-behaviour"].note


def test_5_an_identically_zero_channel() -> None:
    """[1/(s+1), 0] against [1/(s+1), e/(s+1)], e = 2^-30.

    The Frobenius norm of the difference over that of the source is e everywhere. In the zero channel the divisor is
    the largest gain of the matrix, 1 at w = 0: channel-error e. The other way round a channel was lost:
    channel-error 1.
    """
    e = 2.0**-30
    one, pole = [1.0], [1.0, 1.0]
    source, other = matrix([[one, [0.0]]], [[pole, pole]]), matrix([[one, [e]]], [[pole, pole]])
    found = claims(source, other)
    covers(found["response-error"], e)
    covers(found["channel-error"], e)
    assert found["channel-error"].where["input"] == 1
    assert found["end-behaviour"].infinite
    lost = claims(other, source)
    covers(lost["channel-error"], 1.0)
    assert value(lost["response-error"]) < 1.01 * e
    assert lost["end-behaviour"].infinite and lost["end-behaviour"].holds is False


def test_6_a_sampled_model_near_one() -> None:
    """1/(z - p), p = 1 - 2^-30, period 1 ms, against p' = p - 2^-50.

    At w = 0: G = 2^30, G' = 1/(2^-30 + 2^-50) = 2^30 / (1 + 2^-20), so the relative error is 2^-20/(1 + 2^-20) =
    9.54e-7; that is the largest, because |z - p| grows with w. The pole is ln(p)/T = -2^-30/1e-3 = -9.3e-7 rad/s:
    the band starts at 9.3e-8 rad/s and ends at pi/T, and 0 belongs to it.
    """
    time = TimeBase("sampled", period=1e-3)
    p = 1 - 2.0**-30
    found = claims(plant([1.0], [1.0, -p], time=time), plant([1.0], [1.0, -(p - 2.0**-50)], time=time))
    truth = 2.0**-20 / (1 + 2.0**-20)
    covers(found["response-error"], truth)
    covers(found["peak-error"], truth)
    assert found["response-error"].where["frequency"] == 0.0
    assert found["response-error"].holds is False
    kept = claims(plant([1.0], [1.0, -1.0], time=time), plant([1.0], [1.0, -p], time=time))
    assert kept["end-behaviour"].infinite and "z = 1" in kept["end-behaviour"].note


def test_7_dead_time_must_come_along() -> None:
    """Dead time is no part of the fractions: where it is lost or changed, every claim is infinite.

    Input 0.1 s and output 0.2 s are the same as 0.3 s in the channel, to within a rounding.
    """
    source = plant([1.0], [1.0, 1.0], dead_time=DeadTime((0.1,), (0.2,), ((0.0,),)))
    same = plant([1.0], [1.0, 1.0], dead_time=DeadTime((0.0,), (0.0,), ((0.1 + 0.2,),)))
    lost = plant([1.0], [1.0, 1.0])
    assert value(claims(source, same)["response-error"]) == 0.0
    found = claims(source, lost)
    for name in ("response-error", "peak-error"):
        assert found[name].infinite and found[name].holds is False
    assert claims(lost, source)["response-error"].infinite


def test_8_a_lost_zero_far_below_the_other_numbers() -> None:
    """1e-14 (s + 5)/((s + 1)(s + 2)) against 5e-14/((s + 1)(s + 2)): the zero at -5 is lost.

    |dG| / |G| = |s| / |s + 5|; the band ends at 10 * 5 = 50 rad/s: 50/sqrt(50^2 + 5^2) = 0.99504. |dG| is 1e-14 w /
    (sqrt(w^2 + 1) sqrt(w^2 + 4)), largest at w = sqrt(2): 1e-14 sqrt(2)/(sqrt(3) sqrt(6)) = 1e-14/3; |G| is largest
    at 0: 2.5e-14. The peak error is 0.4/3 = 0.13333. The relative degree went from 1 to 2.
    """
    found = claims(plant([1e-14, 5e-14], [1.0, 3.0, 2.0]), plant([5e-14], [1.0, 3.0, 2.0]))
    covers(found["response-error"], 50 / math.hypot(50, 5))
    covers(found["peak-error"], 0.4 / 3)
    assert found["end-behaviour"].infinite and "relative degree 1 became 2" in found["end-behaviour"].note
    # a zero that makes up a billionth of a billionth of the band is still a zero: only end-behaviour knows
    far = claims(plant([2.0**-70, 1.0], [1.0, 3.0, 2.0]), plant([1.0], [1.0, 3.0, 2.0]))
    assert value(far["peak-error"]) < 1e-20
    assert far["end-behaviour"].infinite


def test_9_leading_coefficients_and_frobenius_norms() -> None:
    """[[3/(s+1)], [4/(s+1)]] against [[3/(s+1)], [4 (1 + e)/(s+1)]], e = 2^-20.

    The difference is 4 e/(s+1), the source 5/(s+1) in the Frobenius norm: response-error and peak-error 0.8 e; the
    second channel alone is off by e, and so is its leading coefficient.
    """
    e = 2.0**-20
    pole = [1.0, 1.0]
    source = matrix([[[3.0]], [[4.0]]], [[pole], [pole]])
    found = claims(source, matrix([[[3.0]], [[4.0 * (1 + e)]]], [[pole], [pole]]))
    covers(found["response-error"], 0.8 * e)
    covers(found["peak-error"], 0.8 * e)
    covers(found["channel-error"], e)
    covers(found["end-behaviour"], e, 1e-12)
    assert found["end-behaviour"].where == {"output": 1, "input": 0}
    assert found["end-behaviour"].basis == "proved"


def test_10_constants_and_order_zero() -> None:
    """2 against 2 (1 + 2^-30): every claim is 2^-30; 0 against 0: every claim is 0; 0 against 1: infinite."""
    empty = {"A": np.zeros((0, 0)), "B": np.zeros((0, 1)), "C": np.zeros((1, 0))}
    found = claims(plant([2.0], [1.0]), StateSpace(**empty, D=[[2.0 * (1 + 2.0**-30)]]))
    for name in ("response-error", "peak-error", "end-behaviour"):
        covers(found[name], 2.0**-30)
    assert found["order"].value == 0.0
    nothing = claims(plant([0.0], [1.0]), StateSpace(**empty, D=[[0.0]]))
    for name in ("response-error", "peak-error", "end-behaviour"):
        assert value(nothing[name]) == 0.0 and nothing[name].holds is not False
    something = claims(plant([0.0], [1.0]), plant([1.0], [1.0]))
    for name in ("response-error", "peak-error", "end-behaviour"):
        assert something[name].infinite and something[name].holds is False


# beyond the ten: places at which a largest value can hide


def test_a_spurious_light_pole_far_outside_of_the_band_counts() -> None:
    """1/(s+1) + 1/(s^2 + s + 1e12): at 1e6 rad/s the addition is 1/(1e6 j), 1e-6 of the peak, a million times its
    value in
    the band."""
    source = plant([1.0], [1.0, 1.0])
    result = plant([1.0, 2.0, 1.0 + 1e12], [1.0, 2.0, 1e12 + 1.0, 1e12])
    found = claims(source, result)
    assert value(found["peak-error"]) == pytest.approx(1e-6, rel=1e-3)
    assert found["peak-error"].holds is False


def test_a_difference_that_grows_for_ever_is_infinite() -> None:
    """1/(s+1) + 1e-20 s."""
    found = claims(plant([1.0], [1.0, 1.0]), plant([1e-20, 1e-20, 1.0], [1.0, 1.0]))
    assert found["peak-error"].infinite and found["peak-error"].holds is False


def test_a_difference_at_infinite_frequency_counts() -> None:
    """s/(s+1) against s/(s+1) + D: the difference is D at every frequency, and where it is constant nothing hides
    it.
    """
    found = claims(plant([1.0, 0.0], [1.0, 1.0]), plant([1.0 + 1e-6, 1e-6], [1.0, 1.0]))
    assert value(found["peak-error"]) == pytest.approx(1e-6, rel=1e-3)


def test_a_pole_that_crossed_the_axis_is_seen() -> None:
    """1/(s + 1e-18) against 1/(s - 1e-18): opposite signs at w = 0, a relative error of 2."""
    found = claims(plant([1.0], [1.0, 1e-18]), plant([1.0], [1.0, -1e-18]))
    assert value(found["response-error"]) == pytest.approx(2.0)


@pytest.mark.parametrize("gain", ["1e-400", "1e400"])
def test_errors_of_gains_beyond_doubles(gain: str) -> None:
    """A gain of 1e-400 that became nothing is off by 100 %; one that is right by 0 %."""
    limit = 0.0 if gain == "1e-400" else math.inf
    source = ZeroPoleGain(zeros=[], poles=[-1.0], gain=limit, decimals={"gain": {(0, 0): gain}})
    nothing = claims(source, plant([0.0], [1.0, 1.0]))
    for name in ("response-error", "peak-error"):
        assert value(nothing[name]) == pytest.approx(1.0)
        assert nothing[name].holds is False
    same = ZeroPoleGain(zeros=[], poles=[-1.0], gain=limit, decimals={"gain": {(0, 0): gain}})
    assert value(claims(source, same)["response-error"]) == 0.0
