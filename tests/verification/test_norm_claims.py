"""Norms, gaps and margins: closed forms, samples, the theorems they are for, odd models and refusals."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

import realize
from realize import StateSpace, TimeBase, TransferFunction
from realize.errors import InputError, Refused
from realize.kernels.norms import gains
from realize.verification import curves
from realize.verification.difference import linf_error
from realize.verification.feedback import chordal_distance

SAMPLED = {"time": TimeBase("sampled", 0.5)}


def fraction(numerator: Any, denominator: Any, **more: Any) -> TransferFunction:
    return TransferFunction(numerator=numerator, denominator=denominator, **more)


def random_states(seed: int, n: int, p: int, m: int, *, sampled: bool = False, direct: bool = True) -> StateSpace:
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n, n))
    if sampled:
        A *= rng.uniform(0.4, 1.6) / max(np.abs(np.linalg.eigvals(A)).max(), 1e-3)
    return StateSpace(
        A=A,
        B=rng.standard_normal((n, m)),
        C=rng.standard_normal((p, n)),
        D=rng.standard_normal((p, m)) * direct,
        **(SAMPLED if sampled else {}),
    )


def near(model: StateSpace, seed: int, size: float) -> StateSpace:
    rng = np.random.default_rng(seed)
    return model.with_(
        **{name: getattr(model, name) + size * rng.standard_normal(getattr(model, name).shape) for name in "ABCD"}
    )


def grid(model: Any, count: int = 3000) -> np.ndarray:
    if model.time.sampled:
        return np.linspace(0, math.pi / model.time.seconds, count)
    return np.concatenate([[0.0], np.geomspace(1e-3, 1e3, count), [1e7]])


def response(model: Any, w: np.ndarray) -> np.ndarray:
    return model.evaluate(model.time.points(w))


# largest gain


@pytest.mark.parametrize("damping", [0.5, 0.1, 1e-3, 1e-6, 1e-9])
@pytest.mark.parametrize("power", [0, 400, -400])
def test_resonance(damping: float, power: int) -> None:
    """1 / (s^2 + 2 d s + 1): peak 1 / (2 d sqrt(1 - d^2)) at sqrt(1 - 2 d^2)."""
    unit = math.ldexp(1.0, power)
    claim = realize.largest_gain(fraction([unit * unit], [1.0, 2 * damping * unit, unit * unit]))
    assert claim.basis == "proved"
    assert claim.value == pytest.approx(1 / (2 * damping * math.sqrt(1 - damping**2)), rel=1e-12)
    assert claim.where["frequency"] == pytest.approx(unit * math.sqrt(1 - 2 * damping**2), rel=1e-6)
    assert 0 < claim.uncertainty < 1e-12 * claim.value


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize(("n", "p", "m"), [(1, 1, 3), (3, 3, 1), (4, 2, 2), (6, 3, 3), (5, 2, 4), (12, 2, 2)])
def test_largest_gain_of_several_channels(n: int, p: int, m: int, sampled: bool) -> None:
    model = random_states(n + p, n, p, m, sampled=sampled)
    claim = realize.largest_gain(model)
    samples = gains(response(model, grid(model)))
    assert claim.basis == "proved"
    assert claim.value >= samples.max() * (1 - 1e-12)
    assert claim.uncertainty < 1e-11 * claim.value
    where = claim.where["frequency"]
    if where is None:
        attained = gains(model.D[None].astype(complex))[0]
    else:
        attained = gains(response(model, np.array([where])))[0]
    assert claim.value == pytest.approx(attained, rel=1e-9)


def test_a_pole_on_the_axis_is_infinite_with_its_frequency() -> None:
    twice = TransferFunction(
        numerator=[[[1.0], [0.0]], [[0.0], [1.0]]], denominator=[[[1.0, 0.0], [1.0]], [[1.0], [1.0, 0.0]]]
    )
    improper = TransferFunction(
        numerator=[[[1.0, 0.0], [0.0]], [[0.0], [1.0, 0.0]]], denominator=[[[1.0], [1.0]], [[1.0], [1.0]]]
    )
    for model, where in (
        (fraction([1.0], [1.0, 0.0]), 0.0),
        (fraction([1.0, 1.0], [1.0, 1.0, 4.0, 4.0]), 2.0),
        (twice, 0.0),
        (improper, None),
        (fraction([1.0], [1.0, 1.0], **SAMPLED), 2 * math.pi),
    ):
        claim = realize.largest_gain(model)
        assert claim.infinite and claim.value is None and claim.basis == "proved"
        assert claim.where["frequency"] == (pytest.approx(where, rel=1e-15) if where else where)


@pytest.mark.parametrize("gain", [1e-300, 1.0, 1e300])
def test_gains_of_any_size(gain: float) -> None:
    model = fraction([gain], [1.0, 1.0])
    assert realize.largest_gain(model).value == gain
    assert realize.h2_norm(model).value == pytest.approx(gain * math.sqrt(0.5), rel=1e-15, abs=0)
    assert realize.hankel_norm(model).value == pytest.approx(gain / 2, rel=1e-15, abs=0)


def test_two_poles_that_meet_in_a_descriptor_model() -> None:
    """E x' = A x + B u with an algebraic state: 1/(s + 2) + 3 from its second row."""
    model = StateSpace(A=[[-2.0, 0.0], [0.0, -1.0]], B=[[1.0], [3.0]], C=[[1.0, 1.0]], E=[[1.0, 0.0], [0.0, 0.0]])
    assert realize.largest_gain(model).value == pytest.approx(3.5, rel=1e-15)
    assert realize.gap_distance(model, fraction([3.0, 7.0], [1.0, 2.0])).value == 0.0


