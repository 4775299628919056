"""Impulse responses to models."""

from __future__ import annotations

import numpy as np
import pytest

from realize.errors import InputError, Refused, UsageError
from realize.fitting import fit_samples
from realize.kernels.exponentials import powers

POLES = np.array([0.9, 0.7 * np.exp(0.5j), 0.7 * np.exp(-0.5j), -0.8])
RESIDUES = np.array([0.3, 0.1 + 0.2j, 0.1 - 0.2j, 0.05])


def sampled(count: int, direct: float = 0.2) -> np.ndarray:
    return np.concatenate([[direct], np.real(powers(POLES, 0, count - 1) @ RESIDUES)])


def modal(modes: int, shape: tuple[int, int], count: int, rank: int, seed: int = 0) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    z = (1 - 10 ** rng.uniform(-2.5, -1, modes)) * np.exp(1j * np.sort(rng.uniform(0.05, 3.0, modes)))
    left = rng.normal(size=(modes, shape[0], rank)) + 1j * rng.normal(size=(modes, shape[0], rank))
    right = rng.normal(size=(modes, rank, shape[1])) + 1j * rng.normal(size=(modes, rank, shape[1]))
    residues = left @ right
    h = 2 * np.einsum("kn,npm->kpm", powers(z, 0, count - 1), residues).real
    return z, np.concatenate([rng.normal(size=(1, *shape)), h])


@pytest.mark.parametrize("unit", [1e-300, 1.0, 1e300])
@pytest.mark.parametrize("period", [1e-9, 1.0, 1e6])
@pytest.mark.parametrize("order", [4, "auto", (2, 6)])
def test_sampled_poles_residues_and_direct_term(unit: float, period: float, order: object) -> None:
    h = sampled(60)
    fit = fit_samples(h * unit, period, order=order)  # type: ignore[arg-type]
    assert fit.order == 4 and fit.method == "ho-kalman"
    assert fit.worst.value < 1e-14
    assert fit.direct[0, 0] == h[0] * unit
    for pole, residue in zip(POLES, RESIDUES, strict=True):
        j = int(np.argmin(np.abs(fit.poles - pole)))
        assert abs(fit.poles[j] - pole) < 1e-12
        assert abs(fit.residues[j, 0, 0] / unit - residue) < 1e-12
    slow = [row for row in fit.pole_table if not row.pair and fit.poles[row.index].real > 0]
    assert slow[0].frequency == pytest.approx(-np.log(0.9) / period)


def test_continuous_poles_of_samples() -> None:
    poles = np.array([-1.0, -0.3 + 4j, -0.3 - 4j])
    residues = np.array([2.0, 1 - 1j, 1 + 1j])
    t = 0.05 * np.arange(200)
    h = np.real(np.exp(poles * t[:, None]) @ residues)
    fit = fit_samples(h, 0.05, sampled=False)
    assert fit.order == 3 and fit.direct[0, 0] == 0
    assert fit.worst.value < 1e-14
    for pole, residue in zip(poles, residues, strict=True):
        j = int(np.argmin(np.abs(fit.poles - pole)))
        assert abs(fit.poles[j] - pole) < 1e-11
        assert abs(fit.residues[j, 0, 0] - residue) < 1e-11
    with pytest.raises(Refused, match="alternate"):
        fit_samples((-0.5) ** np.arange(20.0), 1.0, sampled=False)


@pytest.mark.parametrize("rank", [1, 2])
@pytest.mark.parametrize("shape", [(2, 2), (3, 1), (1, 3)])
@pytest.mark.parametrize("order", [12, "auto"])
def test_matrices_of_exact_samples(rank: int, shape: tuple[int, int], order: object) -> None:
    z, h = modal(6, shape, 600, min(rank, *shape))
    fit = fit_samples(h, 0.01, order=order)  # type: ignore[arg-type]
    assert fit.order == 12
    assert fit.worst.value < 1e-13
    assert max(np.min(np.abs(fit.poles - pole)) for pole in z) < 1e-11
    assert fit.misfit.shape == h.shape
    model = np.einsum("kn,npm->kpm", powers(fit.poles, 0, 599), fit.residues).real
    assert np.max(np.abs(model - h[1:] - fit.misfit[1:])) < 1e-13 * np.max(np.abs(h))


@pytest.mark.parametrize("level", [1e-4, 1e-2])
@pytest.mark.parametrize("seed", range(4))
def test_order_and_noise_are_found(level: float, seed: int) -> None:
    _, h = modal(6, (2, 2), 1000, 1, seed)
    rms = float(np.sqrt(np.mean(h[1:] ** 2)))
    noisy = h + level * rms * np.random.default_rng(seed + 50).normal(size=h.shape)
    fit = fit_samples(noisy, 1.0)
    assert fit.order == 12
    assert np.all(np.abs(fit.poles) < 1)
    assert fit.noise.level == pytest.approx(level * rms / np.sqrt(np.mean(noisy**2)), rel=0.1)
    assert fit.weighted == pytest.approx(1, abs=0.1)
    known = fit_samples(noisy, 1.0, order=12, deviation=level * rms)
    assert known.noise.basis == "given"
    assert known.weighted == pytest.approx(np.sqrt(1 - 60 / 4000), abs=0.05)


