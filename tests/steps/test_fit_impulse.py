"""The step `fit` with impulse responses."""

from __future__ import annotations

import numpy as np
import pytest

import realize
from realize.models import ImpulseResponse, TimeBase
from realize.steps.fit_samples import samples_of

PERIOD = 0.01
S = np.array([-1.0 + 20j, -0.6 + 55j, -3 + 130j])


def data(level: float, seed: int = 0, count: int = 600) -> ImpulseResponse:
    rng = np.random.default_rng(seed)
    left = rng.normal(size=(3, 2)) + 1j * rng.normal(size=(3, 2))
    right = rng.normal(size=(3, 2)) + 1j * rng.normal(size=(3, 2))
    h = 2 * np.einsum("kn,np,nm->kpm", np.exp(S * PERIOD * np.arange(count)[:, None]), left, right).real
    noise = np.random.default_rng(seed + 100).normal(size=h.shape) * np.sqrt(np.mean(h**2))
    return ImpulseResponse(period=PERIOD, samples=h + level * noise)


@pytest.mark.parametrize("level", [0.0, 0.01])
@pytest.mark.parametrize("sampled", [False, True])
def test_states_and_bars(level: float, sampled: bool) -> None:
    source = data(level)
    result = realize.fit(source, sampled=sampled)
    assert result.model.A.shape == (6, 6)
    reference = samples_of(result.model, PERIOD, 600)
    size = np.sqrt(np.mean(source.samples**2))
    assert np.sqrt(np.mean((reference - source.samples) ** 2)) < (1.05 * level + 1e-12) * size
    details = result.receipt.details
    assert details["samples"] == 600 and details["period"] == (PERIOD if sampled else None)
    assert [mode["rank"] for mode in details["modes"]] == [1, 1, 1]
    for mode, true in zip(details["modes"], S, strict=True):
        assert 0 < mode["frequency_deviation"] < (1e-3 if level else 1e-9) * mode["frequency"]
        assert abs(mode["frequency"] - abs(true)) < 5 * mode["frequency_deviation"]
        assert abs(mode["damping"] + true.real / abs(true)) < 5 * mode["damping_deviation"]
        assert len(mode["output_shape"]) == len(mode["input_shape_deviation"]) == 2
    assert details["bars"]["freedom"] > 2000 and np.all(np.array(details["gain"]["deviation"]) > 0)
    assert [row["output"] for row in details["channels"]] == [0, 0, 1, 1]


def test_runs_and_the_sampled_base() -> None:
    runs = [data(0.01).with_(samples=data(0.01).samples + 1e-3 * k, time=TimeBase("sampled", PERIOD)) for k in range(3)]
    result = realize.fit(runs)
    assert len(result.receipt.details["runs"]) == 3 and result.receipt.details["noise"]["basis"] == "given"
    assert result.receipt.details["bars"]["level"] >= 1