def test_no_states() -> None:
    model = StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, 1)), C=np.zeros((3, 0)), D=[[1.0], [2.0], [2.0]])
    assert realize.largest_gain(model).value == 3.0
    assert realize.h2_norm(model).infinite
    assert realize.hankel_norm(model).value == 0.0


def test_beyond_exact_arithmetic(monkeypatch: pytest.MonkeyPatch) -> None:
    """The Hamiltonian matrix and samples in doubles agree with the exact answers, and say that they are not."""
    first, small = random_states(3, 6, 2, 2), random_states(3, 6, 2, 2).with_(decimals={})
    second = near(small, 5, 0.01)
    exact = realize.largest_gain(first), realize.gap_distance(first, second)
    monkeypatch.setattr(curves, "MOST_MINORS", 0)
    rough = realize.largest_gain(first), realize.gap_distance(first, second)
    assert [claim.basis for claim in exact] == ["proved", "proved"]
    assert [claim.basis for claim in rough] == ["bounded", "measured"]
    assert rough[1].uncertainty is None
    for one, two in zip(exact, rough, strict=True):
        assert two.value == pytest.approx(one.value, rel=1e-5)
    with pytest.raises(Refused):
        realize.stability_margin(first, first)


# H2 and Hankel norm


def test_h2_closed_forms() -> None:
    for d in (0.5, 0.01, 1e-6):
        claim = realize.h2_norm(fraction([1.0], [1.0, 2 * d, 1.0]))
        assert claim.basis == "proved" and claim.value == pytest.approx(1 / math.sqrt(4 * d), rel=1e-14)
    # sum of a^(2k) with the feed-through
    assert realize.h2_norm(fraction([1.0, 0.0], [1.0, -0.5], **SAMPLED)).value == pytest.approx(
        math.sqrt(4 / 3), rel=1e-15
    )
    assert realize.h2_norm(fraction([1.0, 2.0, 3.0], [1.0, 0.0, 0.0], **SAMPLED)).value == pytest.approx(math.sqrt(14))
    assert realize.h2_norm(fraction([1.0, 1.0], [1.0, 2.0])).infinite
    for model in (fraction([1.0], [1.0, -1.0]), fraction([1.0], [1.0, 0.0]), fraction([1.0], [1.0, 1.0], **SAMPLED)):
        claim = realize.h2_norm(model)
        assert claim.value is None and not claim.infinite and "not stable" in claim.note


