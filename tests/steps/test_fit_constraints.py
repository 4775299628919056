"""The verb fit with constraints: claims that hold on the returned model of any kind; contradictions in words."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from realize.errors import InputError, RealizeError, UsageError
from realize.models import FrequencyResponse, Ports, TimeBase
from realize.steps import fit

W = np.geomspace(0.05, 60, 90)
S = 1j * W


def data(values: np.ndarray, seed: int = 0, **more: Any) -> FrequencyResponse:
    rng = np.random.default_rng(seed)
    values = values if values.ndim == 3 else values[:, None, None]
    noise = rng.normal(size=values.shape) + 1j * rng.normal(size=values.shape)
    frequency = more.pop("frequency", W)
    return FrequencyResponse(frequency=frequency, frequency_unit="rad/s", response=values * (1 + 0.005 * noise), **more)


def plant(shape: tuple[int, int], seed: int = 3) -> np.ndarray:
    """Modes and an integrator with relative degree 2 in every channel."""
    rng = np.random.default_rng(seed)
    total = np.zeros((W.size, *shape), dtype=complex)
    for f in (0.7, 3.0):
        total += rng.normal(size=shape) / (S**2 + 0.1 * f * S + f**2)[:, None, None]
    return total + np.full(shape, 0.5) / (S * (S + 5))[:, None, None]


@pytest.mark.parametrize("shape", [(1, 1), (1, 3), (3, 1), (2, 2)])
@pytest.mark.parametrize("kind", ["state-space", "zero-pole-gain"])
def test_integrator_and_relative_degree(shape: tuple[int, int], kind: str) -> None:
    done = fit(data(plant(shape)), to=kind, order=6, relative_degree=2, integrators=1)
    receipt = done.receipt
    for name in ("relative-degree", "fixed-poles"):
        claim = receipt.claim(name)
        assert claim.holds is True, (name, claim)
        assert claim.basis == "proved"
    assert receipt.claim("rms-misfit").value < 0.02
    if kind == "state-space":
        assert done.model.order == 6 * min(shape)


@pytest.mark.parametrize("kind", ["state-space", "transfer-function"])
def test_sampled_channels_keep_steps_of_delay_and_a_zero(kind: str) -> None:
    period = 0.02
    w = np.linspace(0.02, 0.99, 90) * np.pi / period
    z = np.exp(1j * w * period)
    common = (z + 0.5) / ((z - 1) * (z**2 - 1.2 * z + 0.72) * (z - 0.3))
    values = np.stack([common, (z - 0.9) * common], axis=1)[:, :, None]
    values[:, 0] *= 2
    source = data(values, frequency=w, time=TimeBase(domain="sampled", period=period))
    done = fit(source, to=kind, order=4, relative_degree=2, integrators=1, fixed_zeros=[-0.5])
    for name in ("relative-degree", "fixed-poles", "fixed-zeros"):
        assert done.receipt.claim(name).holds is True, name
    assert done.receipt.claim("rms-misfit").value < 0.02


def test_poles_of_any_size_of_unit() -> None:
    for unit in (1e-300, 1e300):
        done = fit(data(unit * plant((1, 1))), order=6, relative_degree=2, integrators=1)
        assert done.receipt.claim("relative-degree").holds is True
    for unit in (1e-100, 1e100):
        source = data(plant((1, 1)), frequency=W * unit)
        done = fit(source, order=6, relative_degree=1, integrators=1, fixed_poles=[-5 * unit])
        assert done.receipt.claim("fixed-poles").holds is True


def test_a_line_at_a_fixed_pole_is_left_out() -> None:
    frequency = np.concatenate([[0.0], W])
    values = np.concatenate([[1e6], 2 / (S * (S + 1))])
    done = fit(data(values, frequency=frequency), order=2, relative_degree=2, integrators=1)
    assert any("left out" in text for text in done.receipt.cautions)
    assert done.receipt.claim("rms-misfit").value < 0.02


def test_rounded_residues_that_lose_the_roll_off_say_so() -> None:
    done = fit(data(1 / (S + 1) ** 3), to="pole-residue", order=3, relative_degree=3)
    assert done.receipt.claim("relative-degree").holds is False
    assert any("residues cannot cancel" in text for text in done.receipt.cautions)


def test_symmetric_with_a_gain_and_a_repeated_pole() -> None:
    one = 1 / (S**2 + 0.3 * S + 2)
    values = np.stack([one + 1 / (S + 1), -one, -one, 2 * one], axis=1).reshape(-1, 2, 2)
    gain = [[1.5, -0.5], [-0.5, 1.0]]
    done = fit(data(values), order=3, symmetric=True, steady_state_gain=gain, relative_degree=1)
    for name in ("symmetry", "steady-state-gain", "relative-degree"):
        assert done.receipt.claim(name).holds is True, name
    done = fit(data(1 / (S + 2) ** 2), order=2, fixed_poles=[-2, -2], relative_degree=2)
    assert done.receipt.claim("fixed-poles").value == 0


def test_a_gain_that_the_data_contradict_is_not_kept_in_silence() -> None:
    w = np.linspace(6, 1200, 300)
    values = 6e4 / (6e4 + 15j * w - w**2)
    words = "the data ask for another gain"
    wrong = fit(data(values, frequency=w), steady_state_gain=0.9)
    assert wrong.receipt.claim("steady-state-gain").holds is not False
    assert any(words in text for text in wrong.receipt.cautions), wrong.receipt.cautions
    right = fit(data(values, frequency=w), steady_state_gain=1.0)
    assert not any(words in text for text in right.receipt.cautions)


def test_the_misfit_of_responses_at_the_edge_of_the_doubles() -> None:
    """Misfits are subnormal numbers there."""
    done = fit(data(1e-303 / (S**2 + 0.1 * S + 1)), order=2)
    assert 0 < done.receipt.claim("rms-misfit").value < 0.02
    exact = FrequencyResponse(frequency=W, frequency_unit="rad/s", response=(1e-301 / (S + 1))[:, None, None])
    assert fit(exact, order=1).receipt.claim("rms-misfit").value < 1e-8


def test_estimated_dead_time_travels_with_the_model() -> None:
    done = fit(data(2 / (S + 1) * np.exp(-0.3 * S)), order=1, relative_degree=1, dead_time="auto")
    (row,) = done.receipt.details["dead_times"]
    assert row["seconds"] == pytest.approx(0.3, abs=0.01)
    assert done.model.dead_time is not None
    assert done.model.dead_time.total[0, 0] == row["seconds"]
    assert done.receipt.claim("rms-misfit").value < 0.02


def test_passive_as_the_ports_say() -> None:
    # 0.02 - 0.05 at w = 0: not passive
    impedance = 0.02 + 1 / (S + 1) - 1.1 / (S + 1.05)
    source = data(impedance, ports=Ports("impedance"))
    plain = fit(source, order=2)
    assert plain.receipt.claim("passivity").value > 0
    assert plain.receipt.claim("passivity").limit is None
    done = fit(source, order=2, passive="auto")
    assert done.receipt.claim("passivity").holds is True
    assert done.receipt.claim("passivity").basis == "proved"
    assert done.receipt.details["passivity"]["rms"] > 0
    assert any("made passive" in text for text in done.receipt.cautions)


@pytest.mark.parametrize(
    ("options", "error", "words"),
    [
        ({"integrators": 1, "steady_state_gain": 2.0}, UsageError, "infinite"),
        ({"relative_degree": 3, "order": 2}, UsageError, "no room"),
        ({"fixed_poles": [2.0]}, UsageError, "unstable"),
        ({"fixed_poles": [[-1.0, 2.0]]}, UsageError, "conjugate"),
        ({"fixed_poles": ["x"]}, UsageError, "neither a number"),
        ({"fixed_zeros": [0.0], "steady_state_gain": 1.0}, UsageError, "fixed zero at frequency 0"),
        ({"steady_state_gain": [[1.0, 2.0]]}, UsageError, "1 output"),
        ({"steady_state_gain": float("inf")}, UsageError, "integrators"),
        ({"steady_state_gain": "much"}, UsageError, "no number"),
        ({"relative_degree": -1}, UsageError, "whole number"),
        ({"integrators": 1.5}, UsageError, "whole number"),
        ({"dead_time": "guess"}, UsageError, "no dead time"),
        ({"passive": "auto"}, UsageError, "do not say"),
        ({"passive": "yes"}, UsageError, "there are"),
        ({"passive": "positive-real", "dead_time": 0.1}, UsageError, "no dead time"),
        ({"passive": "bounded-real", "integrators": 1}, UsageError, "no integrators"),
        ({"passive": "positive-real", "relative_degree": 2}, UsageError, "relative degree above 1"),
    ],
)
def test_contradictions(options: dict[str, Any], error: type[RealizeError], words: str) -> None:
    with pytest.raises(error, match=words):
        fit(data(1 / (S + 1)), **({"order": 3} | options))


def test_shapes_that_do_not_fit() -> None:
    wide = data(plant((1, 3)))
    with pytest.raises(InputError, match="square"):
        fit(wide, symmetric=True)
    with pytest.raises(UsageError, match="as many outputs"):
        fit(wide, passive="positive-real")
    scattering = data(0.5 / (S + 1), ports=Ports("scattering", (50.0,)))
    with pytest.raises(UsageError, match="bounded-real there"):
        fit(scattering, passive="positive-real")


@pytest.mark.parametrize("order", [0, 1])
def test_small_orders_and_zero_models(order: int) -> None:
    done = fit(data(np.full(W.size, 2.0 + 0j)), order=order, steady_state_gain=2.0)
    assert done.receipt.claim("steady-state-gain").holds is True
    silent = np.zeros((W.size, 2, 1), dtype=complex)
    silent[:, 0, 0] = 1 / (S * (S + 1))
    done = fit(data(silent), order=2 + order, relative_degree=2, integrators=1)
    assert done.receipt.claim("relative-degree").holds is True
    assert done.receipt.claim("fixed-poles").holds is True


def test_a_silent_response_has_nothing_to_constrain() -> None:
    silent = data(np.zeros(W.size, dtype=complex))
    for options in ({"integrators": 1}, {"steady_state_gain": 0.0}, {"relative_degree": 2}, {"fixed_zeros": [0.0]}):
        with pytest.raises(InputError, match="zero at every line"):
            fit(silent, **options)
    assert fit(silent, order=0, passive="positive-real").receipt.claim("passivity").value == 0