def test_channels_of_unlike_noise_are_weighted() -> None:
    z, h = modal(3, (1, 2), 800, 1)
    rng = np.random.default_rng(8)
    noise = rng.normal(size=h.shape) * np.array([1e-6, 0.3])
    fit = fit_samples(h + noise, 1.0, order=6)
    # the clean channel decides: its poles are as good as its noise
    alone = fit_samples(h[:, :, :1] + noise[:, :, :1], 1.0, order=6)
    for pole in z:
        assert np.min(np.abs(fit.poles - pole)) < 3 * np.min(np.abs(alone.poles - pole)) + 1e-8


def test_growing_samples_give_a_stable_model_and_a_caution() -> None:
    fit = fit_samples(1.05 ** np.arange(60.0), 1.0, order=1)
    assert abs(fit.poles[0]) < 1
    assert any("outside of the unit circle" in text for text in fit.cautions)


def test_the_direct_term_can_be_left_out() -> None:
    assert fit_samples(sampled(60), 1.0, direct=False).direct[0, 0] == 0
    assert fit_samples(sampled(60), 1.0, direct=False).worst.line == 0
    assert fit_samples(sampled(60, 0.0), 1.0, direct="auto").direct[0, 0] == 0
    assert fit_samples(sampled(60), 1.0, direct="auto").direct[0, 0] == 0.2


@pytest.mark.parametrize("order", [1, 2, "auto"])
def test_few_samples(order: object) -> None:
    for count in (3, 4, 5, 8):
        if order == 2 and count < 5:
            continue
        fit = fit_samples(0.5 ** np.arange(float(count)), 1.0, order=order)  # type: ignore[arg-type]
        assert fit.worst.value < 1e-12
    assert fit_samples([3.0], 1.0).order == 0
    assert fit_samples([3.0], 1.0).direct[0, 0] == 3
    assert fit_samples(np.zeros((5, 1, 1)), 1.0).order == 0
    assert fit_samples([[[1.0]], [[0.0]], [[0.0]]], 1.0).order == 0


def test_repeated_poles_are_reproduced_as_far_as_separate_poles_can() -> None:
    k = np.arange(200.0)
    fit = fit_samples(np.concatenate([[0.0], k * 0.9**k]), 1.0, order=2)
    assert fit.worst.value < 1e-9
    assert np.max(np.abs(fit.poles - 0.9)) < 1e-4


def test_samples_of_noise_alone_and_of_nothing_are_called_that() -> None:
    noise = np.random.default_rng(5).standard_normal(400)
    fit = fit_samples(noise, 1.0, sampled=False)
    assert fit.order == 0 and any("nothing stands out" in text for text in fit.cautions)
    assert any("all samples are zero" in text for text in fit_samples(np.zeros(50), 1.0).cautions)
    rings = 0.9 ** np.arange(400.0)
    assert fit_samples(rings + 0.01 * noise, 1.0).cautions == ()


def test_words() -> None:
    with pytest.raises(InputError, match="finite"):
        fit_samples([1.0, np.nan], 1.0)
    with pytest.raises(InputError, match="positive number of seconds"):
        fit_samples([1.0, 0.5], 0.0)
    with pytest.raises(InputError, match="at most 1"):
        fit_samples([1.0, 0.5, 0.3], 1.0, order=4)
    with pytest.raises(InputError, match="samples x outputs x inputs"):
        fit_samples(np.zeros((3, 2)), 1.0)
    with pytest.raises(InputError, match="greater than zero"):
        fit_samples([1.0, 0.5, 0.3], 1.0, deviation=0.0)
    with pytest.raises(UsageError, match="takes a frequency response"):
        fit_samples([1.0, 0.5, 0.3], 1.0, method="vector-fitting")
    with pytest.raises(UsageError, match="does not exist"):
        fit_samples([1.0, 0.5, 0.3], 1.0, method="guess")


@pytest.mark.parametrize("shape", [(2, 2), (3, 2)])
@pytest.mark.parametrize("true", [1, 2])
def test_exact_samples_get_the_ranks_of_their_residues(shape: tuple[int, int], true: int) -> None:
    _, h = modal(10, shape, 1200, true, 5)
    fit = fit_samples(h, 1.0)
    assert [row.rank for row in fit.pole_table] == [true] * 10
    assert fit.worst.value < 1e-13
    assert np.all(np.linalg.svd(fit.residues, compute_uv=False)[:, true:] < 1e-14 * np.max(np.abs(fit.residues)))


@pytest.mark.parametrize("seed", range(4))
def test_noise_does_not_raise_ranks(seed: int) -> None:
    _, h = modal(10, (2, 2), 1000, 1, seed)
    noise = 0.01 * float(np.sqrt(np.mean(h[1:] ** 2))) * np.random.default_rng(seed + 50).normal(size=h.shape)
    fit = fit_samples(h + noise, 1.0, order=20)
    assert [row.rank for row in fit.pole_table] == [1] * 10
    # the refitted model is what the misfit is of
    model = np.einsum("kn,npm->kpm", powers(fit.poles, 0, 999), fit.residues).real
    assert np.max(np.abs(model - (h + noise)[1:] - fit.misfit[1:])) < 1e-12 * np.max(np.abs(h))
    # rank 1: 20 poles' coordinates, and 6 numbers for each pair
    assert fit.bars is not None and fit.bars.freedom == 4 * 999 - 80