@pytest.mark.parametrize("sampled", [False, True])
def test_h2_is_the_sum_over_channels_and_that_of_the_gramian(sampled: bool) -> None:
    model = random_states(8, 7, 3, 2, sampled=sampled, direct=sampled)
    size = np.abs(np.linalg.eigvals(model.A)).max()
    model = model.with_(A=model.A * (0.8 / size) if sampled else model.A - (size + 0.1) * np.eye(7))
    whole = realize.h2_norm(model)
    parts = [
        realize.h2_norm(
            StateSpace(A=model.A, B=model.B[:, [j]], C=model.C[[i]], D=model.D[i : i + 1, [j]], time=model.time)
        )
        for i in range(3)
        for j in range(2)
    ]
    assert whole.basis == "proved"
    assert whole.value == pytest.approx(math.sqrt(sum(part.value**2 for part in parts)), rel=1e-14)
    from realize.kernels.norms import squared_norm

    assert whole.value == pytest.approx(squared_norm(model.A, model.B, model.C, model.D, sampled=sampled), rel=1e-12)


def test_hankel_closed_forms() -> None:
    assert realize.hankel_norm(fraction([1.0], [1.0, 4.0])).value == 0.125
    # all-pass: every Hankel singular value is 1
    assert realize.hankel_norm(fraction([1.0, -3.0, 5.0], [1.0, 3.0, 5.0])).value == pytest.approx(1.0, rel=1e-15)
    # finite impulse response: the singular values of its Hankel matrix
    claim = realize.hankel_norm(fraction([7.0, 1.0, 2.0, 3.0], [1.0, 0.0, 0.0, 0.0], **SAMPLED))
    hankel = np.array([[1.0, 2, 3], [2, 3, 0], [3, 0, 0]])
    assert claim.basis == "proved" and claim.value == pytest.approx(np.linalg.norm(hankel, 2), rel=1e-14)


def test_hankel_norm_of_the_stable_part() -> None:
    model = StateSpace(A=np.diag([-4.0, 1.0]), B=[[1.0], [1.0]], C=[[1.0, 1.0]])
    claim = realize.hankel_norm(model)
    assert claim.basis == "measured" and claim.value == pytest.approx(0.125, rel=1e-12) and "stable part" in claim.note


@pytest.mark.parametrize("seed", range(4))
def test_one_norm_is_never_below_another(seed: int) -> None:
    """Hankel norm <= L-infinity norm <= twice the sum of the Hankel singular values <= 2 n times the Hankel norm."""
    model = random_states(seed, 5, 1, 1, direct=False)
    model = model.with_(A=model.A - (np.linalg.eigvals(model.A).real.max() + 0.2) * np.eye(5))
    hankel, gain = realize.hankel_norm(model).value, realize.largest_gain(model).value
    assert hankel * (1 - 1e-12) <= gain <= 10 * hankel


# nu-gap


def numerical_gap(first: Any, second: Any) -> float:
    """Samples of the chordal distance, and the winding number counted from the phase of det(I + P2* P1)."""
    w = np.concatenate([-np.geomspace(1e5, 1e-5, 40001), np.geomspace(1e-5, 1e5, 40001)])
    one, two = response(first, np.abs(w)), response(second, np.abs(w))
    one, two = (np.where((w < 0)[:, None, None], v.conj(), v) for v in (one, two))
    det = np.linalg.det(np.eye(first.shape[1]) + two.conj().transpose(0, 2, 1) @ one)
    turns = np.sum(np.angle(det[1:] / det[:-1])) + np.angle(det[0] / det[-1])
    winding = -round(turns / (2 * math.pi))
    unstable = [int(np.sum(np.linalg.eigvals(model.A).real > 0)) for model in (first, second)]
    # zeros less poles in the right half-plane; a contour run upwards turns clockwise around it
    if winding + unstable[0] - unstable[1] != 0:
        return 1.0
    return float(chordal_distance(one, two).max())


