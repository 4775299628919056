"""Conversions to data: grids, resonances, correctly rounded values, and what is refused."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from realize.errors import RealizeError, Refused, UsageError
from realize.files import read, write
from realize.models import (
    DeadTime,
    FrequencyResponse,
    ImpulseResponse,
    Model,
    StateSpace,
    TimeBase,
    TransferFunction,
    digest,
)
from realize.steps import compare, convert, explain, fit, inspect, reduce

RESONANT = TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 0.02, 4.0, 1.0])
SAMPLED = TransferFunction(numerator=[1.0, 0.5], denominator=[1.0, -0.5], time=TimeBase("sampled", period=0.1))
SEVERAL = TransferFunction(
    numerator=[[[1.0], [2.0, 1.0]], [[0.0], [3.0]]], denominator=[[[1.0, 1.0], [1.0, 2.0, 5.0]], [[1.0], [1.0, 1.0]]]
)


@pytest.mark.parametrize("plant", [RESONANT, SAMPLED, SEVERAL])
def test_every_value_is_right_to_what_the_claim_says(plant: Model, oracle: Any) -> None:
    made = convert(plant, "frequency-response")
    table = made.model
    assert isinstance(table, FrequencyResponse) and table.frequency_unit == "rad/s"
    claim = made.receipt.claim("response-error")
    assert claim.basis == "proved" and claim.holds and 0 < claim.value < 3e-16
    if plant.time.sampled:
        return  # the oracle's points are beside those of the unit circle
    for w, values in list(zip(table.frequency.tolist(), table.response, strict=True))[::5]:
        exact = oracle.at(plant, oracle.point(plant, w))
        difference = [
            complex(float(truth[0] - Fraction(float(value.real))), float(truth[1] - Fraction(float(value.imag))))
            for row, line in zip(exact, values, strict=True)
            for truth, value in zip(row, line, strict=True)
        ]
        assert np.linalg.norm(difference) <= claim.value * np.linalg.norm(values) * (1 + 1e-9)


def test_the_default_grid_is_dense_where_the_plant_rings() -> None:
    made = convert(RESONANT, "frequency-response")
    grid = made.receipt.details["grid"]
    assert grid["resonances"] == 1 and grid["fewest_points_at_a_resonance"] >= 5
    w, size = made.model.frequency, np.abs(made.model.response[:, 0, 0])
    fine = np.linspace(1.8, 2.2, 200_001)
    true_peak = np.abs(RESONANT.evaluate(1j * fine)).max()
    assert size[(w > 1.5) & (w < 2.5)].max() > 0.99 * true_peak
    coarse = convert(RESONANT, "frequency-response", band=(1.0, 10.0), count=5)
    assert coarse.model.frequency == pytest.approx(np.geomspace(1.0, 10.0, 5), rel=1e-15)
    assert any("resonances have fewer than 3 points" in text for text in coarse.receipt.cautions)


def test_given_grids_and_dead_time() -> None:
    late = RESONANT.with_(dead_time=DeadTime((0.25,), (0.0,), ((0.5,),)))
    made = convert(late, "frequency-response", frequencies=[3.0, 0.0, 1.0])
    assert made.model.frequency.tolist() == [0.0, 1.0, 3.0] and made.model.dead_time is None
    assert made.model.response[:, 0, 0] == pytest.approx(late.evaluate(1j * made.model.frequency)[:, 0, 0], rel=1e-13)
    banded = convert(RESONANT, "frequency-response", band=(0.5, 8.0)).model.frequency
    assert banded[0] == 0.5 and banded[-1] == 8.0


def test_a_pole_on_the_grid() -> None:
    plant = TransferFunction(numerator=[1.0], denominator=[1.0, 0.0, 4.0, 0.0])
    with pytest.raises(Refused, match="no finite response at 2 rad/s"):
        convert(plant, "frequency-response", frequencies=[1.0, 2.0])
    assert np.all(np.isfinite(convert(plant, "frequency-response").model.response))


def test_markov_parameters_are_exact() -> None:
    made = convert(SAMPLED, "impulse-response", count=8)
    assert isinstance(made.model, ImpulseResponse) and made.model.period == 0.1
    # (z + 1/2)/(z - 1/2) = 1 + 1/z + 1/(2 z^2) + ...
    assert made.model.samples[:, 0, 0].tolist() == [1.0, *(2.0**-k for k in range(7))]
    assert made.receipt.claim("peak-error").value == 0.0


def test_values_in_continuous_time_against_residues() -> None:
    """sum residue exp(pole t), from roots to 300 bits: another road than the matrix exponential."""
    from flint import acb, acb_poly, arb, fmpq, fmpq_poly

    from realize.kernels.exact.numbers import precision
    from realize.kernels.exact.roots import roots

    made = convert(RESONANT, "impulse-response")
    step, samples = made.model.period, made.model.samples[:, 0, 0]
    claim = made.receipt.claim("peak-error")
    assert claim.basis == "proved" and claim.value < 1e-15
    with precision(400):
        d = [fmpq(*float(c).as_integer_ratio()) for c in RESONANT.denominator[0][0][::-1]]
        below = acb_poly(d)
        poles = [root.at(300) for root in roots(fmpq_poly(d))]
        worst = 0.0
        for k in range(0, samples.size, 9):
            t = arb(fmpq(*step.as_integer_ratio()) * k)
            value = acb(0)
            for pole in poles:
                value += (pole + 2) / below.derivative()(pole) * (pole * t).exp()
            worst = max(worst, abs(float(value.real - arb(fmpq(*float(samples[k]).as_integer_ratio())))))
    assert 0 < worst <= claim.value * np.abs(samples).max()


def test_a_double_integrator_is_a_ramp() -> None:
    plant = TransferFunction(numerator=[1.0], denominator=[1.0, 0.0, 0.0])
    made = convert(plant, "impulse-response", period=0.25, count=5)
    assert made.model.samples[:, 0, 0].tolist() == [0.0, 0.25, 0.5, 0.75, 1.0]


def test_what_no_sample_can_hold_is_refused() -> None:
    with pytest.raises(Refused, match="feed-through"):
        convert(TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 3.0]), "impulse-response")
    with pytest.raises(Refused, match="more zeros than poles"):
        convert(TransferFunction(numerator=[1.0, 2.0, 0.0], denominator=[1.0, 3.0]), "impulse-response")
    with pytest.raises(Refused, match="beyond the range"):
        convert(TransferFunction(numerator=[1.0], denominator=[1.0, -1e3]), "impulse-response", period=1.0, count=10)


def test_data_are_a_source_of_fits_alone() -> None:
    for to in ("frequency-response", "impulse-response"):
        data = convert(SEVERAL if to == "frequency-response" else RESONANT, to).model
        verbs: list[Callable[[], Any]] = [
            lambda data=data: convert(data, "state-space"),
            lambda data=data: reduce(data, order=1),
        ]
        if to == "impulse-response":
            verbs.append(lambda data=data: compare(data, RESONANT))
        for verb in verbs:
            with pytest.raises(RealizeError):
                verb()
    assert inspect(data)["samples"] == data.samples.shape[0]
    stable = TransferFunction(numerator=[1.0, 2.0], denominator=[1.0, 0.9, 4.2, 1.0])
    assert fit(convert(stable, "impulse-response").model).model.order == 3


@pytest.mark.parametrize(
    "options",
    [
        {"to": "state-space", "count": 3},
        {"to": "impulse-response", "band": (1.0, 2.0)},
        {"to": "frequency-response", "period": 1.0},
        {"to": "frequency-response", "frequencies": [1.0], "count": 3},
        {"to": "frequency-response", "frequencies": [-1.0]},
        {"to": "frequency-response", "form": "modal"},
        {"to": "frequency-response", "count": 0},
    ],
)
def test_options_that_do_not_go_together(options: dict[str, Any]) -> None:
    with pytest.raises(UsageError):
        convert(RESONANT, **options)


def test_from_the_shell(tmp_path: Path, run: Callable[..., Any]) -> None:
    write(RESONANT, tmp_path / "plant.json")
    done = run(
        "convert",
        tmp_path / "plant.json",
        "--to",
        "frequency-response",
        "--frequencies",
        "0.1Hz,2,3",
        "-o",
        tmp_path / "table.json",
    )
    assert done.status == 0
    assert read(tmp_path / "table.json").frequency.tolist() == pytest.approx([0.2 * np.pi, 2.0, 3.0])
    done = run("convert", tmp_path / "plant.json", "--to", "impulse-response", "--period", "0.5", "--count", "4")
    assert done.status == 0 and len(done.record["samples"]) == 4 and done.record["kind"] == "impulse-response"
    made = convert(RESONANT, "impulse-response", period=0.5, count=4).model
    for suffix in ("json", "npz"):
        write(made, tmp_path / f"samples.{suffix}")
        assert digest(read(tmp_path / f"samples.{suffix}")) == digest(made)
    assert explain(RESONANT, "impulse-response")


@pytest.mark.parametrize("gain", [1e300, 1e-300])
def test_gains_near_the_ends_of_the_doubles(gain: float) -> None:
    plant = TransferFunction(
        numerator=[[[gain], [1.0]], [[1.0], [gain]]], denominator=[[[1.0, 1.0], [1.0, 2.0]], [[1.0, 1.0], [1.0, 3.0]]]
    )
    for to, name in (("frequency-response", "response-error"), ("impulse-response", "peak-error")):
        claim = convert(plant, to, count=5).receipt.claim(name)
        assert claim.holds and 0 < claim.value < 1e-15


def chain(masses: int) -> StateSpace:
    """Equal masses and springs in a row, force on the first and position of the last: a steep roll-off."""
    K = 2 * np.eye(masses) - np.eye(masses, k=1) - np.eye(masses, k=-1)
    zero, first = np.zeros((masses, masses)), np.eye(2 * masses)[:, masses : masses + 1]
    A = np.block([[zero, np.eye(masses)], [-K, -1e-3 * K]])
    return StateSpace(A=A, B=first, C=np.eye(2 * masses)[masses - 1 : masses])


def chain_value(masses: int, w: float) -> complex:
    """The same response from the recursion of the continuant, without elimination: no difference cancels much."""
    from flint import acb, ctx

    before, ctx.prec = ctx.prec, 2000
    try:
        s = acb(0, w)
        k = s * acb(1e-3) + 1
        a = s * s + 2 * k
        last, now = acb(1), a
        for _ in range(masses - 1):
            last, now = now, a * now - k * k * last
        return complex(k ** (masses - 1) / now)
    finally:
        ctx.prec = before


def test_doubles_claim_no_less_than_they_lose() -> None:
    plant = chain(115)
    low = convert(plant, "frequency-response", frequencies=[0.01, 0.2, 0.3])
    claim = low.receipt.claim("response-error")
    assert low.receipt.details["grid"]["points"] == 3 and claim.basis == "measured"
    for w, value in zip(low.model.frequency.tolist(), low.model.response[:, 0, 0].tolist(), strict=True):
        truth = chain_value(115, w)
        # the damping of the model is 1e-3 K rounded: each entry is 1e-3 or 2e-3 to the last bit
        assert abs(value - truth) <= claim.value * abs(truth)
    assert claim.holds is not True and claim.value < 1e-9
    # the roll-off there is beyond what doubles resolve: nothing is known of the digits
    high = convert(plant, "frequency-response", frequencies=[0.2, 20.0]).receipt.claim("response-error")
    assert high.infinite and high.holds is False