@pytest.mark.parametrize("seed", range(12))
def test_gap_against_samples_and_a_counted_winding_number(seed: int) -> None:
    p, m = [(1, 1), (2, 1), (1, 2), (2, 2)][seed % 4]
    first = random_states(seed, 3, p, m)
    second = near(first, seed + 100, [0.02, 0.3, 1.0][seed % 3])
    claim = realize.gap_distance(first, second)
    assert claim.basis == "proved" and claim.uncertainty < 1e-11
    expected = numerical_gap(first, second)
    assert claim.value == pytest.approx(expected, rel=1e-5)
    assert claim.value >= expected * (1 - 1e-12)


@pytest.mark.parametrize("sampled", [False, True])
def test_gap_is_a_metric(sampled: bool) -> None:
    for seed in range(4):
        one = random_states(seed, 2, 2, 2, sampled=sampled)
        two, three = near(one, seed + 50, 0.1), near(one, seed + 60, 0.1)
        gaps = [realize.gap_distance(a, b).value for a, b in ((one, two), (two, three), (one, three), (two, one))]
        assert gaps[0] == pytest.approx(gaps[3], rel=1e-10)
        assert gaps[2] <= gaps[0] + gaps[1] + 1e-12
        assert realize.gap_distance(one, one.with_()).value == 0.0


@pytest.mark.parametrize("sampled", [False, True])
@pytest.mark.parametrize("seed", range(6))
def test_what_the_gap_is_for(seed: int, sampled: bool) -> None:
    """arcsin b(P2, K) >= arcsin b(P1, K) - arcsin delta(P1, P2); and b <= 1."""
    p, m = [(1, 1), (2, 1), (2, 2)][seed % 3]
    one = random_states(seed + 20, 2, p, m, sampled=sampled, direct=False)
    two = near(one, seed, 0.05)
    K = StateSpace(A=np.zeros((0, 0)), B=np.zeros((0, p)), C=np.zeros((m, 0)), D=0.3 * np.ones((m, p)), time=one.time)
    gap = realize.gap_distance(one, two)
    margins = [realize.stability_margin(model, K) for model in (one, two)]
    first, second = (margin.value for margin in margins)
    assert all(margin.basis == "proved" and 0 <= margin.value + margin.uncertainty <= 1 + 1e-12 for margin in margins)
    if first > gap.value:
        assert second > 0
        assert math.asin(second) >= math.asin(first) - math.asin(gap.value) - 1e-9
    closed = [np.linalg.eigvals(model.A - model.B @ K.D @ model.C) for model in (one, two)]
    for margin, poles in zip((first, second), closed, strict=True):
        assert (margin > 0) == bool(np.all(np.abs(poles) < 1) if sampled else np.all(poles.real < 0))


@pytest.mark.parametrize("seed", range(4))
def test_stability_margin_against_samples(seed: int) -> None:
    P = random_states(seed, 3, 2, 2, direct=False)
    P = P.with_(A=P.A - 3 * np.eye(3))
    K = random_states(seed + 9, 1, 2, 2).with_(A=[[-2.0]])
    K = K.with_(C=0.1 * K.C, D=0.1 * K.D)
    claim = realize.stability_margin(P, K)
    w = grid(P)
    p, k = response(P, w), response(K, w)
    stack = np.concatenate([p, np.broadcast_to(np.eye(2), p.shape)], axis=1)
    wide = np.concatenate([k, np.broadcast_to(np.eye(2), k.shape)], axis=2)
    size = gains(stack @ np.linalg.solve(np.eye(2) + k @ p, wide))
    assert claim.value == pytest.approx(1 / size.max(), rel=1e-4) and claim.value <= 1 / size.max()


def test_cancellation_between_plant_and_controller_is_not_stable() -> None:
    claim = realize.stability_margin(fraction([1.0], [1.0, -1.0]), fraction([1.0, -1.0], [1.0, 1.0]))
    assert claim.value == 0.0 and claim.basis == "proved"
    assert not realize.loop_margins(fraction([1.0], [1.0, -1.0]), fraction([1.0, -1.0], [1.0, 1.0])).stable


def test_the_gap_depends_on_units() -> None:
    one, two = fraction([1.0], [1.0, 1.0]), fraction([1.0], [1.0, 2.0])
    in_other_units = [model.with_(numerator=[[np.array([1e-3])]]) for model in (one, two)]
    assert realize.gap_distance(one, two).value > 100 * realize.gap_distance(*in_other_units).value
    assert "units" in realize.gap_distance(one, two).note


# margins


@pytest.mark.parametrize("sampled", [False, True])
def test_margins_are_where_stability_is_lost(sampled: bool) -> None:
    more = SAMPLED if sampled else {}
    loop = fraction([0.2, 0.1], [1.0, -1.2, 0.3], **more) if sampled else fraction([4.0], [1.0, 3.0, 3.0, 1.0])
    found = realize.loop_margins(loop)
    assert found.stable and found.gain_margin.basis == "proved"
    for factor, stable in ((1 - 1e-9, True), (1 + 1e-9, False)):
        K = fraction([found.gain_margin.value * factor], [1.0], **more)
        assert realize.loop_margins(loop, K).stable is stable
    w = np.linspace(1e-3, math.pi / 0.5, 40001) if sampled else np.geomspace(1e-3, 1e3, 40001)
    L = response(loop, w)[:, 0, 0]
    assert found.largest_sensitivity.value == pytest.approx(np.abs(1 / (1 + L)).max(), rel=1e-6)
    assert found.largest_complementary_sensitivity.value == pytest.approx(
        max(
            np.abs(L / (1 + L)).max(),
            abs(response(loop, np.zeros(1))[0, 0, 0] / (1 + response(loop, np.zeros(1))[0, 0, 0])),
        ),
        rel=1e-6,
    )
    for crossing in found.gain_crossings:
        value = response(loop, np.array([crossing.frequency]))[0, 0, 0]
        assert abs(value) == pytest.approx(1, rel=1e-12)
        assert np.angle(-value, deg=True) == pytest.approx(crossing.phase, rel=1e-9)
        late = value * np.exp(-1j * crossing.frequency * crossing.delay)
        assert late == pytest.approx(-1, rel=1e-9)
    for crossing in found.phase_crossings:
        value = response(loop, np.array([crossing.frequency]))[0, 0, 0]
        assert value * crossing.factor == pytest.approx(-1, rel=1e-9)


def test_a_conditionally_stable_loop_has_both_gain_margins() -> None:
    """k (s + 1)^2 / s^3 is stable for k > 1/2: the gain may fall, and may rise without end."""
    found = realize.loop_margins(fraction([1.0, 2.0, 1.0], [1.0, 0.0, 0.0, 0.0]))
    assert found.stable and found.gain_margin.infinite
    assert found.gain_reduction_margin.value == pytest.approx(0.5, rel=1e-14)
    assert found.gain_reduction_margin.where["frequency"] == pytest.approx(1.0, rel=1e-14)


def test_every_gain_crossing_is_listed() -> None:
    """A light resonance crosses 1 three times; the phase margin is the nearest one."""
    found = realize.loop_margins(fraction([0.2], [1.0, 0.02, 1.0, 0.0]))
    assert len(found.gain_crossings) == 3
    low = fraction([0.005], [1.0, 0.02, 1.0, 0.0])
    found = realize.loop_margins(low)
    assert found.stable and found.phase_margin.value == min(abs(c.phase) for c in found.gain_crossings)


def test_loops_without_crossings_and_loops_that_are_not_stable() -> None:
    found = realize.loop_margins(fraction([0.5], [1.0, 1.0]))
    assert found.stable and not found.gain_crossings and found.phase_margin.infinite and found.delay_margin.infinite
    found = realize.loop_margins(fraction([-2.0], [1.0, 1.0]))
    assert not found.stable and found.largest_sensitivity.infinite and found.gain_margin.value is None
    assert found.phase_crossings[0].factor == 0.5
    # a gain above 1 without end: no dead time at all is tolerated
    assert realize.loop_margins(fraction([2.0, 1.0], [1.0, 1.0])).delay_margin.value == 0.0


# in compare


def test_compare_has_the_gap_and_tight_norms_of_several_channels() -> None:
    one = random_states(2, 4, 2, 3, direct=False)
    one = one.with_(A=one.A - 4 * np.eye(4))
    two = near(one, 3, 1e-3).with_(D=np.zeros((2, 3)))
    record = realize.compare(one, two)
    for name in ("linf-error", "h2-error", "nu-gap"):
        assert record[name]["basis"] == "proved", name
        assert record[name]["uncertainty"] <= 1e-11 * record[name]["value"]
    w = grid(one)
    assert record["linf-error"]["value"] >= gains(response(two, w) - response(one, w)).max() * (1 - 1e-9)
    assert "units" in record["nu-gap"]["note"]
    # for stable plants the gap is at most the norm of the difference
    assert record["nu-gap"]["value"] <= record["linf-error"]["value"] + record["linf-error"]["uncertainty"]


def test_unstable_parts_that_cancel_have_an_h2_error() -> None:
    one = fraction([1.0, 0.0], [1.0, 0.0, -1.0])
    two = fraction([3.0, -1.0], [2.0, 0.0, -2.0])
    record = realize.compare(one, two)
    # 1/2 / (s - 1) + 1/2 / (s + 1) and 1/2 / (s - 1) + 1 / (s + 1)
    assert record["h2-error"]["value"] == pytest.approx(0.5 * math.sqrt(0.5), rel=1e-15)
    assert realize.compare(one, fraction([1.0], [1.0, 1.0]))["h2-error"]["value"] is None


def test_equal_dead_times_leave_the_gap_alone_and_others_do_not() -> None:
    dead = realize.DeadTime(inputs=(0.5,), outputs=(0.0,), channels=((0.0,),))
    one, two = fraction([1.0], [1.0, 1.0]), fraction([1.0], [1.0, 2.0])
    expected = realize.gap_distance(one, two).value
    assert realize.gap_distance(one.with_(dead_time=dead), two.with_(dead_time=dead)).value == expected
    assert realize.gap_distance(one.with_(dead_time=dead), two).value is None


def test_axis_poles_are_left_out_of_the_norm_of_a_difference() -> None:
    """Two channels with an integrator each, of slightly different gain: the origin is left out, the rest is proved."""
    one = TransferFunction(numerator=[[[1.0], [1.0]]], denominator=[[[1.0, 0.0], [1.0, 1.0]]])
    two = TransferFunction(numerator=[[[1.0], [1.001]]], denominator=[[[1.0, 0.0], [1.0, 1.0]]])
    claim = linf_error(one, two)
    assert claim.basis == "proved" and claim.value == pytest.approx(0.001, rel=1e-3)


# refusals


def test_what_is_refused() -> None:
    one = fraction([1.0], [1.0, 1.0])
    data = realize.FrequencyResponse(
        frequency=[1.0, 2.0], frequency_unit="rad/s", response=np.ones((2, 1, 1), dtype=complex)
    )
    dead = realize.DeadTime(inputs=(0.5,), outputs=(0.0,), channels=((0.0,),))
    for verb in (realize.largest_gain, realize.h2_norm, realize.hankel_norm):
        with pytest.raises(Refused):
            verb(data)
        with pytest.raises(InputError):
            verb(3.0)
    wide = StateSpace(A=[[-1.0]], B=[[1.0, 1.0]], C=[[1.0]])
    for refused, pair in (
        (InputError, (one, wide)),
        (Refused, (one, fraction([1.0], [1.0, 0.5], **SAMPLED))),
    ):
        for verb in (realize.gap_distance, realize.stability_margin, realize.loop_margins):
            with pytest.raises(refused):
                verb(*pair)
    with pytest.raises(Refused):
        realize.stability_margin(one.with_(dead_time=dead), one)
    with pytest.raises(InputError):
        realize.loop_margins(wide)
    with pytest.raises(Refused):
        realize.loop_margins(one.with_(dead_time=dead))


def test_a_conversion_is_taken_as_its_model() -> None:
    made = realize.convert(fraction([1.0], [1.0, 1.0]), "state-space")
    assert realize.largest_gain(made).value == pytest.approx(1.0, rel=1e-12)
    assert realize.gap_distance(made, made).value == 0.0
